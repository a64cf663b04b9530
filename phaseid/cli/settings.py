"""Defaults in force: from the environment, else from the configuration file."""

from __future__ import annotations

import os
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path

from phaseid.errors import InputError

VARIABLE = "PHASEID_CONFIG"
_MAX_BYTES = 1_000_000
KEYS = {
    "library": "the library searched",
    "probe": "the probe where a list or a command names none",
    "calibration": "the saved calibration for radii that state no camera constant",
    "must": "elements the answer's phases hold together",
    "only": "no element but these",
    "not": "none of these elements",
}


@dataclass(frozen=True, slots=True)
class Setting:
    """A default in force; `value` None where none is set. `origin` says where it is from."""

    key: str
    value: str | None
    origin: str


def config_path() -> Path:
    """$PHASEID_CONFIG, else config.toml in the user's folder for phaseid."""
    named = os.environ.get(VARIABLE, "")
    if named:
        return Path(named)
    from platformdirs import user_config_path

    return user_config_path("phaseid", appauthor=False) / "config.toml"


def calibration_folder() -> Path:
    """Where saved calibrations lie: beside the configuration file."""
    return config_path().parent / "calibrations"


def variable(key: str) -> str:
    """The environment variable of a setting."""
    return f"PHASEID_{key.upper()}"


def settings() -> list[Setting]:
    """Every setting, in force or not; raises InputError where the file cannot be read."""
    held = read_config(config_path())
    found = []
    for key in KEYS:
        if named := os.environ.get(variable(key), ""):
            found.append(Setting(key, named, f"${variable(key)}"))
        elif key in held:
            found.append(Setting(key, held[key], str(config_path())))
        else:
            found.append(Setting(key, None, "not set"))
    return found


def setting(key: str) -> str | None:
    """The value in force of one setting, None where it is not set."""
    return next(s.value for s in settings() if s.key == key)


def read_config(path: Path) -> dict[str, str]:
    """The settings of a configuration file, none where there is no file.

    Raises InputError where it cannot be read, or has a key that is none or a value that is no text.
    """
    try:
        with path.open("rb") as file:
            text = file.read(_MAX_BYTES).decode("utf-8")
    except FileNotFoundError:
        return {}
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "it is not UTF-8 text"
        raise InputError(
            f"the configuration cannot be read: {reason}",
            path=path,
            remedy="Correct the file or move it away.",
        ) from None
    import tomllib

    try:
        held = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # TOMLDecodeError is a ValueError
        raise InputError(
            f"is not TOML: {error}", path=path, remedy='Write lines such as probe = "x-ray Cu Ka".'
        ) from None
    for key, value in held.items():
        check_key(key, path)
        if not isinstance(value, str):
            raise InputError(
                f"{key} is not text", path=path, remedy=f'Write it in quotes: {key} = "{value}".'
            )
    return held


def check_key(key: str, path: Path | None = None) -> None:
    """Raise InputError, with the nearest name, where a setting is none."""
    if key not in KEYS:
        close = get_close_matches(key, KEYS, n=1)
        hint = f"Did you mean '{close[0]}'? " if close else ""
        raise InputError(
            f"'{key}' is no setting", path=path, remedy=f"{hint}There are: {', '.join(KEYS)}."
        )


def write_config(held: dict[str, str], path: Path) -> None:
    """Write a configuration file, whole or not at all; raises InputError where that fails."""
    import json

    lines = ["# Defaults of phaseid; `phaseid config` shows what is in force."]
    lines += [f"{key} = {json.dumps(value, ensure_ascii=False)}" for key, value in held.items()]
    if path.exists() and not path.is_file():  # a folder or a device, which must not be replaced
        raise InputError(
            "is no file that settings can be kept in",
            path=path,
            remedy=f"Set ${VARIABLE} to a file that can be written.",
        )
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        part.write_bytes(("\n".join(lines) + "\n").encode("utf-8"))
        part.replace(path)
    except UnicodeEncodeError:
        raise InputError(
            "the value is no text that can be kept", remedy="Write it in UTF-8."
        ) from None
    except OSError as error:
        part.unlink(missing_ok=True)
        raise InputError(
            f"cannot be written: {(error.strerror or str(error)).lower()}",
            path=path,
            remedy=f"Set ${VARIABLE} to a file that can be written.",
        ) from None


def command_defaults() -> dict[str, dict[str, str]]:
    """Options of commands that settings replace; what is typed wins over them."""
    given = {s.key: s.value for s in settings() if s.value is not None}
    chemistry = {
        name: given[key]
        for key, name in (("must", "must"), ("only", "only"), ("not", "exclude"))
        if key in given
    }
    probe = {"probe": given["probe"]} if "probe" in given else {}
    return {
        "identify": chemistry,
        "report": chemistry,
        "series": chemistry,
        "near": {**chemistry, **probe},
        "lines": dict(probe),
        "compare": dict(probe),
    }
