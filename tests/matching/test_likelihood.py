"""The likelihood against closed forms, on made-up phases.

Outside references: the multivariate normal density of scipy.stats, minimisation by scipy.optimize,
Bragg's law for the shifts of a diffractometer.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import lgamma, log

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import minimize
from scipy.special import expit
from scipy.stats import multivariate_normal

from phaseid.library import Library
from phaseid.matching import positions, settings
from phaseid.matching.likelihood import evaluate, nothing_listed
from phaseid.matching.lineset import gather
from phaseid.matching.model import Fit, Model
from phaseid.matching.patterns import prepare
from phaseid.rings import RingList
from tests.matching.published import published_rings
from tests.matching.toys import Toy, part_of, toy_model, toy_rings

D_A = (3.0, 2.2, 1.7, 1.35)
SIGMA, SCALE = 0.004, 0.01
PLACED = float(np.hypot(SIGMA, settings.LISTED_JITTER))
"""One-sigma of a ring of a listed phase: of the reading, and of the line's own place."""
EVEN = Toy(D_A, (100, 80, 60, 40))
Floats = NDArray[np.float64]


def fit_of(model: Model, *members: int) -> Fit:
    start = np.zeros((1, len(members), len(model.patterns)))
    return evaluate(model, np.array([members], dtype=np.int64), start)


def value_of(model: Model, *members: int) -> float:
    return float(fit_of(model, *members).log_likelihood[0])


def moved(shift: Sequence[float], **options: object) -> RingList:
    """Rings of the even toy, each displaced by so much in ln d, without intensities."""
    return toy_rings(np.array(D_A) * np.exp(shift), SIGMA, scale=SCALE, **options)  # type: ignore[arg-type]


# ---------------------------------------------------------------- positions


def log_normal_mixture(residual: Floats, sigma: Floats, common: Floats) -> float:
    """ln density of residuals whose reading errors are inflated by an unknown factor."""
    terms = [
        log(prior)
        + multivariate_normal.logpdf(residual, cov=np.diag((factor * sigma) ** 2) + common)
        for factor, prior in settings.SIGMA_INFLATION
    ]
    return float(np.logaddexp.reduce(terms))


@pytest.mark.parametrize(
    "shift",
    [
        (0.001, -0.003, 0.002, 0.0),
        (0.008, 0.011, 0.010, 0.009),
        (-0.002, -0.004, 0.004, 0.006),
        (-0.012, -0.010, -0.013, -0.011),
    ],
)
def test_positions_have_the_density_of_a_multivariate_normal(shift: Sequence[float]) -> None:
    """Reading errors and jitter, one common scale, one strain: diag(σ²f²) + (s² + t²) 11ᵀ."""
    at_rest, _ = toy_model([EVEN], [moved((0, 0, 0, 0))])
    displaced, _ = toy_model([EVEN], [moved(shift)])
    common = np.full((4, 4), SCALE**2 + settings.STRAIN**2)
    sigma = np.full(4, PLACED)
    expected = log_normal_mixture(np.array(shift), sigma, common) - log_normal_mixture(
        np.zeros(4), sigma, common
    )
    assert value_of(displaced, 0) - value_of(at_rest, 0) == pytest.approx(expected, abs=1e-6)


def test_scale_and_strain_are_the_mean_of_their_joint_normal_distribution() -> None:
    """Both shift all rings alike, so the mean shift is shared in the ratio of their variances."""
    shift = np.array((0.008, 0.011, 0.010, 0.009))
    model, _ = toy_model([EVEN], [moved(shift.tolist())])
    fit = fit_of(model, 0)
    prior = SCALE**2 + settings.STRAIN**2
    gain = prior / (prior + PLACED**2 / 4)
    assert fit.scale[0, 0] == pytest.approx(shift.mean() * gain * SCALE**2 / prior, rel=1e-6)
    assert fit.strain[0, 0] == pytest.approx(
        shift.mean() * gain * settings.STRAIN**2 / prior, rel=1e-6
    )
    scale_sd = SCALE * np.sqrt(1 - SCALE**2 / (prior + PLACED**2 / 4))
    assert fit.scale_sd[0, 0] == pytest.approx(scale_sd, rel=1e-6)


def test_a_diffractometer_may_be_off_by_zero_shift_and_displacement() -> None:
    """Their effects on ln d follow from Bragg's law: here by differences, there by derivatives."""
    wavelength = 1.5405929
    shift = np.array((0.0006, 0.0001, -0.0002, 0.0003))
    options = {"probe": "x-ray Cu Ka1", "scale": 5e-4}
    at_rest, _ = toy_model([EVEN], [toy_rings(D_A, SIGMA / 10, **options)])  # type: ignore[arg-type]
    displaced, _ = toy_model(
        [EVEN],
        [toy_rings(np.array(D_A) * np.exp(shift), SIGMA / 10, **options)],  # type: ignore[arg-type]
    )
    assert at_rest.patterns[0].probe.geometry == "bragg-brentano"
    rising = np.sort(np.array(D_A) * np.exp(shift))
    theta = np.arcsin(wavelength / 2 / rising)

    def misread(error_deg: Floats) -> Floats:
        result: Floats = np.log(wavelength / 2 / np.sin(theta + np.radians(error_deg) / 2))
        return result - np.log(rising)

    zero = misread(np.full(4, settings.ZERO_SHIFT_DEG))
    displacement = misread(settings.DISPLACEMENT_DEG * np.cos(theta))
    common = np.full((4, 4), 5e-4**2 + settings.STRAIN**2)
    common = common + np.outer(zero, zero) + np.outer(displacement, displacement)
    sigma = np.full(4, np.hypot(SIGMA / 10, settings.LISTED_JITTER))
    expected = log_normal_mixture(shift[::-1], sigma, common) - log_normal_mixture(
        np.zeros(4), sigma, common
    )
    found = value_of(displaced, 0) - value_of(at_rest, 0)
    assert found == pytest.approx(expected, abs=5e-3)
    assert abs(expected) > 0.1


def test_two_patterns_share_the_strain_of_a_phase_but_not_their_scales(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(positions, "SIGMA_INFLATION", ((1.0, 0.5), (1.0, 0.5)))
    first, second = (0.003, 0.001, 0.002, 0.004), (-0.002, 0.001, 0.001, -0.001)
    at_rest, _ = toy_model([EVEN], [moved((0, 0, 0, 0)), moved((0, 0, 0, 0))])
    displaced, _ = toy_model([EVEN], [moved(first), moved(second)])
    covariance = np.full((8, 8), settings.STRAIN**2) + np.diag(np.full(8, PLACED**2))
    covariance[:4, :4] += SCALE**2
    covariance[4:, 4:] += SCALE**2
    expected = multivariate_normal.logpdf(
        np.array([*first, *second]), cov=covariance
    ) - multivariate_normal.logpdf(np.zeros(8), cov=covariance)
    assert value_of(displaced, 0) - value_of(at_rest, 0) == pytest.approx(expected, abs=1e-6)


def test_two_phases_share_the_scale_of_a_pattern_but_not_their_strains(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(positions, "SIGMA_INFLATION", ((1.0, 0.5), (1.0, 0.5)))
    toys = [Toy(D_A[:2], (100, 80)), Toy(D_A[2:], (100, 70), ("O",))]
    shift = np.array((0.003, 0.001, -0.002, -0.001))
    at_rest, _ = toy_model(toys, [moved((0, 0, 0, 0))])
    displaced, _ = toy_model(toys, [moved(shift.tolist())])
    covariance = np.full((4, 4), SCALE**2) + np.diag(np.full(4, PLACED**2))
    covariance[:2, :2] += settings.STRAIN**2
    covariance[2:, 2:] += settings.STRAIN**2
    expected = multivariate_normal.logpdf(shift, cov=covariance) - multivariate_normal.logpdf(
        np.zeros(4), cov=covariance
    )
    assert value_of(displaced, 0, 1) - value_of(at_rest, 0, 1) == pytest.approx(expected, abs=1e-6)


# ---------------------------------------------------------------- batches


def test_a_batch_is_judged_as_its_members_are_one_by_one(starter_library: Library) -> None:
    rng = np.random.default_rng(3)
    table = starter_library.line_table("x-ray")
    chosen = rng.choice(len(table), 40, replace=False)
    table = part_of(table, {table.phase_ids[i] for i in chosen})
    pattern = prepare(published_rings("corundum"))
    model = Model(
        (pattern,), (gather(table, np.arange(40), pattern),), (np.full(len(pattern), 1.5),)
    )
    members = np.array([rng.choice(40, 2, replace=False) for _ in range(25)])
    start = rng.normal(0, 0.002, (25, 2, 1))
    batch = evaluate(model, members, start)
    for row in range(25):
        alone = evaluate(model, members[row : row + 1], start[row : row + 1])
        assert batch.log_likelihood[row] == pytest.approx(alone.log_likelihood[0], abs=1e-8)
        assert batch.offset[row] == pytest.approx(alone.offset[0], abs=1e-10)
        assert np.array_equal(batch.patterns[0].claimed[row], alone.patterns[0].claimed[0])
        own = alone.patterns[0].line_ring[0]
        ring = batch.patterns[0].line_ring[row]
        assert np.array_equal(ring[:, : own.shape[1]], own)
        assert np.all(ring[:, own.shape[1] :] == -1)  # a batch is as wide as its richest set


def test_the_order_of_phases_in_a_set_does_not_matter() -> None:
    toys = [Toy(D_A[:3], (100, 80, 60)), Toy(D_A[1:], (100, 70, 40), ("O",))]
    model, _ = toy_model(toys, [moved((0.001, 0.0, -0.002, 0.001), intensities=[100, 90, 80, 30])])
    assert value_of(model, 0, 1) == pytest.approx(value_of(model, 1, 0), abs=1e-9)


# ---------------------------------------------------------------- lines that are not there


def losses(missing: float) -> float:
    """What a line of intensity `missing` amid the rings costs when it meets none."""
    toys = [
        Toy((3.0, 2.2, 1.35), (100, 80, 40)),
        Toy((3.0, 2.2, 1.7, 1.35), (100, 80, missing, 40)),
    ]
    rings = toy_rings((3.0, 2.2, 1.35), SIGMA, probe="x-ray 1 A", intensities=[100, 80, 40])
    model, _ = toy_model(toys, [rings])
    return value_of(model, 0) - value_of(model, 1)


def test_a_missing_line_costs_the_chance_of_not_seeing_it() -> None:
    """-ln(1 - chance), the chance rising around the detection limit and never quite reaching 1.

    Not to the last digit: the limit itself is known only so well.
    """
    lost = settings.SCATTER["x-ray"].lost
    limit = prepare(toy_rings(D_A[:3], SIGMA, probe="x-ray 1 A", intensities=[100, 80, 40]))
    cost = []
    for intensity in (4.0, 15.0, 40.0, 80.0):
        chance = expit(settings.DETECTION_SLOPE * (log(intensity / 100) - limit.ln_limit))
        cost.append(losses(intensity))
        assert cost[-1] == pytest.approx(-log(1 - (1 - lost) * chance), abs=0.2)
    assert np.all(np.diff(cost) > 0.05)
    assert losses(300.0) < -log(lost) + 0.1


def test_a_line_beyond_the_recorded_range_is_not_missing() -> None:
    inside = Toy((3.0, 2.2, 1.35), (100, 80, 40))
    rings = toy_rings((3.0, 2.2, 1.35), SIGMA, intensities=[100, 80, 40])
    cost = []
    for beyond in (1.30, 1.15):
        toys = [inside, Toy((3.0, 2.2, 1.35, beyond), (100, 80, 40, 80))]
        model, _ = toy_model(toys, [rings])
        cost.append(value_of(model, 0) - value_of(model, 1))
    assert cost[1] < cost[0] < losses(80.0) / 2


# ---------------------------------------------------------------- rings that are not explained


def leftover(count: int) -> float:
    """ln density of how many rings are left: from nowhere (Poisson), or an unlisted phase's."""
    stay = settings.UNLISTED_RING_COUNT / (1 + settings.UNLISTED_RING_COUNT)
    nowhere = log(1 - settings.BESIDE_PRIOR) - settings.FOREIGN_RINGS
    nowhere += count * log(settings.FOREIGN_RINGS)
    unlisted = log(settings.BESIDE_PRIOR) + log(1 - stay) + count * log(stay) + lgamma(count + 1)
    return float(np.logaddexp(nowhere, unlisted))


@pytest.mark.parametrize("places", [(2.6,), (2.5, 1.9), (2.65, 2.45, 1.95, 1.5)])
def test_foreign_rings_cost_what_their_number_says_wherever_they_lie(
    places: tuple[float, ...],
) -> None:
    crowd = 2.0
    clean, _ = toy_model([EVEN], [moved((0, 0, 0, 0))], crowd)
    dirty, _ = toy_model([EVEN], [toy_rings((*D_A, *places), SIGMA, scale=SCALE)], crowd)
    expected = len(places) * crowd + leftover(len(places)) - leftover(0)
    assert value_of(dirty, 0) - value_of(clean, 0) == pytest.approx(expected, abs=1e-6)


def test_a_ring_far_off_is_given_up_rather_than_explained() -> None:
    """Its cost stops growing with its distance."""
    value = []
    for error in (0.0, 0.01, 0.03, 0.05):
        model, _ = toy_model([EVEN], [moved((0, error, 0, 0))])
        value.append(value_of(model, 0))
    assert value[0] > value[1] > value[2]
    # not to the last digit: the trend of intensities is told from the mean place of all rings
    assert value[2] == pytest.approx(value[3], abs=1e-3)


def test_nothing_listed_is_worth_the_crowds_density_alone() -> None:
    model, _ = toy_model([EVEN], [moved((0, 0, 0, 0))], crowd=1.3)
    stay = settings.UNLISTED_RING_COUNT / (1 + settings.UNLISTED_RING_COUNT)
    expected = 4 * 1.3 + lgamma(5) + 4 * log(stay) + log(1 - stay)
    assert nothing_listed(model) == pytest.approx(expected, abs=1e-9)


# ---------------------------------------------------------------- intensities


def ln_intensity_density(model: Model, rows: NDArray[np.int64], sought: Floats) -> float:
    """What the fit maximises, written out with loops over rings and lines.

    `sought`: ln amplitude of each phase, then the trend B of a factor exp(-B (sin θ/λ)²·2), that is
    ln I falling with 1/2d² from its mean over the rings, then the error of ln of the detection
    limit. Rings: ln I strays from the summed lines
    by a normal law with a heavy tail, and each was seen with a chance that rises with its
    intensity; lines without a ring were not.
    """
    pattern, lines = model.patterns[0], model.lines[0]
    scatter = pattern.scatter
    ln_amplitude, trend, error = sought[:-2], float(sought[-2]), float(sought[-1])
    limit = pattern.ln_limit + error
    total = -0.5 * float((ln_amplitude**2).sum()) / 3.0**2 - 0.5 * (trend / settings.TREND_SD) ** 2
    total -= 0.5 * (error / settings.LIMIT_SD) ** 2
    mean = float(np.mean(1 / (2 * np.exp(pattern.x) ** 2)))
    amount = np.zeros(len(pattern))
    for k, phase in enumerate(rows):
        for j in np.flatnonzero(lines.intensity[phase] > 0):
            distance = np.abs(lines.x[phase, j] - pattern.x)
            shown = float(np.exp(ln_amplitude[k]) * lines.intensity[phase, j])
            place = pattern.x[distance.argmin()] if distance.min() < 0.005 else lines.x[phase, j]
            shown *= float(np.exp(-trend * (1 / (2 * np.exp(place) ** 2) - mean)))
            if distance.min() < 0.005:
                amount[distance.argmin()] += shown
            else:
                seen = expit(settings.DETECTION_SLOPE * (log(shown) - limit))
                total += log(1 - (1 - scatter.lost) * seen)
    for i in np.flatnonzero(amount):
        error = pattern.ln_intensity[i] - log(amount[i])
        ordinary = (1 - scatter.odd_share) * np.exp(-0.5 * (error / scatter.intensity) ** 2)
        strange = scatter.odd_share * np.exp(-0.5 * (error / scatter.odd_intensity) ** 2)
        total += log(ordinary / scatter.intensity + strange / scatter.odd_intensity)
        total += log(expit(settings.DETECTION_SLOPE * (log(amount[i]) - limit)))
    return total


@pytest.mark.parametrize(
    ("intensities", "sigmas"), [((100, 62, 45, 30, 12), 1e-4), ((40, 100, 33, 20, 25), 0.3)]
)
def test_amplitudes_are_those_a_general_minimiser_finds(
    intensities: Sequence[float], sigmas: float
) -> None:
    """Two phases with one ring in common; one line of each is missing.

    Where intensities stray far, the few steps the fit takes stop within 0.3 of one-sigma of the
    maximum, 0.03 of ln likelihood below it.
    """
    spacings = (3.0, 2.2, 1.7, 1.35, 1.1)
    toys = [
        Toy((3.0, 2.5, 2.2, 1.35), (100, 4, 60, 30)),
        Toy((2.2, 1.9, 1.7, 1.1), (60, 9, 100, 40), ("O",)),
    ]
    rings = toy_rings(spacings, 1e-3, probe="x-ray 1 A", scale=1e-3, intensities=list(intensities))
    model, _ = toy_model(toys, [rings])
    part = fit_of(model, 0, 1).patterns[0]
    rows = np.arange(2)
    best = minimize(
        lambda a: -ln_intensity_density(model, rows, a),
        np.zeros(4),
        method="Nelder-Mead",
        options={"xatol": 1e-6, "fatol": 1e-9, "maxiter": 4000},
    )
    assert part.claimed.all()
    away = np.abs(part.ln_amplitude[0] - best.x[:2]) / part.amplitude_sd[0]
    assert away.max() < sigmas


def test_the_amplitude_of_one_phase_is_known_to_the_scatter_over_root_n() -> None:
    """Common statistics: the mean of n ln intensities of one-sigma s is known to s / √n."""
    count = 9
    spacings = np.geomspace(3.0, 1.2, count)
    toy = Toy(spacings, np.geomspace(100, 60, count))
    rings = toy_rings(
        spacings, 1e-3, probe="x-ray 1 A", intensities=np.geomspace(100, 60, count).tolist()
    )
    model, _ = toy_model([toy], [rings])
    part = fit_of(model, 0).patterns[0]
    expected = settings.SCATTER["x-ray"].intensity / np.sqrt(count)
    assert part.amplitude_sd[0, 0] == pytest.approx(expected, rel=0.2)


def discrimination(intensity: float | str) -> float:
    """How much a ring of `intensity` prefers a calculated 62 to a calculated 47."""
    toys = [Toy(D_A, (100, 62, 100, 100)), Toy(D_A, (100, 47, 100, 100))]
    rings = moved((0, 0, 0, 0), probe="x-ray 1 A", intensities=[100, intensity, 100, 100])
    model, _ = toy_model(toys, [rings])
    return value_of(model, 0) - value_of(model, 1)


def test_a_grade_is_an_interval_not_a_number() -> None:
    """'s' stands for 45 to 85; both calculated values lie in it."""
    assert discrimination(62.0) > 0.5
    assert 0.0 < discrimination("s") < 0.75 * discrimination(62.0)


def test_an_intensity_far_off_costs_but_does_not_kill() -> None:
    """A textured film may show a ring five times too weak."""
    value = []
    for measured in (62.0, 30.0, 12.0, 6.0):
        rings = moved((0, 0, 0, 0), intensities=[100, measured, 100, 100])
        model, _ = toy_model([Toy(D_A, (100, 62, 100, 100))], [rings])
        value.append(value_of(model, 0))
    assert value[0] > value[1] > value[2]
    assert value[0] - value[3] < 8.0
