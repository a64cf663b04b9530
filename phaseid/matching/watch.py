"""The watch list: phases that turn up where nobody put them."""

from __future__ import annotations

import tomllib
from collections.abc import Iterable
from dataclasses import dataclass, replace
from pathlib import Path

from phaseid.errors import InputError
from phaseid.resources import data_path
from phaseid.rings.table import read_text


@dataclass(frozen=True, slots=True)
class Watched:
    """A phase to look out for: `name` an entry of the starter library, or what a person calls it.

    `shipped` is True for an entry that comes with phaseid; `lists` and `why` say where from.
    """

    name: str
    shipped: bool
    lists: tuple[str, ...]
    why: tuple[str, ...]


def watch_lists(own: Iterable[Path] = (), *, shipped: bool = True) -> list[Watched]:
    """Every phase of the shipped lists and of the user's own, each once.

    An own list is a text file with one phase a line, what stands after # being the reason, or TOML
    laid out as the shipped ones with `phase` or `entry`. Raises InputError where one cannot be
    read.
    """
    found: dict[str, Watched] = {}
    files = sorted(data_path("watch").glob("*.toml")) if shipped else []
    for path in files:
        for watched in _from_toml(path.read_text(encoding="utf-8"), path):
            _note(found, watched)
    for path in own:
        text = read_text(path)
        reader = _from_toml if path.suffix.lower() == ".toml" else _from_text
        listed = reader(text, path)
        if not listed:
            raise InputError("names no phase", path=path, remedy="Write one phase a line.")
        for watched in listed:
            _note(found, watched)
    return list(found.values())


def _note(found: dict[str, Watched], watched: Watched) -> None:
    before = found.get(watched.name)
    if before is None:
        found[watched.name] = watched
        return
    found[watched.name] = replace(
        before, lists=before.lists + watched.lists, why=before.why + watched.why
    )


def _from_text(text: str, path: Path) -> list[Watched]:
    listed = []
    for line in text.splitlines():
        name, _, why = line.partition("#")
        if name.strip():
            reason = (why.strip(),) if why.strip() else ()
            listed.append(Watched(name.strip(), False, (path.stem,), reason))
    return listed


def _from_toml(text: str, path: Path) -> list[Watched]:
    try:
        held = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            f"is not TOML: {error}", path=path, remedy="Or name the list .txt, one phase a line."
        ) from None
    entries = held.get("phase", [])
    if not isinstance(entries, list) or not all(isinstance(entry, dict) for entry in entries):
        raise InputError(
            "holds no [[phase]] tables", path=path, remedy='Write [[phase]] and phase = "NaCl".'
        )
    about = str(held.get("about", path.stem))
    listed = []
    for entry in entries:
        name = entry.get("entry") or entry.get("phase")
        if not isinstance(name, str) or not name.strip():
            raise InputError(
                "a [[phase]] names no phase", path=path, remedy='Add a line phase = "NaCl".'
            )
        why = str(entry.get("why", ""))
        listed.append(Watched(name.strip(), "entry" in entry, (about,), (why,) if why else ()))
    return listed
