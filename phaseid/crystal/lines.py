"""Crystal -> Lines: d, hkl, multiplicity and |F|² for X-rays, electrons and neutrons."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, eq=False)
class Lines:
    """The lines of one phase, sorted by falling d, coincident reflections merged.

    `d_A` (n,) float64, Å. `hkl` (n, 3) int, of the strongest contributor, in the cell of the source.
    `multiplicity` (n,) int counts hkl and its Friedel mate. `f2_xray`, `f2_electron`, `f2_neutron`
    (n,) float64 are |F|² of one reflection per cell in electron², Å², fm², displacement included,
    such that multiplicity × f2 is the sum over merged reflections.
    `volume_A3` is the cell's. The list holds every line down to `complete_to_A`, except lines whose
    m|F|²d² is below `floor` times the strongest for every probe.
    """

    d_A: NDArray[np.float64]
    hkl: NDArray[np.int32]
    multiplicity: NDArray[np.int32]
    f2_xray: NDArray[np.float64]
    f2_electron: NDArray[np.float64]
    f2_neutron: NDArray[np.float64]
    volume_A3: float
    complete_to_A: float
    floor: float = 0.0
