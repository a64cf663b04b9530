"""Simulated ring patterns whose physics is not phaseid's own.

Structure factors come from gemmi's calculators (International Tables C form factors through gemmi's
own summation, Sears 1992 lengths) on the CIF text of each structure; geometry, noise and losses are
written here, apart from phaseid.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import gemmi
import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.cif_writer import crystal_to_cif
from phaseid.crystal.crystal import Crystal
from phaseid.rings import rings_from_text
from phaseid.rings.ringlist import RingList

Floats = NDArray[np.float64]

CU_KA1_A = 1.5405929
NEUTRON_A = 1.54
LOW_INDEX = ((1, 0, 0), (1, 1, 0), (1, 1, 1), (0, 0, 1))
GRADES = ((70.0, "vs"), (45.0, "s"), (22.0, "m"), (9.0, "w"), (0.0, "vw"))


@dataclass(frozen=True)
class Powder:
    """Reflections of one structure: d (Å), multiplicity × |F|² / volume² for each probe.

    `normals` lists, for each reflection, the plane normals (e, 3) that symmetry makes equivalent,
    as unit vectors; `axes` (a, 3) those of planes of low index.
    """

    d_A: Floats
    strength: dict[str, Floats]
    normals: list[Floats]
    axes: Floats


def powder(crystal: Crystal, d_min_A: float = 0.7) -> Powder:
    """Reflections down to `d_min_A` (coarser for large cells), by gemmi."""
    block = gemmi.cif.read_string(crystal_to_cif(crystal)).sole_block()
    structure = gemmi.make_small_structure_from_block(block)
    if structure.spacegroup is None:
        raise ValueError("no tabulated space group")
    structure.change_occupancies_to_crystallographic()
    for site in structure.sites:
        if site.u_iso <= 0 and not site.aniso.nonzero():
            site.u_iso = 0.6 / (8 * math.pi**2)
    cell = structure.cell
    d_min_A = max(d_min_A, (cell.volume / 1500.0) ** (1 / 3) * 0.8)
    hkls = gemmi.make_miller_array(cell, structure.spacegroup, d_min_A)
    operations = structure.spacegroup.operations()
    calculators = {
        "x-ray": gemmi.StructureFactorCalculatorX(cell),
        "electron": gemmi.StructureFactorCalculatorE(cell),
        "neutron": gemmi.StructureFactorCalculatorN(cell),
    }
    centric = operations.is_centrosymmetric()
    d = np.array([cell.calculate_d([int(i) for i in h]) for h in hkls])
    multiplicity = np.empty(len(hkls))
    for row, h in enumerate(hkls):
        index = [int(i) for i in h]
        share = operations.epsilon_factor_without_centering(index)
        pairs = centric or operations.is_reflection_centric(index)
        point_count = len(operations.sym_ops)
        multiplicity[row] = point_count / share * (1 if pairs else 2)
    strength = {}
    for kind, calculator in calculators.items():
        f2 = [
            abs(calculator.calculate_sf_from_small_structure(structure, [int(i) for i in h])) ** 2
            for h in hkls
        ]
        strength[kind] = multiplicity * np.array(f2) / cell.volume**2
    turns = np.array([np.array(op.rot, dtype=float) / op.DEN for op in operations.sym_ops])
    to_cartesian = np.array(cell.frac.mat.tolist())
    normals = []
    for h in hkls:
        vectors = np.unique(np.asarray(h, dtype=float) @ turns, axis=0) @ to_cartesian
        normals.append(vectors / np.linalg.norm(vectors, axis=1)[:, None])
    axes = np.array(LOW_INDEX, dtype=float) @ to_cartesian
    return Powder(d, strength, normals, axes / np.linalg.norm(axes, axis=1)[:, None])


def march_dollase(normals: list[Floats], axis: Floats, ratio: float, *, in_plane: bool) -> Floats:
    """Intensity of each reflection over a random powder's, for a fibre texture about `axis`.

    (r² cos² α + sin² α / r)^(-3/2) with α between a crystallite's axis and the surface normal
    (March 1932; Dollase 1986). Reflection sees planes parallel to the surface; `in_plane`, a beam
    along the surface normal, planes that hold it: a normal at β to the axis then leaves the axis
    anywhere on a cone, cos α = sin β cos φ.
    """
    turn = np.linspace(0.0, 2.0 * np.pi, 72, endpoint=False)
    factors = []
    for equivalents in normals:
        cosine = np.abs(equivalents @ axis)
        if in_plane:
            sine = np.sqrt(np.maximum(1.0 - cosine**2, 0.0))
            cosine = sine[:, None] * np.cos(turn)
        square = cosine**2
        factors.append(float(((ratio**2 * square + (1.0 - square) / ratio) ** -1.5).mean()))
    return np.array(factors)


@dataclass(frozen=True)
class Conditions:
    """How a simulated pattern is taken.

    `scale` one-sigma of the common scale, `sigma` of each ring (relative for electrons, degrees of
    two-theta otherwise), `understated` how many times larger the true one is; `scatter` of ln
    intensity; `texture` the March–Dollase parameter of a fibre texture about an axis of low index
    (None: random); `limit` of detection; `lost` chance that a ring is overlooked; `foreign` mean
    number of rings from nowhere; `strain` of each phase; `grades` instead of numbers; `most` rings
    kept.
    """

    kind: str
    scale: float
    sigma: float
    scatter: float
    limit: float
    lost: float = 0.02
    foreign: float = 0.2
    strain: float = 0.001
    understated: float = 1.0
    displacement_deg: float = 0.03
    grades: bool = False
    most: int | None = None
    texture: float | None = None


ELECTRON = Conditions("electron", scale=0.005, sigma=0.003, scatter=0.45, limit=0.03)
XRAY = Conditions("x-ray", scale=0.0003, sigma=0.02, scatter=0.18, limit=0.02)
NEUTRON = Conditions("neutron", scale=0.002, sigma=0.05, scatter=0.15, limit=0.03)


@dataclass
class Simulator:
    """Draws patterns of mixtures of crystals, by number; everything random comes from `rng`."""

    crystal: Callable[[int], Crystal]
    rng: np.random.Generator
    powders: dict[int, Powder] = field(default_factory=dict)

    def usable(self, index: int) -> bool:
        """Whether gemmi can compute this structure."""
        try:
            return len(self.powder(index).d_A) > 0
        except (ValueError, RuntimeError, IndexError):
            return False

    def powder(self, index: int) -> Powder:
        if index not in self.powders:
            self.powders[index] = powder(self.crystal(index))
        return self.powders[index]

    def lines_above(self, index: int, how: Conditions, share: float) -> int:
        """How many lines between 0.9 and 5 Å stand at twice the detection limit or more."""
        reflections = self.powder(index)
        d = reflections.d_A
        weight = reflections.strength[how.kind] * _geometry(d, how.kind)
        return int(((share * weight > 2.0 * how.limit * weight.max()) & (d > 0.9) & (d < 5)).sum())

    def pattern(self, phases: list[int], shares: list[float], how: Conditions) -> RingList | None:
        """Rings of a mixture; `shares` are relative strengths of the strongest lines.

        None where fewer than three rings are seen.
        """
        rng = self.rng
        x, intensity = self._lines(phases, shares, how)
        high = math.log(rng.uniform(4.0, 9.0))
        low = math.log(rng.uniform(0.80, 1.15))
        inside = (x > low) & (x < high)
        x, intensity = _merge(x[inside], intensity[inside], how.kind)
        if len(x) == 0:
            return None
        intensity = intensity * np.exp(rng.normal(0.0, how.scatter, len(x)))
        intensity /= intensity.max()
        chance = 1.0 / (1.0 + (how.limit / np.maximum(intensity, 1e-9)) ** 3)
        seen = (rng.random(len(x)) < chance) & (rng.random(len(x)) > how.lost)
        x, intensity = x[seen], intensity[seen]
        if len(x) < 3:
            return None
        extra = rng.poisson(how.foreign)
        x = np.append(x, rng.uniform(x.min(), x.max(), extra))
        weak = np.exp(rng.uniform(math.log(how.limit), math.log(0.4), extra))
        intensity = np.append(intensity, weak)
        if how.most is not None:
            strongest = np.argsort(-intensity)[: how.most]
            x, intensity = x[strongest], intensity[strongest]
        return self._measure(x, 100.0 * intensity / intensity.max(), how)

    def _lines(
        self, phases: list[int], shares: list[float], how: Conditions
    ) -> tuple[Floats, Floats]:
        positions, strengths = [], []
        for phase, share in zip(phases, shares, strict=True):
            reflections = self.powder(phase)
            d = reflections.d_A
            weight = reflections.strength[how.kind] * _geometry(d, how.kind)
            if how.texture is not None:
                axis = self.rng.choice(reflections.axes)
                flat = how.kind == "electron"
                weight = weight * march_dollase(
                    reflections.normals, axis, how.texture, in_plane=flat
                )
            positions.append(np.log(d) + self.rng.normal(0.0, how.strain))
            strengths.append(share * weight / weight.max())
        return np.concatenate(positions), np.concatenate(strengths)

    def _measure(self, x: Floats, intensity: Floats, how: Conditions) -> RingList:
        """Write the ring list as a person would, and read it back."""
        rng = self.rng
        x = x + rng.normal(0.0, how.scale)
        noise = rng.normal(0.0, how.understated, len(x))
        order = np.argsort(-x)
        if how.kind == "electron":
            position = np.exp(x + how.sigma * noise)
            column, sigma, probe = "d_A", how.sigma * position, "electron 200 kV"
        else:
            wavelength = CU_KA1_A if how.kind == "x-ray" else NEUTRON_A
            theta = np.arcsin(np.clip(wavelength / 2.0 / np.exp(x), 0.0, 0.999))
            position = 2.0 * np.degrees(theta) + how.sigma * noise + rng.normal(0.0, 0.02)
            if how.kind == "x-ray":
                position = position + rng.normal(0.0, how.displacement_deg) * np.cos(theta)
            column, sigma = "two_theta_deg", np.full(len(x), how.sigma)
            probe = "x-ray Cu Ka1" if how.kind == "x-ray" else f"neutron {NEUTRON_A} A"
        rows = [
            f"{position[i]:.5f},{sigma[i]:.5f},{_written(intensity[i], how.grades)}" for i in order
        ]
        text = "\n".join(
            [
                f"# probe: {probe}",
                f"# scale uncertainty: {how.scale}",
                f"{column},sigma,intensity",
                *rows,
            ]
        )
        return rings_from_text(text, source="simulated")


def _written(intensity: float, grades: bool) -> str:
    if not grades:
        return f"{intensity:.2f}"
    return next(name for least, name in GRADES if intensity >= least)


def _geometry(d: Floats, kind: str) -> Floats:
    """Factor on m|F|² for the mean along the ring: d², or Lorentz (and polarisation)."""
    if kind == "electron":
        return d**2
    sine = (CU_KA1_A if kind == "x-ray" else NEUTRON_A) / (2.0 * d)
    theta = np.arcsin(np.minimum(sine, 0.98))
    factor = 1.0 / (np.sin(theta) ** 2 * np.cos(theta))
    if kind == "x-ray":
        factor = factor * (1.0 + np.cos(2.0 * theta) ** 2) / 2.0
    return np.where(sine < 0.98, factor, 0.0)


def _merge(x: Floats, intensity: Floats, kind: str) -> tuple[Floats, Floats]:
    """Lines closer than the pattern resolves, added up at their centre."""
    order = np.argsort(x)
    x, intensity = x[order], intensity[order]
    if kind == "electron":
        width = np.full(len(x), 0.007)
    else:
        sine = np.clip(CU_KA1_A / 2.0 / np.exp(x), 0.0, 0.99)
        degrees = 0.12 if kind == "x-ray" else 0.24
        width = np.sqrt(1.0 - sine**2) / sine * math.radians(degrees) / 2.0
    centres, sums = [], []
    start = 0
    for i in range(1, len(x) + 1):
        apart = i == len(x) or x[i] - x[i - 1] > width[i] or x[i] - x[start] > 1.8 * width[start]
        if apart:
            total = intensity[start:i].sum()
            if total > 0:
                centres.append(float((x[start:i] * intensity[start:i]).sum() / total))
                sums.append(float(total))
            start = i
    return np.array(centres), np.array(sums)
