"""What made the pattern: radiation, wavelength, its uncertainty, geometry; what that shows."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from phaseid.units import xray_energy_keV

if TYPE_CHECKING:
    from phaseid.crystal.lines import Lines

Kind = Literal["electron", "x-ray", "neutron"]
Geometry = Literal["ring", "bragg-brentano", "debye-scherrer", "transmission", "time-of-flight"]
Quantity = Literal["mean", "sum"]

# 1/cosθ diverges at 2θ = 180°, where a ring shrinks to the point it came from. No powder instrument
# reads past 175°; from there on the factor is held, so that no such line becomes the strongest.
_COS_THETA_FLOOR = float(np.cos(np.radians(175.0 / 2.0)))


@dataclass(frozen=True, slots=True)
class Probe:
    """A probe: what scatters, at which wavelength, seen how.

    `label` is the spelling to show ("electron 200 kV", "x-ray Cu Kα"); `parse_probe` reads it back.
    `scale_sigma` is the relative one-sigma of the common factor on all d (camera constant or
    wavelength); `scale_stated` is False where it is a default of this kind of probe.
    `wavelength_stated` is False where the text named only the radiation and a usual wavelength was
    assumed, enough for spacings but not for angles. For time of flight `wavelength_A` is nominal.

    Geometries: "ring" plate of an electron microscope, small angle; "bragg-brentano" reflection
    from a thick flat specimen; "debye-scherrer" thin rod, read along a circle around it;
    "transmission" flat plate or area detector normal to the beam; "time-of-flight" white neutrons
    at a fixed angle.

    `polarisation` is the fraction of the incident intensity polarised normal to the plane of
    diffraction: 0.5 for a tube and for the azimuthal mean over a full ring.
    `monochromator_two_theta_deg` is the 2θ of a crystal monochromator, 0 for none.
    `ghosts` are (name, wavelength in Å) of other lines of the tube that may print fainter rings.
    `assumed` are sentences on what else was not stated; `remarks` shows them all.
    """

    kind: Kind
    wavelength_A: float
    scale_sigma: float
    label: str
    geometry: Geometry
    polarisation: float = 0.5
    monochromator_two_theta_deg: float = 0.0
    ghosts: tuple[tuple[str, float], ...] = ()
    wavelength_stated: bool = True
    scale_stated: bool = True
    assumed: tuple[str, ...] = ()

    @property
    def remarks(self) -> tuple[str, ...]:
        """Sentences to show with an answer: every value that was assumed and not stated."""
        if self.scale_stated:
            return self.assumed
        scale = (
            f"Scale uncertainty not stated: {100 * self.scale_sigma:g} % assumed for this probe."
        )
        return (*self.assumed, scale)

    def with_scale(self, scale_sigma: float) -> Probe:
        """The same probe with a stated relative one-sigma of its scale."""
        return replace(self, scale_sigma=scale_sigma, scale_stated=True)

    @property
    def xray_energy_eV(self) -> float | None:
        """Photon energy (eV), for f′ and f″; None for electrons and neutrons."""
        return xray_energy_keV(self.wavelength_A) * 1e3 if self.kind == "x-ray" else None

    @property
    def d_min_A(self) -> float:
        """Smallest spacing (Å) this probe can show: λ/2, and 0 for time of flight."""
        return 0.0 if self.geometry == "time-of-flight" else self.wavelength_A / 2.0

    def f2(self, lines: Lines) -> NDArray[np.float64]:
        """|F|² (n,) of one reflection per cell as this probe sees it: electron², Å² or fm²."""
        if self.kind == "electron":
            return lines.f2_electron
        return lines.f2_xray if self.kind == "x-ray" else lines.f2_neutron

    def weights(
        self,
        d_A: ArrayLike,
        multiplicity: ArrayLike,
        f2: ArrayLike,
        *,
        quantity: Quantity = "mean",
    ) -> NDArray[np.float64]:
        """Kinematic intensity of lines, unnormalised; any shape, arguments broadcast.

        quantity="mean" is the intensity per unit length of ring: the radial profile's peak area, or
        what a counter or a strip of film sees. quantity="sum" is the flux of the whole ring.

        A cone takes m|F|²/sinθ times the polarisation and spreads it over a circumference ∝ sin2θ
        (on a sphere or cylinder) or ∝ tan2θ (on a plate). Hence
        electrons at small angle: mean m|F|²d², sum m|F|²d (Vainshtein, Structure Analysis by
        Electron Diffraction, 1964); the relativistic mass factor, common to all lines, is left out;
        X-rays: mean m|F|² P/(sin²θ cosθ) (International Tables C, 6.2), times cos2θ on a plate;
        neutrons: the same without P; time of flight: m|F|²d⁴ (Buras & Gerward 1975, Acta Cryst.
        A31, 372). Absorption, texture, extinction and dynamical scattering are not in it.

        Lines that λ cannot reach (sinθ > 1; on a plate 2θ ≥ 90°) weigh 0. Beyond 2θ = 175° the
        diverging 1/cosθ is held at its value there.
        """
        d = np.asarray(d_A, dtype=np.float64)
        strength = np.asarray(multiplicity, dtype=np.float64) * np.asarray(f2, dtype=np.float64)
        result: NDArray[np.float64] = strength * self._geometry_factor(d, quantity)
        return result

    def intensity(self, lines: Lines, *, quantity: Quantity = "mean") -> NDArray[np.float64]:
        """Relative intensity (n,) of a phase's lines, strongest = 100; zeros if it shows none."""
        weights = self.weights(lines.d_A, lines.multiplicity, self.f2(lines), quantity=quantity)
        strongest = weights.max(initial=0.0)
        return weights * (100.0 / strongest) if strongest > 0 else np.zeros_like(weights)

    def polarisation_factor(self, two_theta_deg: ArrayLike) -> NDArray[np.float64]:
        """What polarisation leaves of an X-ray line at 2θ; 1 in the forward direction.

        (1 + A cos²2θ)/(1 + A), A = cos²2θ_M (1 − p)/p, with p the fraction polarised normal to the
        plane of diffraction and θ_M the monochromator's angle (ideally mosaic crystal; Azaroff
        1955, Acta Cryst. 8, 701).
        """
        return self._polarisation(np.cos(np.radians(np.asarray(two_theta_deg, dtype=np.float64))))

    def _polarisation(self, cos_two_theta: NDArray[np.float64]) -> NDArray[np.float64]:
        mono = float(np.cos(np.radians(self.monochromator_two_theta_deg))) ** 2
        parallel = mono * (1.0 - self.polarisation) / self.polarisation
        result: NDArray[np.float64] = (1.0 + parallel * cos_two_theta**2) / (1.0 + parallel)
        return result

    def _geometry_factor(self, d: NDArray[np.float64], quantity: Quantity) -> NDArray[np.float64]:
        if self.geometry == "ring":
            return d**2 if quantity == "mean" else d
        if self.geometry == "time-of-flight":
            return d**4
        sine = self.wavelength_A / (2.0 * d)
        reached = sine <= 1.0
        sine = np.minimum(sine, 1.0)
        cosine = np.maximum(np.sqrt(1.0 - sine**2), _COS_THETA_FLOOR)
        cos_two_theta = 1.0 - 2.0 * sine**2
        factor = 1.0 / sine if quantity == "sum" else 1.0 / (2.0 * sine**2 * cosine)
        if self.kind == "x-ray":
            factor = factor * self._polarisation(cos_two_theta)
        if self.geometry == "transmission":
            reached &= cos_two_theta > 0
            if quantity == "mean":
                factor = factor * cos_two_theta
        return np.where(reached, factor, 0.0)


def ghost_d_A(d_A: float, probe: Probe, ghost_wavelength_A: float) -> float:
    """Spacing (Å) that a ghost ring of planes d_A seems to have, its angle read with the probe's λ.

    The ghost line λ' prints at sinθ = λ'/2d and is read as λ/(2 sinθ) = d λ/λ'. Copper Kβ seen
    through Cu Kα1 sits at 1.1066 d.
    """
    return d_A * probe.wavelength_A / ghost_wavelength_A
