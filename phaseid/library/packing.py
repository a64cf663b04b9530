"""The lines of one phase as few bytes, and of many phases back as long arrays.

Kept are hkl, multiplicity and, for each kind of probe, how strong a line is: m|F|²d² below that of
the phase's strongest, as a 12-bit logarithm. The spacing is not kept: it follows from hkl and the
cell. Of a kind of probe the lines below the floor of the library count as absent.

Layout of a packed phase: one byte, the width of its integers (1 or 2 bytes) plus a mark of the step
of its logarithms (`_STEPS`); three float32, m|F|²d² of the strongest line for X-rays, electrons,
neutrons; then, compressed, planes of n values each: h, k, l, multiplicity, the high eight bits of
the three logarithms, and their low four bits, two to a byte. All numbers are little-endian.
"""

from __future__ import annotations

import math
import struct
import zlib
from collections.abc import Sequence
from typing import TYPE_CHECKING, Literal

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from phaseid.crystal.lines import Lines
    from phaseid.crystal.metric import Cell

    Floats = NDArray[np.float64]

Kind = Literal["electron", "x-ray", "neutron"]

KINDS: tuple[Kind, ...] = ("x-ray", "electron", "neutron")

STORED_FLOOR = 1e-4
"""Lines whose m|F|²d² is below this part of the strongest, for every probe, are not stored.

At small spacings hundreds of lines below a thousandth make most of a large cell's rings."""

_HEAD = struct.Struct("<B3f")
_ABSENT = 4095
_MARK = 8
_STEPS = (
    -math.log(1e-3) / (_ABSENT - 1),  # in libraries of schema 3
    -math.log(STORED_FLOOR) / (_ABSENT - 1),  # 0.0022: |F|² comes back within 0.11 %
)
_STEP = _STEPS[-1]
_LEVEL = 1  # the planes of a few hundred lines hold nothing that a slower search would find


def strengths(lines: Lines) -> Floats:
    """Return m|F|²d² (3, n) of each line for the three KINDS."""
    import numpy as np

    weight = lines.multiplicity * lines.d_A**2
    return np.stack([lines.f2_xray, lines.f2_electron, lines.f2_neutron]) * weight


def pack_lines(lines: Lines) -> bytes:
    """Pack lines that are trimmed at STORED_FLOOR; b"" where there are none."""
    import numpy as np

    if not len(lines.d_A):
        return b""
    strength = strengths(lines)
    strongest = strength.max(axis=1)
    below = strength / np.where(strongest > 0, strongest, 1.0)[:, None]
    seen = below >= STORED_FLOOR
    code = np.full(below.shape, _ABSENT, dtype=np.uint16)
    code[seen] = np.rint(np.log(below[seen]) / -_STEP)
    whole = np.vstack([lines.hkl.T, lines.multiplicity])
    wide = whole.min() < -128 or whole[:3].max() > 127 or whole[3].max() > 255
    low = (code & 15).astype(np.uint8).ravel()
    if len(low) % 2:
        low = np.append(low, np.uint8(0))
    # multiplicities above 127 wrap round in one signed byte, and are read back unsigned
    planes = (
        whole.astype("<i2" if wide else np.uint8).tobytes(),
        (code >> 4).astype(np.uint8).tobytes(),
        (low[::2] << 4 | low[1::2]).tobytes(),
    )
    head = _HEAD.pack(_MARK + (2 if wide else 1), *strongest.tolist())
    return head + zlib.compress(b"".join(planes), _LEVEL)


def unpack_many(
    kind: Kind, packed: Sequence[bytes]
) -> tuple[NDArray[np.int64], NDArray[np.int16], NDArray[np.int32], Floats]:
    """Return offsets (p + 1,), hkl (n, 3), multiplicity (n,) and m|F|²d² (n,) of p packed phases.

    Lines of phase i are rows offsets[i] to offsets[i + 1]; m|F|²d² is 0 where absent.
    """
    import numpy as np

    heads = [_HEAD.unpack_from(data) if data else (1, 0.0, 0.0, 0.0) for data in packed]
    parts = [zlib.decompress(data[_HEAD.size :]) if data else b"" for data in packed]
    mark, width = np.divmod(np.array([head[0] for head in heads], dtype=np.int64), _MARK)
    step = np.array(_STEPS)[mark]
    size = np.array([len(part) for part in parts], dtype=np.int64)
    count = 2 * size // (8 * width + 9)  # a line takes 4 integers, 3 bytes, 3 half bytes
    offsets = np.concatenate([np.zeros(1, np.int64), np.cumsum(count)])
    data = np.frombuffer(b"".join(parts), dtype=np.uint8)
    owner = np.repeat(np.arange(len(packed)), count)
    within = np.arange(offsets[-1]) - offsets[:-1][owner]
    start = np.concatenate([np.zeros(1, np.int64), np.cumsum(size)[:-1]])[owner]
    n, wide = count[owner], width[owner] == 2

    whole = np.empty((4, len(owner)), dtype=np.int32)
    at = start + within * width[owner]
    for column in range(4):
        value = data[at].astype(np.int32)
        if column < 3:
            value[~wide] = value[~wide].astype(np.int8)
        if wide.any():
            upper = data[at[wide] + 1]
            value[wide] |= (upper if column == 3 else upper.astype(np.int8)).astype(np.int32) << 8
        whole[column] = value
        at += n * width[owner]
    which = KINDS.index(kind)
    codes = start + n * (4 * width[owner])
    strongest = np.array([head[1 + which] for head in heads], dtype=np.float64)
    high = data[codes + n * which + within].astype(np.int32)
    pair = which * n + within
    low = data[codes + 3 * n + pair // 2] >> np.where(pair % 2, 0, 4) & 15
    code = high << 4 | low
    strength = np.where(code < _ABSENT, strongest[owner] * np.exp(-step[owner] * code), 0.0)
    return offsets, whole[:3].T.astype(np.int16), whole[3], strength


def unpack_lines(
    data: bytes, *, cell: Cell, volume_A3: float, complete_to_A: float, floor: float
) -> Lines:
    """Rebuild `Lines` from what `pack_lines` made and the columns of the phase."""
    import numpy as np

    from phaseid.crystal.lines import Lines
    from phaseid.crystal.metric import inverse_metric, squares

    first, *strongest = _HEAD.unpack_from(data) if data else (1, 0.0, 0.0, 0.0)
    mark, width = divmod(first, _MARK)
    held = zlib.decompress(data[_HEAD.size :]) if data else b""
    n = 2 * len(held) // (8 * width + 9)
    whole = np.frombuffer(held, "<i2" if width == 2 else "i1", 4 * n).reshape(4, n)
    hkl = whole[:3].T.astype(np.int32)
    multiplicity = whole[3].astype(np.int32) & (0xFF if width == 1 else 0xFFFF)
    high = np.frombuffer(held, np.uint8, 3 * n, 4 * n * width)
    pairs = np.frombuffer(held, np.uint8, offset=(4 * width + 3) * n)
    low = np.stack([pairs >> 4, pairs & 15], axis=1).reshape(-1)[: 3 * n]
    code = (high.astype(np.int32) << 4 | low).reshape(3, n)
    value = np.array(strongest)[:, None] * np.exp(-_STEPS[mark] * code)
    strength = np.where(code < _ABSENT, value, 0.0)
    inverse_d2 = squares(hkl.astype(np.float64), inverse_metric(cell))
    f2_xray, f2_electron, f2_neutron = (one * inverse_d2 / multiplicity for one in strength)
    return Lines(
        d_A=1 / np.sqrt(inverse_d2),
        hkl=hkl,
        multiplicity=multiplicity,
        f2_xray=f2_xray,
        f2_electron=f2_electron,
        f2_neutron=f2_neutron,
        volume_A3=volume_A3,
        complete_to_A=complete_to_A,
        floor=floor,
    )
