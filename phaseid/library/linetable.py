"""The lines of a whole library, or of some of its phases, as a few long arrays.

numpy is loaded only where arrays are made: look-ups by name never need it.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import islice
from typing import TYPE_CHECKING, Any

from phaseid.library.formulas import ATOMIC_NUMBER, SYMBOLS
from phaseid.library.packing import Kind, unpack_many

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


_AT_ONCE = 4096  # phases


@dataclass(frozen=True, slots=True, eq=False)
class LineTable:
    """The lines of p phases, n lines in all, as one kind of probe sees them.

    Lines of phase i are rows offsets[i] to offsets[i + 1], by falling d. `phase_ids` (p,);
    `offsets` (p + 1,) int64; `d_A` (n,) float64, Å; `hkl` (n, 3) int16; `multiplicity` (n,) int32;
    `f2` (n,) float64, |F|² per cell in electron², Å² or fm²; `volume_A3`, `complete_to_A`, `floor`,
    `quality` (p,) float64 as in `Lines` and `Phase`; `elements_mask` (p, 2) uint64, of word
    (Z - 1) // 64 bit (Z - 1) % 64 set for every element of atomic number Z. Phases are in the order
    in which they came into the library.
    """

    phase_ids: tuple[str, ...]
    offsets: NDArray[np.int64]
    d_A: NDArray[np.float64]
    hkl: NDArray[np.int16]
    multiplicity: NDArray[np.int32]
    f2: NDArray[np.float64]
    volume_A3: NDArray[np.float64]
    complete_to_A: NDArray[np.float64]
    floor: NDArray[np.float64]
    quality: NDArray[np.float64]
    elements_mask: NDArray[np.uint64]

    def __len__(self) -> int:
        return len(self.phase_ids)

    @property
    def elements(self) -> tuple[frozenset[str], ...]:
        """The elements of each phase, as sets of symbols."""
        sets = []
        for low, high in self.elements_mask.tolist():
            bits = low | high << 64
            sets.append(frozenset(s for z, s in enumerate(SYMBOLS) if bits >> z & 1))
        return tuple(sets)


def elements_bits(elements: Iterable[str]) -> int:
    """Return the bit mask of `LineTable.elements_mask` as one integer."""
    bits = 0
    for symbol in elements:
        bits |= 1 << (ATOMIC_NUMBER[symbol] - 1)
    return bits


def elements_masks(elements: Sequence[Iterable[str]]) -> NDArray[np.uint64]:
    """Return `LineTable.elements_mask` (p, 2) of p sets of symbols."""
    import numpy as np

    bits = [elements_bits(symbols) for symbols in elements]
    words = [(one & 0xFFFF_FFFF_FFFF_FFFF, one >> 64) for one in bits]
    return np.array(words, dtype=np.uint64).reshape(-1, 2)


def line_table(kind: Kind, rows: Iterable[tuple[Any, ...]]) -> LineTable:
    """Build the table.

    Rows are phase id, cell (six numbers, Å and degrees), volume_A3, complete_to_A, floor, quality,
    elements, packed lines. They are unpacked some at a time: that takes several times the memory
    of what comes of it.
    """
    rows = iter(rows)
    parts: list[LineTable] = []
    while (held := list(islice(rows, _AT_ONCE))) or not parts:
        parts.append(_table_of(kind, held))
    return parts[0] if len(parts) == 1 else _joined(parts)


def _table_of(kind: Kind, held: list[tuple[Any, ...]]) -> LineTable:
    import numpy as np

    offsets, hkl, multiplicity, strength = unpack_many(kind, [row[12] for row in held])
    metric = _inverse_metrics([row[1:7] for row in held])
    numbers = np.array([row[7:11] for row in held], dtype=np.float64).reshape(-1, 4)
    owner = np.repeat(np.arange(len(held)), np.diff(offsets))
    inverse_d2 = np.zeros(len(owner))
    for k, (i, j) in enumerate(((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))):
        product = hkl[:, i].astype(np.float64) * hkl[:, j]
        inverse_d2 += product * metric[k, owner]
    return LineTable(
        phase_ids=tuple(row[0] for row in held),
        offsets=offsets,
        d_A=1.0 / np.sqrt(inverse_d2),
        hkl=hkl,
        multiplicity=multiplicity,
        f2=strength * inverse_d2 / multiplicity,
        volume_A3=numbers[:, 0].copy(),
        complete_to_A=numbers[:, 1].copy(),
        floor=numbers[:, 2].copy(),
        quality=numbers[:, 3].copy(),
        elements_mask=elements_masks([row[11].split() for row in held]),
    )


def _joined(parts: list[LineTable]) -> LineTable:
    """One table of several; empties the list, for each column once made is let go."""
    import numpy as np

    before = np.cumsum([0, *(len(part.d_A) for part in parts)])
    offsets = [part.offsets[:-1] + lines for part, lines in zip(parts, before[:-1], strict=True)]
    phase_ids = tuple(phase_id for part in parts for phase_id in part.phase_ids)
    columns = {name: [getattr(part, name) for part in parts] for name in LineTable.__slots__[2:]}
    parts.clear()
    return LineTable(
        phase_ids=phase_ids,
        offsets=np.concatenate([*offsets, before[-1:]]),
        **{name: np.concatenate(columns.pop(name)) for name in LineTable.__slots__[2:]},
    )


def _inverse_metrics(cells: Sequence[Sequence[float]]) -> NDArray[np.float64]:
    """Return what h², k², l², kl, hl, hk are multiplied by to give 1/d² (6, p); Å and degrees."""
    import numpy as np

    a, b, c, *angles = np.array(cells, dtype=np.float64).reshape(-1, 6).T
    bc, ac, ab = np.cos(np.radians(angles))
    v2 = 1 - bc * bc - ac * ac - ab * ab + 2 * bc * ac * ab  # of the cell with edges of 1
    rows = (
        (1 - bc * bc) / (a * a),
        (1 - ac * ac) / (b * b),
        (1 - ab * ab) / (c * c),
        2 * (ab * ac - bc) / (b * c),
        2 * (ab * bc - ac) / (a * c),
        2 * (ac * bc - ab) / (a * b),
    )
    factors: NDArray[np.float64] = np.stack(rows) / v2
    return factors
