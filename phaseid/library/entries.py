"""One structure made ready for the library: its row, its labels, its packed lines."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass

from phaseid.crystal.crystal import Crystal
from phaseid.library.formulas import composition_key, element_key, name_key
from phaseid.library.linetable import pack_lines
from phaseid.library.quality import quality
from phaseid.library.records import findings_json, pack_crystal

STORED_FLOOR = 1e-3
"""Lines weaker than this fraction of the strongest, for every probe, are not stored."""


@dataclass(frozen=True, slots=True)
class Entry:
    """A structure ready to be written.

    `content` is the SHA-256 (hex) of what the structure is, whatever its source calls it; `row` the
    columns of table `phase` by name, without ids; `labels` (kind, text, key) what it can be asked
    for by.
    """

    content: str
    row: dict[str, str | int | float]
    labels: tuple[tuple[str, str, str], ...]
    structure: bytes
    lines: bytes


def entry(crystal: Crystal, location: str) -> Entry:
    """Compute the lines of a structure and make its entry; `location` says where its file lies."""
    from phaseid.crystal.composition import cell_contents, density_of_contents
    from phaseid.crystal.content_key import content_key
    from phaseid.crystal.lines import compute_lines, trim

    lines = trim(compute_lines(crystal), STORED_FLOOR)
    contents = cell_contents(crystal)
    source = crystal.source
    a, b, c, alpha, beta, gamma = crystal.cell
    row: dict[str, str | int | float] = {
        "name": crystal.name or crystal.formula,
        "formula": crystal.formula,
        "formula_key": composition_key(contents),
        "elements": " ".join(sorted({element_key(symbol) for symbol in contents})),
        "space_group_number": crystal.space_group_number,
        "space_group_symbol": crystal.space_group_symbol,
        "a_A": a,
        "b_A": b,
        "c_A": c,
        "alpha_deg": alpha,
        "beta_deg": beta,
        "gamma_deg": gamma,
        "volume_A3": lines.volume_A3,
        "density_g_cm3": density_of_contents(contents, lines.volume_A3),
        "source_database": source.database,
        "source_id": source.id,
        "source_file": source.file,
        "source_reference": source.reference,
        "location": location,
        "findings": findings_json(crystal.findings),
        "quality": quality(crystal),
        "complete_to_A": lines.complete_to_A,
        "floor": lines.floor,
    }
    return Entry(
        content=hashlib.sha256(content_key(crystal).encode()).hexdigest(),
        row=row,
        labels=_labels(crystal),
        structure=pack_crystal(crystal),
        lines=pack_lines(lines),
    )


def _labels(crystal: Crystal) -> tuple[tuple[str, str, str], ...]:
    names = (crystal.name, *crystal.other_names)
    labels = [("name", name, name_key(name)) for name in names if name_key(name)]
    if crystal.source.id:
        number = crystal.source.id.casefold()
        labels.append(("number", f"{crystal.source.database} {crystal.source.id}", number))
    return tuple(labels)
