"""`phaseid config`: which defaults are in force, and from where."""

from __future__ import annotations

from typing import Annotated

import typer

from phaseid.cli.options import Json, say, width
from phaseid.cli.settings import (
    KEYS,
    calibration_folder,
    check_key,
    config_path,
    read_config,
    settings,
    variable,
    write_config,
)
from phaseid.errors import InputError

SCHEMA = "phaseid.config/1"


def config(
    key: Annotated[
        str | None,
        typer.Argument(
            metavar="KEY",
            help=f"One of: {', '.join(KEYS)}.",
            autocompletion=lambda incomplete: [k for k in KEYS if k.startswith(incomplete)],
        ),
    ] = None,
    value: Annotated[
        str | None, typer.Argument(metavar="VALUE", help="The default to write into the file.")
    ] = None,
    unset: Annotated[
        bool, typer.Option("--unset", help="Take KEY out of the configuration file.")
    ] = False,
    as_json: Json = False,
) -> None:
    """Show the defaults in force and where each comes from; set or unset one.

    What is typed wins over the environment ($PHASEID_PROBE and so on), which wins over the file.

    \b
    phaseid config
    phaseid config probe "electron 200 kV"
    phaseid config probe --unset
    """
    if key is not None:
        _change(key, value, unset=unset)
    elif unset:
        raise InputError("--unset needs a KEY", remedy=f"Name one of {', '.join(KEYS)}.")
    if as_json:
        _print_json()
    elif key is None:
        _print_table()


def _change(key: str, value: str | None, *, unset: bool) -> None:
    check_key(key)
    path = config_path()
    held = read_config(path)
    if unset and value is not None:
        raise InputError("--unset takes no VALUE", remedy=f"phaseid config {key} --unset")
    if unset:
        held.pop(key, None)
        write_config(held, path)
        return
    if value is None:
        setting = next(s for s in settings() if s.key == key)
        print(setting.value if setting.value is not None else "")
        if setting.value is None:
            say(f"{key} is not set.")
        return
    _check_value(key, value)
    write_config({**held, key: value}, path)
    say(f"{key} = {value}, in {path}")


def _check_value(key: str, value: str) -> None:
    """Refuse what the commands would refuse later."""
    if key == "probe":
        from phaseid.probes import parse_probe

        parse_probe(value)
    elif key == "calibration":
        from phaseid.rings.calibration_record import load_calibration

        load_calibration(value, calibration_folder())
    elif key in ("must", "only", "not"):
        from phaseid.matching.chemistry import Chemistry

        Chemistry.parse(
            value if key == "must" else None,
            value if key == "only" else None,
            value if key == "not" else None,
        )


def _print_json() -> None:
    from phaseid.reports.json import dumps

    print(
        dumps(
            {
                "schema": SCHEMA,
                "file": str(config_path()),
                "exists": config_path().is_file(),
                "settings": [
                    {
                        "key": s.key,
                        "value": s.value,
                        "origin": s.origin,
                        "variable": variable(s.key),
                    }
                    for s in settings()
                ],
                "calibrations": [
                    {"name": name, "text": text} for name, text in _calibrations().items()
                ],
            }
        )
    )


def _print_table() -> None:
    from phaseid.reports.plain import Column, table, wrap

    rows = [[s.key, "" if s.value is None else s.value, s.origin] for s in settings()]
    columns = (
        Column("setting", "left"),
        Column("value", "left", flexible=True),
        Column("from", "left", flexible=True),
    )
    print("\n".join(table(columns, rows, width())))
    state = "" if config_path().is_file() else " (not there yet)"
    print("\n" + "\n".join(wrap(f"File: {config_path()}{state}", width(), first="")))
    if held := _calibrations():
        print("\nSaved calibrations")
        for name, text in held.items():
            print("\n".join(wrap(f"{name}: {text}", width(), first="  ", indent="    ")))


def _calibrations() -> dict[str, str]:
    """Name and description of each saved calibration; a damaged one says so."""
    from phaseid.rings.calibration_record import calibration_names, load_calibration

    found = {}
    for name in calibration_names(calibration_folder()):
        try:
            found[name] = load_calibration(name, calibration_folder()).describe()
        except InputError as error:
            found[name] = error.what
    return found
