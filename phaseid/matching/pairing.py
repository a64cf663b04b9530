"""Which of the lines near a ring make it, and how far the lines about it are spread."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.patterns import Floats, Pattern

_HIDDEN = 1.2
"""Two lines nearer than this many resolutions make one ring."""


class NearLines:
    """Some of the lines of b hypotheses of k phases, one after another: (l,) arrays.

    `index` into the flattened (b, k, n); `owner` into (b, k); `batch` into (b,); `ring` the ring
    each may belong to, `position`, `distance` from it, `intensity` relative in its phase and
    `ln_expected` with the phase's amplitude.
    """

    def __init__(
        self,
        which: NDArray[np.bool_],
        ring: NDArray[np.int64],
        position: Floats,
        distance: Floats,
        intensity: Floats,
        ln_amplitude: Floats,
    ) -> None:
        """Take the lines `which` of (b, k, n) arrays; `ln_amplitude` (b, k)."""
        self.size, phases, lines = which.shape
        self.index = np.flatnonzero(which)
        self.owner = self.index // lines
        self.batch = self.owner // phases
        self.ring = ring.ravel()[self.index]
        self.position = position.ravel()[self.index]
        self.distance = distance.ravel()[self.index]
        self.intensity = intensity.ravel()[self.index]
        self.ln_expected = np.log(self.intensity) + ln_amplitude.ravel()[self.owner]

    def crowding(self, rings: int) -> Floats:
        """(b, rings) mean square width of the lines of each ring, by expected intensity."""
        cell, size = self.batch * rings + self.ring, self.size * rings
        weight = np.exp(self.ln_expected)
        total = np.maximum(np.bincount(cell, weights=weight, minlength=size), 1e-300)
        moment = weight * self.distance
        mean = np.bincount(cell, weights=moment, minlength=size) / total
        square = np.bincount(cell, weights=moment * self.distance, minlength=size) / total
        result: Floats = np.maximum(square - mean**2, 0.0).reshape(self.size, rings)
        return result

    def settle(self, pattern: Pattern, window: Floats) -> None:
        """Keep of the lines near each ring its main line and what cannot be told from that.

        Close pairs are told apart first: of two lines nearest to one ring the lesser makes the ring
        on its side, if that has none yet and lies within its `window` (m,); else the greater makes
        the ring on its own side. A line that would have made a ring of its own is not hidden by
        being near another.
        """
        main = self._main(pattern, np.ones(len(self.ring), dtype=bool))
        main = self._moved(pattern, window, main, ~main, self.distance)
        lesser = self._main(pattern, ~main)
        if lesser.any():
            place = np.full(self.size * len(pattern), np.nan)
            key = self.batch * len(pattern) + self.ring
            place[key[lesser]] = self.position[lesser]
            away = np.nan_to_num(self.position - place[key])
            main = self._moved(pattern, window, main, main, away)
        key = self.batch * len(pattern) + self.ring
        middle = np.zeros(self.size * len(pattern))
        middle[key[main]] = self.position[main]
        apart = np.abs(self.position - middle[key])
        self._keep(main | (apart < _HIDDEN * pattern.resolution[self.ring]))

    def _moved(
        self,
        pattern: Pattern,
        window: Floats,
        main: NDArray[np.bool_],
        which: NDArray[np.bool_],
        towards: Floats,
    ) -> NDArray[np.bool_]:
        """Give the lines `which` to the ring on the side `towards`, if no main line makes it.

        Returns the main lines as they are afterwards.
        """
        x, m = pattern.x, len(pattern)
        beside = np.clip(self.ring + np.sign(towards).astype(np.int64), 0, m - 1)
        taken = np.zeros(self.size * m, dtype=bool)
        taken[(self.batch * m + self.ring)[main]] = True
        away = self.distance + x[self.ring] - x[beside]
        free = which & (beside != self.ring) & ~taken[self.batch * m + beside]
        free &= np.abs(away) < window[beside]
        if not free.any():
            return main
        self.ring[free], self.distance[free] = beside[free], away[free]
        return self._main(pattern, np.ones(len(self.ring), dtype=bool))

    def _main(self, pattern: Pattern, among: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Which of the lines `among` is for each ring the one most likely to make it."""
        key = self.batch * len(pattern) + self.ring
        misfit = self.distance / (1.5 * pattern.sigma[self.ring])
        score = np.where(among, self.ln_expected - 0.5 * misfit**2, -np.inf)
        best = np.full(self.size * len(pattern), -np.inf)
        np.maximum.at(best, key, score)
        return np.asarray(among & (score >= best[key]))

    def _keep(self, keep: NDArray[np.bool_]) -> None:
        """Leave out all other lines."""
        for name, values in vars(self).items():
            if isinstance(values, np.ndarray):
                setattr(self, name, values[keep])
