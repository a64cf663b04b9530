"""One structure made ready for the library: its row, its labels, its packed lines."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass

from phaseid import __version__
from phaseid.crystal.crystal import Crystal
from phaseid.library.formulas import composition_key, element_key, name_key
from phaseid.library.linetable import elements_bits
from phaseid.library.packing import STORED_FLOOR, pack_lines
from phaseid.library.quality import quality
from phaseid.library.records import findings_json, pack_crystal
from phaseid.library.strongest import block_parts, strongest_lines


@dataclass(frozen=True, slots=True)
class Entry:
    """A structure ready to be written.

    `content` is the SHA-256 (hex) of what the structure is, whatever its source calls it; `row` the
    columns of table `phase` by name, without ids; `labels` (kind, text, key) what it can be asked
    for by; `operations` and `structure` are the crystal, `lines` its lines, `block` what the blocks
    hold of it.
    """

    content: str
    row: dict[str, str | int | float | None]
    labels: tuple[tuple[str, str, str], ...]
    operations: str
    structure: bytes
    lines: bytes
    block: Mapping[str, bytes]


def entry(crystal: Crystal, location: str) -> Entry:
    """Compute the lines of a structure and make its entry; `location` says where its file lies."""
    from phaseid.crystal.composition import cell_contents, density_of_contents
    from phaseid.crystal.content_key import content_key
    from phaseid.crystal.lines import compute_lines, trim

    lines = trim(compute_lines(crystal), STORED_FLOOR)
    contents = cell_contents(crystal)
    source = crystal.source
    a, b, c, alpha, beta, gamma = crystal.cell
    elements = sorted({element_key(symbol) for symbol in contents})
    trust = quality(crystal)
    row: dict[str, str | int | float | None] = {
        "name": crystal.name or crystal.formula,
        "formula": crystal.formula,
        "formula_key": composition_key(contents),
        "elements": " ".join(elements),
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
        "quality": trust,
        "complete_to_A": lines.complete_to_A,
        "floor": lines.floor,
        "computed_by": __version__,
        "temperature_K": crystal.temperature_K,
    }
    operations, structure = pack_crystal(crystal)
    strong = strongest_lines(lines) if len(lines.d_A) else {}
    return Entry(
        content=hashlib.sha256(content_key(crystal).encode()).hexdigest(),
        row=row,
        labels=_labels(crystal),
        operations=operations,
        structure=structure,
        lines=pack_lines(lines),
        block=block_parts(elements_bits(elements), trust, strong),
    )


def _labels(crystal: Crystal) -> tuple[tuple[str, str, str], ...]:
    names = (crystal.name, *crystal.other_names)
    labels = [("name", name, name_key(name)) for name in names if name_key(name)]
    if crystal.source.id:
        number = crystal.source.id.casefold()
        labels.append(("number", f"{crystal.source.database} {crystal.source.id}", number))
    return tuple(labels)
