"""Lines packed for storage, and the lines of a whole library as a few long arrays.

numpy is loaded only where arrays are made: look-ups by name never need it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

from phaseid.library.formulas import ATOMIC_NUMBER, SYMBOLS

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from phaseid.crystal.lines import Lines

Kind = Literal["electron", "x-ray", "neutron"]

# one line of one phase, little-endian; float32 keeps |F|² to 6e-8 of its value
_RECORD: list[Any] = [
    ("d_A", "<f8"),
    ("hkl", "<i2", (3,)),
    ("multiplicity", "<i4"),
    ("f2_xray", "<f4"),
    ("f2_electron", "<f4"),
    ("f2_neutron", "<f4"),
]
_F2_FIELD = {"x-ray": "f2_xray", "electron": "f2_electron", "neutron": "f2_neutron"}


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


def pack_lines(lines: Lines) -> bytes:
    """Pack the arrays of `lines` into bytes, record after record."""
    import numpy as np

    records = np.empty(len(lines.d_A), dtype=_RECORD)
    for name in (field[0] for field in _RECORD):
        records[name] = getattr(lines, name)
    return records.tobytes()


def unpack_lines(data: bytes, *, volume_A3: float, complete_to_A: float, floor: float) -> Lines:
    """Rebuild `Lines` from what `pack_lines` made and the phase's own columns."""
    import numpy as np

    from phaseid.crystal.lines import Lines

    records = np.frombuffer(data, dtype=_RECORD)
    return Lines(
        d_A=records["d_A"].astype(np.float64),
        hkl=records["hkl"].astype(np.int32),
        multiplicity=records["multiplicity"].astype(np.int32),
        f2_xray=records["f2_xray"].astype(np.float64),
        f2_electron=records["f2_electron"].astype(np.float64),
        f2_neutron=records["f2_neutron"].astype(np.float64),
        volume_A3=volume_A3,
        complete_to_A=complete_to_A,
        floor=floor,
    )


def line_table(kind: Kind, rows: Iterable[tuple[Any, ...]]) -> LineTable:
    """Build the table.

    Rows are phase id, volume_A3, complete_to_A, floor, quality, elements, packed lines.
    """
    import numpy as np

    held = list(rows)
    dtype = np.dtype(_RECORD)
    blobs = [row[6] for row in held]
    records = np.frombuffer(b"".join(blobs), dtype=dtype)
    counts = np.fromiter(map(len, blobs), dtype=np.int64, count=len(blobs)) // dtype.itemsize
    numbers = np.array([row[1:5] for row in held], dtype=np.float64).reshape(-1, 4)
    masks = [elements_bits(row[5].split()) for row in held]
    words = [(bits & 0xFFFF_FFFF_FFFF_FFFF, bits >> 64) for bits in masks]
    return LineTable(
        phase_ids=tuple(row[0] for row in held),
        offsets=np.concatenate([np.zeros(1, np.int64), np.cumsum(counts)]),
        d_A=records["d_A"].astype(np.float64),
        hkl=records["hkl"].astype(np.int16),
        multiplicity=records["multiplicity"].astype(np.int32),
        f2=records[_F2_FIELD[kind]].astype(np.float64),
        volume_A3=numbers[:, 0].copy(),
        complete_to_A=numbers[:, 1].copy(),
        floor=numbers[:, 2].copy(),
        quality=numbers[:, 3].copy(),
        elements_mask=np.array(words, dtype=np.uint64).reshape(-1, 2),
    )
