"""Where the atoms of a cell are: special positions, sites listed twice, atoms too close.

A site and its images closer than `SPLIT_A` are one atom on a special position, unless together they
hold no more than one atom: then the source describes an atom split over two places. Closer than
`ROUNDING_A` they are one position whatever the occupancy, apart only by rounding (1/3 as 0.333).
Sites that leave `read_cif` lie exactly on their special positions, and no two images of a site are
closer than ROUNDING_A, so any tolerance between 0.001 Å and 0.1 Å finds the same multiplicities.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.metric import Cell, metric_tensor, squares

ROUNDING_A = 0.1
SPLIT_A = 0.5
CROWDED_A = 0.7  # the shortest bond, H-H, is 0.74 Å
FULL = 1.05  # occupancies add up to at most this on one position; more is counted double
_EXACT_A = 1e-8
_FEW = 1 << 13  # distances that are worked out faster than sorted
_CHUNK = 1 << 20
_MAX_COMPARED = 60_000_000
_MAX_PAIRS_PER_SITE = 50  # a crystal has about ten atoms within 1.3 Å of disordered sites
_MULTIPLICITY_TOLERANCE_A = 0.05

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class AffineMaps:
    """Symmetry operations as maps of rows (x, y, z, 1): one product gives all images of all sites.

    `images` (4, 3m) leads to the m images, `steps` (4, 3m) from a site to them.
    """

    images: Floats
    steps: Floats

    def __len__(self) -> int:
        return int(self.images.shape[1]) // 3


def affine_maps(rotations: Floats, translations: Floats) -> AffineMaps:
    """Return the maps of rotations (m, 3, 3) and translations (m, 3) in fractional coordinates."""
    images = np.concatenate([rotations, translations[:, :, None]], axis=2)
    steps = images - np.eye(3, 4)
    return AffineMaps(images.reshape(-1, 4).T.copy(), steps.reshape(-1, 4).T.copy())


@dataclass(frozen=True, slots=True, eq=False)
class Placed:
    """Sites on their exact positions.

    `fract` (n, 3) float64; `multiplicity` (n,) int, images per cell; `shift_A` (n,) how far each
    was moved to reach its special position; `crowded` (n,) marks full sites that stay closer than
    CROWDED_A to an image of their own.
    """

    fract: Floats
    multiplicity: NDArray[np.int64]
    shift_A: Floats
    crowded: NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class ClosePairs:
    """Pairs of sites of which some images are close: `first` < `second` (k,), `distance_A` (k,)."""

    first: NDArray[np.int64]
    second: NDArray[np.int64]
    distance_A: Floats


def multiplicities(
    fract: Sequence[tuple[float, float, float]], rotations: Floats, translations: Floats, cell: Cell
) -> NDArray[np.int64]:
    """Return how many images of each site the cell holds, (n,) int.

    `rotations` (m, 3, 3) and `translations` (m, 3) are the complete list of operations.
    """
    sites = np.asarray(fract, dtype=np.float64).reshape(-1, 3)
    metric = metric_tensor(cell)
    maps = affine_maps(rotations, translations)
    counts = np.empty(len(sites), dtype=np.int64)
    step = max(1, _CHUNK // len(rotations))
    for start in range(0, len(sites), step):
        part = sites[start : start + step]
        _, squared = _steps(part, maps, metric)
        stabiliser = np.add.reduce(squared < _MULTIPLICITY_TOLERANCE_A**2, axis=1)
        counts[start : start + step] = len(rotations) // np.maximum(stabiliser, 1)
    return counts


def place(fract: Floats, occupancy: Floats, maps: AffineMaps, cell: Cell) -> Placed:
    """Put sites (n, 3) of occupancy (n,) onto their special positions and count their images."""
    metric = metric_tensor(cell)
    shift = np.zeros(len(fract))
    if len(maps) == 1:
        alone = np.zeros(len(fract), dtype=np.bool_)
        return Placed(fract, np.ones(len(fract), dtype=np.int64), shift, alone)
    step = max(1, _CHUNK // len(maps))
    if len(fract) <= step:
        placed, multiplicity, crowded = _place(fract, occupancy, maps, metric)
    else:
        parts = [
            _place(fract[start : start + step], occupancy[start : start + step], maps, metric)
            for start in range(0, len(fract), step)
        ]
        placed, multiplicity, crowded = map(np.concatenate, zip(*parts, strict=True))
    if placed is not fract:
        moved = placed - fract
        shift = np.sqrt(squares(moved, metric))
    return Placed(placed, multiplicity, shift, crowded)


def close_pairs(fract: Floats, maps: AffineMaps, cell: Cell, within_A: float) -> ClosePairs | None:
    """Return pairs of different sites with images closer than `within_A`, each at its nearest.

    Images are sorted along one axis and only neighbours in that order are compared. None means that
    more atoms lie on each other than any crystal has: the comparison would not end in reasonable
    time.
    """
    metric = metric_tensor(cell)
    n = len(fract)
    if n * n * len(maps) <= _FEW:
        return _pairs_of_few(fract, maps, metric, within_A)
    images = _images(fract, maps).reshape(-1, 3)
    images -= np.floor(images)
    order, low, high = _neighbours(fract, images, metric, within_A)
    if (high - low).sum() > _MAX_COMPARED:
        return None
    owner = np.repeat(np.arange(n), len(maps))[order]
    images = images[order]
    pairs: list[NDArray[np.int64]] = [np.empty(0, dtype=np.int64)]
    found: list[Floats] = [np.empty(0)]
    held = 0
    for start, stop in _runs(high - low):
        lengths = (high - low)[start:stop]
        site = np.repeat(np.arange(start, stop), lengths)
        offset = np.arange(len(site)) - np.repeat(np.cumsum(lengths) - lengths, lengths)
        image = (low[site] + offset) % len(order)
        keep = owner[image] > site
        site, image = site[keep], image[keep]
        delta = images[image] - fract[site]
        delta -= np.round(delta)
        squared = squares(delta, metric)
        close = squared < within_A**2
        pairs.append(site[close] * n + owner[image[close]])
        found.append(squared[close])
        held += len(pairs[-1])
        if held > len(maps) * _MAX_PAIRS_PER_SITE * n:
            return None
    pair, squared = np.concatenate(pairs), np.concatenate(found)
    nearest = np.lexsort((squared, pair))
    pair, first = np.unique(pair[nearest], return_index=True)
    if len(pair) > _MAX_PAIRS_PER_SITE * n:
        return None
    return ClosePairs(pair // n, pair % n, np.sqrt(squared[nearest][first]))


def _pairs_of_few(fract: Floats, maps: AffineMaps, metric: Floats, within_A: float) -> ClosePairs:
    """Return the close pairs by working out every distance."""
    first, second = _every_pair(len(fract))
    if not len(first):
        return ClosePairs(first, second, np.empty(0))
    delta = _images(fract, maps)[second] - fract[first, None]
    delta -= np.rint(delta)
    squared = squares(delta.reshape(-1, 3), metric).reshape(len(first), -1)
    nearest = np.minimum.reduce(squared, axis=1)
    (close,) = (nearest < within_A**2).nonzero()
    if not len(close):
        return ClosePairs(close, close, np.empty(0))
    return ClosePairs(first[close], second[close], np.sqrt(nearest[close]))


@lru_cache(maxsize=128)
def _every_pair(n: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return first < second of all pairs of n sites."""
    first, second = np.triu_indices(n, 1)
    return first.astype(np.int64), second.astype(np.int64)


def _neighbours(
    fract: Floats, images: Floats, metric: Floats, within_A: float
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Sort images along the axis that leaves fewest to compare.

    Return the order of the images, and for each site the run [low, high) of its neighbours in three
    periods of that order.
    """
    inverse = np.linalg.inv(metric).diagonal()
    best = None
    for axis in np.argsort(inverse).tolist():  # the widest spacing of lattice planes first
        order = np.argsort(images[:, axis])
        line = images[order, axis]
        line = np.concatenate([line - 1, line, line + 1])
        home = fract[:, axis] - np.floor(fract[:, axis])
        reach = within_A * float(np.sqrt(inverse[axis]))
        low = np.searchsorted(line, home - reach)
        high = np.searchsorted(line, home + reach, side="right")
        compared = int((high - low).sum())
        if best is None or compared < best[0]:
            best = compared, order, low, high
        if compared <= _CHUNK:
            break
    assert best is not None
    return best[1:]


def _runs(lengths: NDArray[np.int64]) -> list[tuple[int, int]]:
    """Cut sites into runs of which the neighbour lists together stay within the chunk size."""
    if lengths.sum() <= _CHUNK:
        return [(0, len(lengths))]
    runs, start, held = [], 0, 0
    for index, length in enumerate(lengths.tolist()):
        if held and held + length > _CHUNK:
            runs.append((start, index))
            start, held = index, 0
        held += length
    return [*runs, (start, len(lengths))]


def _steps(fract: Floats, maps: AffineMaps, metric: Floats) -> tuple[Floats, Floats]:
    """Return steps (n, m, 3) from sites to their nearest images, and their squares (n, m), Å²."""
    steps = fract @ maps.steps[:3]
    steps += maps.steps[3]
    steps -= np.rint(steps)
    squared = squares(steps.reshape(-1, 3), metric)
    return steps.reshape(len(fract), -1, 3), squared.reshape(len(fract), -1)


def _images(fract: Floats, maps: AffineMaps) -> Floats:
    """Return the images (n, m, 3) of sites (n, 3) under every operation."""
    images = fract @ maps.images[:3]
    images += maps.images[3]
    return images.reshape(len(fract), -1, 3)


def _place(
    fract: Floats, occupancy: Floats, maps: AffineMaps, metric: Floats
) -> tuple[Floats, NDArray[np.int64], NDArray[np.bool_]]:
    steps, squared = _steps(fract, maps, metric)
    near: NDArray[np.bool_] = squared < ROUNDING_A**2
    near_count = np.add.reduce(near, axis=1)
    held = np.count_nonzero(near)
    alone = held == np.count_nonzero(squared < CROWDED_A**2)  # no image in doubtful reach
    if not alone:
        wide = squared < SPLIT_A**2
        wide_count = wide.sum(axis=1)
        # images within SPLIT_A that would be more than one atom together are one atom
        merge = (wide_count > near_count) & (occupancy * wide_count > FULL * near_count)
        if merge.any():
            near = np.where(merge[:, None], wide, near)
            near_count = np.where(merge, wide_count, near_count)
    placed = fract
    if not alone or np.count_nonzero(squared < _EXACT_A**2) < held:
        drift = np.einsum("nm,nmk->nk", near, steps) / near_count[:, None]
        drift[np.abs(drift) < 1e-9] = 0.0
        placed = fract + drift
        _, squared = _steps(placed, maps, metric)
        near_count = np.maximum(np.add.reduce(squared < 1e-4, axis=1), 1)
    if alone:
        return placed, len(maps) // near_count, np.zeros(len(fract), dtype=np.bool_)
    crowd = (squared < CROWDED_A**2).sum(axis=1)
    crowded = (crowd > near_count) & (occupancy * crowd > FULL * near_count)
    return placed, len(maps) // near_count, crowded
