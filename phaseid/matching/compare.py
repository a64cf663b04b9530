"""Can two phases be told apart by rings, at which precision, by which rings?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import exp
from statistics import NormalDist
from typing import Literal

import numpy as np

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.lines import compute_lines
from phaseid.errors import InputError
from phaseid.library.linetable import LineTable
from phaseid.library.phase import Phase
from phaseid.matching.crowd import crowd
from phaseid.matching.likelihood import evaluate
from phaseid.matching.lineset import gather
from phaseid.matching.model import Looseness, Model
from phaseid.matching.patterns import Floats, Pattern, prepare
from phaseid.matching.records import Record, Tidy, indices
from phaseid.matching.small_library import table_of
from phaseid.matching.standard_rings import resolution
from phaseid.probes.probe import Probe
from phaseid.rings import RingList, rings_from_values
from phaseid.rings.calibration import ReferenceLines, merged

CELL_SIGMA = 5e-4
"""Relative one-sigma of a listed cell against the specimen's: compilations agree to about that."""
SEPARABLE = 0.95
_SURE = 3.29
"""A difference of so many sigmas is taken for the right phase in 95 % of cases: 2 Φ⁻¹(0.95)."""
_WEAKEST_LISTED = 4.0
_WEAKER = 0.05
"""Lines of the other phase weaker than this part of a ring cannot be mistaken for it."""
_STRONG = 10.0
_LARGEST_D_A = 12.0
_SMALLEST_D_A = 0.8
_MOST_RINGS = 40
_FAR = 0.1
"""A ring further than this (in ln d) from every line of the other phase stands alone."""
_REALISATIONS = 32
_SEED = 20240601
_SHIFTS = 41


@dataclass(frozen=True, slots=True)
class TellingRing:
    """A ring that tells two phases apart.

    `of` which of them shows it; `intensity` there, strongest = 100; `difference` relative distance
    in d to the other phase's nearest line, None where it has none within a tenth; `by` "ratio"
    where ring ratios show it, "scale" where only the absolute scale does;
    `needs_relative_precision` the one-sigma, relative to d, at which this ring alone decides
    rightly in 95 % of cases.
    """

    d_A: float
    of: Literal["A", "B"]
    hkl: tuple[int, int, int]
    intensity: float
    difference: float | None
    by: Literal["ratio", "scale"]
    needs_relative_precision: float


@dataclass(frozen=True, slots=True, eq=False)
class Comparison(Tidy):
    """Whether two phases can be told apart.

    `confidence`: in which share of such measurements the true one of the two would be the likelier,
    either being as probable beforehand; `reading_sigma` median relative one-sigma of a ring;
    `telling` the rings that tell, the most telling first.
    """

    phases: tuple[Phase, Phase]
    probe: Probe
    separable: bool
    confidence: float
    reading_sigma: float
    d_range_A: tuple[float, float]
    telling: tuple[TellingRing, ...]
    elements: tuple[tuple[str, ...], tuple[str, ...]]

    def records(self) -> list[Record]:
        """One record per ring that tells, the most telling first."""
        return [
            {
                "d_A": ring.d_A,
                "of": self.phases[0 if ring.of == "A" else 1].name,
                "hkl": indices(ring.hkl),
                "intensity": ring.intensity,
                "difference": ring.difference,
                "by": ring.by,
                "needs_relative_precision": ring.needs_relative_precision,
            }
            for ring in self.telling
        ]

    def summary(self) -> str:
        """Whether they can be told apart, and how often rightly."""
        can = "can" if self.separable else "cannot"
        return (
            f"{self.phases[0].name} and {self.phases[1].name} {can} be told apart: the right one "
            f"is the likelier in {100 * self.confidence:.0f} % of such measurements"
        )


def compare(
    first: tuple[Phase, Crystal],
    second: tuple[Phase, Crystal],
    probe: Probe,
    *,
    sigma: str | None = None,
    d_range_A: tuple[float | None, float | None] = (None, None),
    cell_sigma: float = CELL_SIGMA,
) -> Comparison:
    """Compare two phases as patterns of this probe would show them.

    `sigma` is the reading error of one ring in Å or in % of d (default: usual for the probe);
    `d_range_A` the spacings that are seen. Raises InputError where a phase shows nothing there.
    """
    low = max(d_range_A[0] or _SMALLEST_D_A, probe.d_min_A * 1.02)
    high = d_range_A[1] or _LARGEST_D_A
    if low >= high:
        raise InputError(
            f"no spacings lie between {low:g} and {high:g} Å",
            remedy="Give --d-min below --d-max, both within reach of the probe.",
        )
    phases = (first[0], second[0])
    table = table_of(
        probe.kind,
        [
            (phase, compute_lines(crystal, d_min_A=low, xray_energy_eV=probe.xray_energy_eV))
            for phase, crystal in (first, second)
        ],
    )
    every = [_every(table, i, phases[i], probe, low, high) for i in (0, 1)]
    shown = [_listed(lines) for lines in every]
    ideal = [_rings(lines, probe, sigma) for lines in shown]
    confidence = 0.5 * sum(_share_right(table, ideal[i], i, cell_sigma) for i in (0, 1))
    reading = float(np.median(np.concatenate([r.sigma_A / r.d_A for r in ideal])))
    return Comparison(
        phases=phases,
        probe=probe,
        separable=confidence >= SEPARABLE,
        confidence=confidence,
        reading_sigma=reading,
        d_range_A=(low, high),
        telling=_telling(shown, every, probe.scale_sigma, reading),
        elements=(
            tuple(sorted(set(phases[0].elements) - set(phases[1].elements))),
            tuple(sorted(set(phases[1].elements) - set(phases[0].elements))),
        ),
    )


def _every(
    table: LineTable, i: int, phase: Phase, probe: Probe, low: float, high: float
) -> ReferenceLines:
    """All rings of one phase within the range, those that merge as one."""
    rows = slice(int(table.offsets[i]), int(table.offsets[i + 1]))
    d = table.d_A[rows]
    intensity = probe.weights(d, table.multiplicity[rows], table.f2[rows])
    inside = (d > low) & (d < high) & (intensity > 0)
    if not inside.any():
        raise InputError(
            f"{phase.name or phase.formula} shows no ring between {low:g} and {high:g} Å",
            remedy="Widen the range with --d-min and --d-max.",
        )
    strongest = np.argsort(-np.where(inside, intensity, 0.0), kind="stable")[:200]
    strongest = strongest[inside[strongest]]
    lines = ReferenceLines(
        np.log(d[strongest]),
        table.hkl[rows][strongest].astype(np.int64),
        100.0 * intensity[strongest] / intensity[inside].max(),
    )
    return merged(lines, resolution(lines.x, probe))


def _listed(lines: ReferenceLines) -> ReferenceLines:
    """The rings that a list would hold."""
    strongest = np.argsort(-lines.intensity, kind="stable")[:_MOST_RINGS]
    keep = np.sort(strongest[lines.intensity[strongest] > _WEAKEST_LISTED])
    return ReferenceLines(lines.x[keep], lines.hkl[keep], lines.intensity[keep])


def _rings(lines: ReferenceLines, probe: Probe, sigma: str | None) -> RingList:
    """The ring list that a faultless measurement of these lines would give."""
    return rings_from_values(
        [float(x) for x in np.exp(lines.x)],
        probe=probe,
        sigma=sigma,
        intensities=[float(i) for i in lines.intensity],
        title="predicted",
    )


def _share_right(table: LineTable, rings: RingList, true: int, cell_sigma: float) -> float:
    """In which share of noisy repetitions of a pattern of phase `true` it is the likelier one.

    The log-likelihood ratio is close to normal over the repetitions; its mean and spread say more
    than the count of a few of them.
    """
    generator = np.random.default_rng(_SEED + true)
    gaps = np.empty(_REALISATIONS)
    for i in range(_REALISATIONS):
        pattern = prepare(_repeated(rings, generator, cell_sigma))
        likelihood = _likelihoods(table, pattern, cell_sigma)
        gaps[i] = likelihood[true] - likelihood[1 - true]
    if float(np.ptp(gaps)) < 1e-9:
        return 0.5 if abs(float(gaps[0])) < 1e-9 else float(gaps[0] > 0)
    return NormalDist().cdf(float(gaps.mean() / gaps.std(ddof=1)))


def _repeated(rings: RingList, generator: np.random.Generator, cell_sigma: float) -> RingList:
    """The rings with the errors of reading, scale, cell and intensity that the model knows."""
    pattern = prepare(rings)
    scatter = pattern.scatter
    count = len(rings)
    common = generator.normal(0.0, rings.probe.scale_sigma) + generator.normal(0.0, cell_sigma)
    relative = rings.sigma_A / rings.d_A
    angles = pattern.nuisance[:, 1:] @ generator.normal(size=pattern.nuisance.shape[1] - 1)
    angles = np.interp(np.log(rings.d_A), pattern.x, angles) if len(pattern) > 1 else angles
    d = rings.d_A * np.exp(common + angles + relative * generator.normal(size=count))
    odd = generator.random(count) < scatter.odd_share
    width = np.where(odd, scatter.odd_intensity, scatter.intensity)
    intensity = rings.intensity * np.exp(width * generator.normal(size=count))
    listed = generator.random(count) >= scatter.lost
    listed &= intensity > _WEAKEST_LISTED
    if not listed.any():
        listed[int(np.argmax(intensity))] = True
    intensity = intensity[listed] * (100.0 / intensity[listed].max())
    return replace(
        rings,
        position=d[listed],
        position_sigma=rings.position_sigma[listed],
        d_A=d[listed],
        sigma_A=rings.sigma_A[listed],
        intensity=intensity,
        intensity_range=np.stack([intensity, intensity], axis=1),
        grades=tuple("" for _ in intensity),
        notes=tuple("" for _ in intensity),
    )


def _likelihoods(table: LineTable, pattern: Pattern, cell_sigma: float) -> Floats:
    """ln likelihood of each phase of the table, at the best of many common shifts."""
    every = np.arange(len(table))
    model = Model((pattern,), (gather(table, every, pattern),), (crowd(table, every, pattern),))
    reach = 3.0 * float(np.hypot(pattern.probe.scale_sigma, cell_sigma))
    count = int(np.clip(2 * np.ceil(reach / float(np.median(pattern.sigma))) + 1, 5, _SHIFTS))
    shifts = np.linspace(-reach, reach, count)
    members = np.repeat(every, count)[:, None]
    offset = np.tile(shifts, len(every))[:, None, None]
    loose = replace(Looseness.listed((len(members), 1)), strain=np.full(members.shape, cell_sigma))
    fit = evaluate(model, members, offset, loose)
    best: Floats = fit.log_likelihood.reshape(len(every), count).max(axis=1)
    return best


def _telling(
    shown: Sequence[ReferenceLines],
    every: Sequence[ReferenceLines],
    scale_sigma: float,
    reading: float,
) -> tuple[TellingRing, ...]:
    """The rings of either phase that the other does not show at the same place."""
    shift = _common_shift(shown[0], shown[1])
    found: list[tuple[float, TellingRing]] = []
    names: tuple[Literal["A", "B"], Literal["A", "B"]] = ("A", "B")
    for i in (0, 1):
        own, other = shown[i], every[1 - i]
        for j in range(len(own.x)):
            like = other.x[other.intensity >= _WEAKER * own.intensity[j]]
            raw = float(np.abs(own.x[j] - like).min(initial=_FAR))
            moved = like + (shift if i == 0 else -shift)
            after = float(np.abs(own.x[j] - moved).min(initial=_FAR))
            by: Literal["ratio", "scale"] = "ratio" if after >= raw / 2 else "scale"
            difference = after if by == "ratio" else raw
            if difference < 1e-5:
                continue
            ring = TellingRing(
                d_A=exp(own.x[j]),
                of=names[i],
                hkl=(int(own.hkl[j, 0]), int(own.hkl[j, 1]), int(own.hkl[j, 2])),
                intensity=float(own.intensity[j]),
                difference=difference if difference < _FAR else None,
                by=by,
                needs_relative_precision=difference / _SURE,
            )
            found.append((_worth(ring, scale_sigma, reading), ring))
    found.sort(key=lambda entry: (-entry[0], -entry[1].d_A))
    return tuple(ring for _, ring in found)


def _worth(ring: TellingRing, scale_sigma: float, reading: float) -> float:
    """How far a ring goes towards telling: its distance in sigmas, capped, and its strength."""
    sigma = reading if ring.by == "ratio" else float(np.hypot(reading, scale_sigma))
    distance = ring.needs_relative_precision * _SURE / sigma
    return min(distance, 10.0) * ring.intensity / (ring.intensity + _STRONG)


def _common_shift(first: ReferenceLines, second: ReferenceLines) -> float:
    """Shift in ln d, within 6 %, that lays most of the second phase's lines on the first's."""
    gaps = (first.x[:, None] - second.x[None, :]).ravel()
    weight = np.sqrt(first.intensity[:, None] * second.intensity[None, :]).ravel()
    near = np.abs(gaps) < 0.06
    if not near.any():
        return 0.0
    gaps, weight = gaps[near], weight[near]
    score = (weight[None, :] * np.exp(-0.5 * ((gaps[:, None] - gaps[None, :]) / 0.0015) ** 2)).sum(
        axis=1
    )
    score -= 1e-6 * np.abs(gaps)  # of equals the smallest
    best = float(gaps[np.argmax(score)])
    close = np.abs(gaps - best) < 0.003
    return float(np.average(gaps[close], weights=weight[close]))
