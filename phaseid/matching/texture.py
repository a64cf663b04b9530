"""Preferred orientation: crystallites that share one axis, normal to the film or the flat specimen.

With a fibre axis along the beam of an electron microscope only planes nearly parallel to the axis
make rings; in reflection from a flat specimen only planes nearly normal to it. All other lines
fade, which a random powder's intensities would call missing.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from itertools import permutations, product

import numpy as np
from numpy.typing import NDArray

from phaseid.library.linetable import LineTable
from phaseid.matching.lineset import reciprocal_metric
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import ARCED, ARCED_TEXTURE_PRIOR, TEXTURE_PRIOR
from phaseid.probes.probe import Probe

_SPREAD = np.radians(8.0)
"""One-sigma of the crystallites' axes about the film normal: common practice, no source."""
_RANDOM = 0.12
"""Part of the material that lies at random all the same."""

Axis = tuple[int, int, int]

_CUBIC: tuple[Axis, ...] = ((1, 0, 0), (1, 1, 0), (1, 1, 1))
_UNIAXIAL: tuple[Axis, ...] = ((0, 0, 1), (1, 0, 0), (1, 1, 0))
_OTHER: tuple[Axis, ...] = ((1, 0, 0), (0, 1, 0), (0, 0, 1))


def can_show_texture(probe: Probe) -> bool:
    """Whether a fibre axis changes what this probe and geometry show."""
    return probe.geometry in ("ring", "bragg-brentano")


def texture_prior(patterns: Sequence[Pattern]) -> float:
    """Prior that a phase has a fibre axis: more where rings are arcs, as an image may show."""
    for pattern in patterns:
        arcs = pattern.rings.arcs
        if arcs is not None and np.isfinite(arcs).any() and np.nanmedian(arcs) > ARCED:
            return ARCED_TEXTURE_PRIOR
    return TEXTURE_PRIOR


def likely_axes(metric: Floats) -> tuple[Axis, ...]:
    """Directions [uvw] that films of a lattice of this reciprocal metric commonly have."""
    edges = np.diag(metric)
    alike = np.isclose(edges, np.roll(edges, -1), rtol=1e-5)
    if alike.all():
        return _CUBIC
    return _UNIAXIAL if alike[0] else _OTHER


def fibre_factors(
    table: LineTable, phase: int, rows: NDArray[np.int64], axes: tuple[Axis, ...], probe: Probe
) -> Floats:
    """Intensity of the lines `rows` (n,) of a phase relative to a random powder, (axes, n).

    A plane normal at angle φ to the axis is spread about the film normal as a Gaussian of φ. The
    share of normals per solid angle at the polar angle χ the geometry sees, over that of a random
    powder (1/4π): χ = 90° for rings about a beam along the axis, χ = 0 for reflection; the mean is
    over the planes the lattice's symmetry makes equivalent.
    """
    metric = reciprocal_metric(table, phase)
    uvw = np.array(axes, dtype=np.float64)
    length = np.sqrt(np.einsum("ai,ij,aj->a", uvw, np.linalg.inv(metric), uvw))
    h = table.hkl[rows].astype(np.float64)
    equivalents = np.einsum("nj,eji->eni", h, _symmetry(metric))
    along = np.einsum("eni,ai->aen", equivalents, uvw)
    size = np.sqrt(np.einsum("ni,ij,nj->n", h, metric, h))
    cosine = np.abs(along) / (length[:, None, None] * size)
    angle = np.arccos(np.minimum(cosine, 1.0))
    if probe.geometry == "ring":
        away = np.pi / 2.0 - angle
        density = 2.0 * np.exp(-0.5 * (away / _SPREAD) ** 2) / (_SPREAD * np.sqrt(2.0 * np.pi))
    else:
        density = np.exp(-0.5 * (angle / _SPREAD) ** 2) / _SPREAD**2
    result: Floats = _RANDOM + (1.0 - _RANDOM) * density.mean(axis=1)
    return result


@cache
def _changes() -> Floats:
    """(c, 3, 3) all changes of hkl a lattice's symmetry may make in its conventional cell."""
    signed = [
        np.diag(signs)[list(order)]
        for order in permutations(range(3))
        for signs in product((1, -1), repeat=3)
    ]
    sixfold = np.array([[1, 1, 0], [-1, 0, 0], [0, 0, 1]])
    turns = [np.linalg.matrix_power(sixfold, k) for k in range(6)]
    every = np.stack([one @ turn for one in signed for turn in turns])
    return np.unique(every, axis=0).astype(np.float64)


def _symmetry(metric: Floats) -> Floats:
    """(e, 3, 3) changes of hkl that leave the reciprocal metric as it is."""
    changes = _changes()
    changed = changes @ metric @ changes.transpose(0, 2, 1)
    same = np.abs(changed - metric).max(axis=(1, 2)) < 1e-4 * np.abs(metric).max()
    result: Floats = changes[same]
    return result
