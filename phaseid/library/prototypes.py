"""The AFLOW prototype structures that pymatgen carries, as crystals in their conventional cells.

M. J. Mehl, D. Hicks, C. Toher, O. Levy, R. M. Hanson, G. Hart, S. Curtarolo, "The AFLOW Library of
Crystallographic Prototypes: Part 1", Comput. Mater. Sci. 136, S1-S828 (2017). Each entry names the
measurement behind it. data/starter/aflow_review.toml says which of them are left out and why.
"""

from __future__ import annotations

import gzip
import json
import re
import tomllib
import warnings
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING, Any

from phaseid.crystal.crystal import Crystal, Finding, Site, Source
from phaseid.errors import LibraryError
from phaseid.library.formulas import composition_key, formula_keys
from phaseid.resources import data_path

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

DATABASE = "AFLOW prototypes"
MARKS = {
    "high_pressure": "this form is met at high pressure",
    "high_temperature": "this form is met at high temperature",
    "low_temperature": "this form is met at low temperature",
    "hypothetical": "nobody is known to have made this structure",
    "metastable": "this form is metastable at ambient conditions",
}
_TOLERANCE_A = 1e-3
_COINCIDENT = 1e-4  # of a cell edge


@dataclass(frozen=True, slots=True)
class Review:
    """What was decided about one prototype: use it or not, its name, a mark."""

    use: bool
    name: str
    mark: str


def prototype_file() -> Path:
    """Return the path of pymatgen's file; raises LibraryError where it is not found."""
    spec = find_spec("pymatgen")
    for folder in [] if spec is None else spec.submodule_search_locations or []:
        for path in sorted(Path(folder, "analysis").rglob("aflow_prototypes.json*")):
            return path
    raise LibraryError(
        "pymatgen's file of prototype structures (aflow_prototypes.json.gz) is not installed. "
        "Install pymatgen again: pip install --force-reinstall pymatgen"
    )


def prototype_crystals() -> Iterator[Crystal]:
    """Yield the prototypes that the review keeps, in the order of the file."""
    path = prototype_file()
    data = path.read_bytes()
    entries = json.loads(gzip.decompress(data) if path.suffix == ".gz" else data)
    reviews = read_reviews(data_path("starter", "aflow_review.toml"))
    tags = Counter(entry["tags"]["aflow"] for entry in entries)
    for entry in entries:
        review = reviews.get((entry["tags"]["aflow"], _composition(entry)))
        if review is not None and not review.use:
            continue
        yield _crystal(entry, review, unique=tags[entry["tags"]["aflow"]] == 1)


def read_reviews(path: Path) -> dict[tuple[str, str], Review]:
    """Return the decisions by AFLOW tag and composition key."""
    with path.open("rb") as file:
        held = tomllib.load(file)["entry"]
    return {
        (entry["tag"], formula_keys(entry["formula"])[0]): Review(
            entry["use"], entry.get("name", ""), entry.get("mark", "")
        )
        for entry in held
    }


def _composition(entry: dict[str, Any]) -> str:
    return composition_key(Counter(site["species"][0]["element"] for site in entry["snl"]["sites"]))


def _crystal(entry: dict[str, Any], review: Review | None, *, unique: bool) -> Crystal:
    from phaseid.crystal.composition import reduced

    tags, given = entry["tags"], entry["snl"]["sites"]
    symbols = [site["species"][0]["element"] for site in given]
    kinds = sorted(set(symbols))
    standard = _standardised(
        entry["snl"]["lattice"]["matrix"],
        [site["abc"] for site in given],
        [kinds.index(symbol) for symbol in symbols],
    )
    contents = Counter(kinds[kind] for kind in standard.kinds)
    formula, z = reduced({symbol: float(n) for symbol, n in contents.items()})
    sites = tuple(
        Site(f"{kinds[kind]}{number}", kinds[kind], 0, fract, occupancy=1.0)
        for number, (fract, kind) in enumerate(standard.asymmetric_unit(), start=1)
    )
    mark = "" if review is None else review.mark
    return Crystal(
        cell=standard.cell,
        space_group_number=standard.number,
        space_group_symbol=standard.symbol,
        operations=standard.operations,
        sites=sites,
        name=plain_name(tags["mineral"]) if review is None else review.name,
        formula=formula,
        z=z,
        source=Source(
            database=DATABASE,
            id=tags["aflow"] if unique else f"{tags['aflow']}.{formula}",
            file=prototype_file().name,
            reference=plain_reference(entry["snl"]["about"]["references"]),
        ),
        findings=(Finding(mark, MARKS[mark]),) if mark else (),
    )


@dataclass(frozen=True, slots=True)
class _Standard:
    """A structure in the conventional cell of its space group, every atom of the cell listed."""

    cell: tuple[float, float, float, float, float, float]
    positions: Floats
    kinds: list[int]
    rotations: Floats
    translations: Floats
    number: int
    symbol: str
    operations: tuple[str, ...]

    def asymmetric_unit(self) -> Iterator[tuple[tuple[float, float, float], int]]:
        """Yield position and kind of the first atom of every orbit."""
        import numpy as np

        left = np.ones(len(self.kinds), dtype=bool)
        for atom, position in enumerate(self.positions):
            if left[atom]:
                images = self.rotations @ position + self.translations
                apart = images[:, None, :] - self.positions
                apart -= np.round(apart)
                left &= (np.abs(apart) > _COINCIDENT).any(axis=2).all(axis=0)
                x, y, z = (round(float(u), 10) for u in position)
                yield (x, y, z), self.kinds[atom]


def _standardised(
    lattice: list[list[float]], positions: list[list[float]], kinds: list[int]
) -> _Standard:
    import gemmi
    import spglib

    from phaseid.crystal.hermann_mauguin import short_symbol

    with warnings.catch_warnings():
        # spglib 2.8 announces another way of reporting errors at every call
        warnings.simplefilter("ignore", DeprecationWarning)
        found: Any = spglib.get_symmetry_dataset((lattice, positions, kinds), _TOLERANCE_A)
        group: Any = spglib.get_symmetry_from_database(found.hall_number)
    operations = gemmi.symops_from_hall(found.hall)
    named = gemmi.find_spacegroup_by_ops(operations)
    return _Standard(
        cell=_cell(found.std_lattice),
        positions=found.std_positions,
        kinds=[int(kind) for kind in found.std_types],
        rotations=group["rotations"].astype(float),
        translations=group["translations"],
        number=int(found.number),
        symbol=short_symbol(named),
        operations=tuple(op.triplet() for op in operations),
    )


def _cell(lattice: Floats) -> tuple[float, float, float, float, float, float]:
    import numpy as np

    lengths = np.linalg.norm(lattice, axis=1)
    unit = lattice / lengths[:, None]
    cosines = (unit[1] @ unit[2], unit[2] @ unit[0], unit[0] @ unit[1])
    a, b, c = (round(float(length), 6) for length in lengths)
    alpha, beta, gamma = (round(float(np.degrees(np.arccos(cosine))), 6) for cosine in cosines)
    return a, b, c, alpha, beta, gamma


def plain_name(text: str) -> str:
    """Return a mineral name without TeX: "Lavarevi\\'{c}ite" → "Lavarevicite"."""
    name = re.sub(r"\\[A-Za-z]+\s*|\\.|[{}$]", "", text).strip()
    return "" if name.lower() == "none" else name


def plain_reference(bibtex: str) -> str:
    """Return "Authors, Journal volume, page (year)" of the first entry, the measurement itself."""
    first = bibtex.split("\n@", 1)[0]
    fields = {
        name: " ".join(plain_name(value).split())
        for name, value in re.findall(r"(\w+)\s*=\s*\"(.*?)\"\s*,?\s*$", first, re.MULTILINE)
    }
    authors = fields.get("author", "").replace(" and ", "; ")
    place = " ".join(fields[name] for name in ("journal", "volume") if fields.get(name))
    page, year = fields.get("page_first", ""), fields.get("year", "")
    where = ", ".join(part for part in (authors, place, page) if part)
    return f"{where} ({year})" if year else where
