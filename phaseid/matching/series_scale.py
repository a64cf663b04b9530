"""The scale error that the patterns of a series have in common.

Patterns taken one after the other share camera constant or wavelength, so their scale errors are
nearly one: taken as independent, a phase that needs a shift would pay for it in every pattern anew.
The error of pattern t is s + δ_t with s common. Given s, the likelihood of a set of phases follows
from its fit in closed form, all being Gaussian: p(y|s_t) / p(y) = N(s_t; m, v) / N(s_t; 0, σ²) with
m, v the scale fitted. s itself is summed over a grid; that nothing is shared takes part.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.ringlist import RingList

Floats = NDArray[np.float64]

COMMON_SHARE = 0.9
"""Share of a scale's variance that is common to a series: lenses and specimen height drift by
a third of what the constant is known to. Common practice, no source."""
SHARED_PRIOR = 0.8
"""Prior that lists which state the same scale were taken at the same setting indeed."""
_POINTS, _REACH = 25, 3.0


@dataclass(frozen=True, slots=True, eq=False)
class ScaleError:
    """What is known of the scale errors (ln d) of T patterns before their rings are seen.

    `sigma` (T,) one-sigma of each; `common` the one-sigma of the part that those share which are
    `shared` (T,).
    """

    sigma: Floats
    common: float
    shared: NDArray[np.bool_]

    @classmethod
    def of(cls, stated: Sequence[RingList], used: Sequence[RingList]) -> ScaleError:
        """Of lists as stated and as used, whose scale may be wider (expansion).

        Patterns share a scale where they state the same probe, column and camera constant.
        """
        settings = [
            (p.probe.label, p.probe.scale_sigma, p.position_column, str(p.camera_constant))
            for p in stated
        ]
        most, count = Counter(settings).most_common(1)[0]
        shared = np.array([one == most for one in settings]) & (count > 1)
        return cls(
            sigma=np.array([p.probe.scale_sigma for p in used]),
            common=COMMON_SHARE**0.5 * most[1],
            shared=shared,
        )

    def grid(self) -> tuple[Floats, Floats]:
        """Values of the common error and the prior of each; one value where none is shared."""
        if not self.shared.any():
            return np.zeros(1), np.ones(1)
        steps = np.linspace(-_REACH, _REACH, _POINTS)
        weight = np.exp(-0.5 * steps**2)
        return steps * self.common, weight / weight.sum()

    def tilt(self, common: float, mean: Floats, deviation: Floats) -> Floats:
        """ln p(y|common) / p(y) (T, n) of fits whose scale is `mean` ± `deviation` (T, n)."""
        prior = self.sigma[:, None] ** 2
        v = np.minimum(deviation**2, 0.999 * prior)
        own = 1.0 / (1.0 / v - 1.0 / prior)  # variance of the scale by the rings alone
        centre = mean * own / v
        spread = own + prior - self.common**2
        log_ratio = 0.5 * np.log(prior / v) + 0.5 * (centre**2 / own - mean**2 / v)
        log_ratio += 0.5 * np.log(own / spread) - 0.5 * (common - centre) ** 2 / spread
        return np.where(self.shared[:, None], log_ratio, 0.0)
