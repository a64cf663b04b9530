"""Two-beam dynamical correction of electron ring intensities.

Source: Blackman 1939, Proc. R. Soc. A 173, 68; Vainshtein 1964, Structure Analysis by Electron
Diffraction. A crystallite of thickness t diffracts, averaged over its orientation near the Bragg
position, the kinematic intensity times

    R(A) = (1/A) ∫₀^A J₀(2x) dx,    A = πt/ξ = λ (m/m₀) |F| t / V.

R → 1 for thin crystals, → 1/(2A) for thick ones, whose intensity follows |F|, no longer |F|².
It holds for strong lines of crystallites near a two-beam position and says nothing of systematic
rows, of forbidden lines by double diffraction, or of a spread of thicknesses.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from phaseid.probes.probe import Probe, Quantity
from phaseid.units import electron_voltage_kV, relativistic_mass_factor

_MAX_A = 200.0  # beyond, J0's integral is 1/2 within 1 %


def blackman_ratio(A: ArrayLike) -> NDArray[np.float64]:
    """Dynamical over kinematic intensity R(A), any shape, A ≥ 0 (see the module).

    ∫₀^y J₀ = (1/π) ∫₀^π sin(y sin τ)/sin τ dτ; the integrand is periodic and smooth, so the plain
    trapezoidal sum converges to rounding error once it has more points than y.
    """
    values = np.asarray(A, dtype=np.float64)
    y = 2.0 * np.clip(values, 0.0, _MAX_A).ravel()
    count = 64 + int(np.ceil(y.max(initial=0.0)))
    sine = np.sin((np.arange(count) + 0.5) * np.pi / count)
    # sin(y·sine)/(y·sine), written with sinc to hold at y = 0; its mean is ∫J₀ / y = R
    ratio = np.sinc(np.outer(y, sine) / np.pi).mean(axis=1)
    beyond = values.ravel() > _MAX_A
    ratio[beyond] *= _MAX_A / values.ravel()[beyond]
    result: NDArray[np.float64] = ratio.reshape(values.shape)
    return result


def two_beam_weights(
    probe: Probe,
    d_A: ArrayLike,
    multiplicity: ArrayLike,
    f2_A2: ArrayLike,
    *,
    volume_A3: float,
    thickness_A: float,
    quantity: Quantity = "mean",
) -> NDArray[np.float64]:
    """`Probe.weights` of electrons times the two-beam ratio of each line.

    `f2_A2` is |F|² (Å², no relativistic factor) of one reflection of the cell of `volume_A3`;
    `thickness_A` the crystallite's thickness along the beam. A line of merged unlike reflections is
    treated as if all had its mean |F|².
    """
    mass = relativistic_mass_factor(electron_voltage_kV(probe.wavelength_A))
    amplitude = np.sqrt(np.asarray(f2_A2, dtype=np.float64))
    A = probe.wavelength_A * mass * amplitude * thickness_A / volume_A3
    return probe.weights(d_A, multiplicity, f2_A2, quantity=quantity) * blackman_ratio(A)
