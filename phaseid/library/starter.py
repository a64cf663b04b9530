"""The structures that come with phaseid: its own CIF files, then prototypes they do not cover."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

from phaseid.crystal.cif import read_cif
from phaseid.crystal.composition import cell_contents
from phaseid.crystal.crystal import Crystal, Finding, Source
from phaseid.errors import LibraryError
from phaseid.library.formulas import composition_key
from phaseid.library.prototypes import MARKS, prototype_crystals
from phaseid.resources import data_path

DATABASE = "phaseid starter"

_SAME_CELL = 0.01  # relative difference of the edges within which ours stands for a prototype
MIRROR_IMAGE = {78: 76, 95: 91, 96: 92, 145: 144, 153: 151, 154: 152, 170: 169, 172: 171}
MIRROR_IMAGE |= {179: 178, 181: 180, 213: 212}
"""The eleven pairs of space groups that are mirror images: their powder patterns are the same."""
_MARK = re.compile(rb"^_phaseid_mark\s+(\S+)", re.MULTILINE)
_REFERENCE = re.compile(rb'^_publ_section_references\s+"(.*)"\s*$', re.MULTILINE)


def starter_crystals() -> Iterator[Crystal]:
    """Yield every shipped structure, in a fixed order; ours first.

    Raises LibraryError where a shipped file cannot be read: the installation is damaged.
    """
    kinds: dict[tuple[str, int], list[Crystal]] = {}
    for crystal in _shipped():
        kinds.setdefault(_kind(crystal), []).append(crystal)
        yield crystal
    for crystal in prototype_crystals():
        if not any(_near(crystal, other) for other in kinds.get(_kind(crystal), [])):
            yield crystal


def shipped_crystal(stem: str) -> Crystal:
    """Return the shipped structure whose file is called `stem`; raises LibraryError as above."""
    path = next(data_path("starter").rglob(f"{stem}.cif"), None)
    if path is None:
        raise LibraryError(f"the structure {stem} should come with phaseid. Install phaseid again.")
    return next(_read(path))


def _shipped() -> Iterator[Crystal]:
    for path in sorted(data_path("starter").rglob("*.cif")):
        yield from _read(path)


def _read(path: Path) -> Iterator[Crystal]:
    data = path.read_bytes()
    reading = read_cif(data, path.name)
    if reading.rejects or not reading.crystals:
        reason = reading.rejects[0].reason if reading.rejects else "no structure in it"
        raise LibraryError(
            f"{path}: a structure that comes with phaseid cannot be read ({reason}). "
            "Install phaseid again."
        )
    for crystal in reading.crystals:
        yield _sourced(crystal, data, path.stem)


def _sourced(crystal: Crystal, data: bytes, stem: str) -> Crystal:
    """Add what the shipped files say beyond the CIF dictionary: the reference and a mark.

    Their common name goes before the mineral's: TiN is titanium nitride to those who meet it,
    osbornite to few.
    """
    stated = _REFERENCE.search(data)
    reference = crystal.source.reference or (stated[1].decode() if stated else "")
    findings = crystal.findings
    mark = _MARK.search(data)
    code = mark[1].decode().strip("'\"") if mark else ""
    if code and code not in {finding.code for finding in findings}:
        findings = (*findings, Finding(code, MARKS.get(code, code)))
    source = Source(DATABASE, stem, crystal.source.file, reference)
    *minerals, name = (crystal.name, *crystal.other_names)
    return replace(
        crystal, source=source, findings=findings, name=name, other_names=tuple(minerals)
    )


def _kind(crystal: Crystal) -> tuple[str, int]:
    number = crystal.space_group_number
    return composition_key(cell_contents(crystal)), MIRROR_IMAGE.get(number, number)


def _near(one: Crystal, other: Crystal) -> bool:
    edges = zip(sorted(one.cell[:3]), sorted(other.cell[:3]), strict=True)  # axes may be permuted
    return all(abs(a - b) <= _SAME_CELL * b for a, b in edges)
