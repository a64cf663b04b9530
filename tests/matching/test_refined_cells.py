"""Cells from rings, against gemmi's spacings, scipy's covariances and certified materials."""

from __future__ import annotations

from itertools import product

import gemmi
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import least_squares

from phaseid.library import Library
from phaseid.matching import settings
from phaseid.matching.identify import identify
from phaseid.matching.refine import refine_cell, scaled_cell
from phaseid.rings import rings_from_values
from tests.matching.published import is_phase, reference
from tests.matching.toys import Selection

Cell = tuple[float, float, float, float, float, float]
CU_KA1_A = 1.5405929

# space group, cell, and which of the six are free (a b c alpha beta gamma)
SYSTEMS: dict[str, tuple[int, Cell]] = {
    "cubic": (225, (4.0494, 4.0494, 4.0494, 90, 90, 90)),
    "tetragonal": (136, (4.5937, 4.5937, 2.9587, 90, 90, 90)),
    "hexagonal": (194, (2.9506, 2.9506, 4.6835, 90, 90, 120)),
    "rhombohedral, hexagonal axes": (167, (4.7589, 4.7589, 12.992, 90, 90, 120)),
    "rhombohedral axes": (166, (4.7459, 4.7459, 4.7459, 57.23, 57.23, 57.23)),
    "orthorhombic": (62, (5.0890, 6.7433, 4.5230, 90, 90, 90)),
    "monoclinic, b unique": (15, (4.6837, 3.4226, 5.1288, 90, 99.54, 90)),
    "monoclinic, c unique": (14, (5.12, 4.90, 7.31, 90, 90, 103.2)),
    "triclinic": (2, (8.137, 12.785, 7.158, 94.24, 116.61, 87.80)),
}


def spacings(cell: Cell, count: int = 24) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """The reflections of largest spacing, of all kinds of index, and their d (gemmi)."""
    unit = gemmi.UnitCell(*cell)
    found = {}
    for hkl in product(range(-3, 4), range(-3, 4), range(4)):
        if hkl > (0, 0, 0) or hkl[2] > 0:
            found.setdefault(round(unit.calculate_d(list(hkl)), 7), hkl)
    chosen = sorted(found, reverse=True)[:count]
    indices = np.array([found[d] for d in chosen], dtype=np.int64)
    return indices, np.array([unit.calculate_d(hkl.tolist()) for hkl in indices])


@pytest.mark.parametrize("system", SYSTEMS)
def test_exact_spacings_give_back_the_cell(system: str) -> None:
    number, cell = SYSTEMS[system]
    hkl, d = spacings(cell)
    start: Cell = tuple(v * 1.01 if i < 3 else v for i, v in enumerate(cell))  # type: ignore[assignment]
    refined = refine_cell(start, number, hkl, d, np.full(len(d), 1e-3), 0.0)
    assert refined is not None
    assert refined.cell == pytest.approx(cell, rel=1e-8)


@pytest.mark.parametrize("system", SYSTEMS)
def test_angles_fixed_by_symmetry_have_no_uncertainty_and_free_ones_do(system: str) -> None:
    number, cell = SYSTEMS[system]
    hkl, d = spacings(cell)
    refined = refine_cell(cell, number, hkl, d, np.full(len(d), 1e-3), 0.0)
    assert refined is not None
    free = [abs(angle - 90) > 0.01 and abs(angle - 120) > 0.01 for angle in cell[3:]]
    assert [sigma > 0 for sigma in refined.sigma[3:]] == free
    assert all(
        0 < sigma < 0.01 * length for sigma, length in zip(refined.sigma, cell[:3], strict=False)
    )


@pytest.mark.parametrize("system", ["cubic", "hexagonal", "orthorhombic", "monoclinic, b unique"])
def test_uncertainties_are_those_of_a_general_least_squares_fit(system: str) -> None:
    """scipy.optimize.least_squares on the cell itself; covariance (JᵀJ)⁻¹."""
    number, cell = SYSTEMS[system]
    hkl, d = spacings(cell)
    sigma = np.full(len(d), 1e-3)
    places = {
        "cubic": [(0, 1, 2)],
        "hexagonal": [(0, 1), (2,)],
        "orthorhombic": [(0,), (1,), (2,)],
        "monoclinic, b unique": [(0,), (1,), (2,), (4,)],
    }[system]

    def residual(values: NDArray[np.float64]) -> NDArray[np.float64]:
        trial = list(cell)
        for group, value in zip(places, values, strict=True):
            for i in group:
                trial[i] = value
        unit = gemmi.UnitCell(*trial)
        own = np.array([unit.calculate_d(index.tolist()) for index in hkl])
        result: NDArray[np.float64] = np.log(d / own) / sigma
        return result

    fit = least_squares(residual, [cell[group[0]] for group in places], x_scale="jac")
    expected = np.sqrt(np.diag(np.linalg.inv(fit.jac.T @ fit.jac)))
    refined = refine_cell(cell, number, hkl, d, sigma, 0.0)
    assert refined is not None
    for group, value in zip(places, expected, strict=True):
        assert refined.sigma[group[0]] == pytest.approx(value, rel=1e-3)


def test_the_common_scale_adds_to_lengths_in_quadrature_and_leaves_angles() -> None:
    number, cell = SYSTEMS["monoclinic, b unique"]
    hkl, d = spacings(cell)
    alone = refine_cell(cell, number, hkl, d, np.full(len(d), 1e-3), 0.0)
    both = refine_cell(cell, number, hkl, d, np.full(len(d), 1e-3), 0.01)
    assert alone is not None
    assert both is not None
    assert both.cell == alone.cell
    for i in range(3):
        assert both.sigma[i] == pytest.approx(np.hypot(alone.sigma[i], 0.01 * cell[i]), rel=1e-6)
    assert both.sigma[3:] == alone.sigma[3:]


def test_rings_that_scatter_more_than_stated_widen_the_uncertainty() -> None:
    number, cell = SYSTEMS["cubic"]
    hkl, d = spacings(cell, 12)
    noise = np.random.default_rng(2).normal(0, 5e-3, len(d))
    stated = np.full(len(d), 1e-3)
    exact = refine_cell(cell, number, hkl, d, stated, 0.0)
    rough = refine_cell(cell, number, hkl, d * np.exp(noise), stated, 0.0)
    assert exact is not None
    assert rough is not None
    assert 2.5 < rough.sigma[0] / exact.sigma[0] < 8
    assert rough.cell[0] == pytest.approx(cell[0], abs=4 * rough.sigma[0])


@pytest.mark.parametrize("system", SYSTEMS)
def test_too_few_lines_refine_nothing(system: str) -> None:
    number, cell = SYSTEMS[system]
    hkl, d = spacings(cell)
    assert refine_cell(cell, number, hkl[:1], d[:1], np.full(1, 1e-3), 0.0) is None


def test_lines_of_one_zone_cannot_tell_the_third_length() -> None:
    number, cell = SYSTEMS["hexagonal"]
    unit = gemmi.UnitCell(*cell)
    hkl = np.array([(1, 0, 0), (1, 1, 0), (2, 0, 0), (2, 1, 0)])
    d = np.array([unit.calculate_d(h.tolist()) for h in hkl])
    assert refine_cell(cell, number, hkl, d, np.full(4, 1e-3), 0.0) is None


def test_a_scaled_cell_keeps_its_angles() -> None:
    cell = SYSTEMS["triclinic"][1]
    scaled = scaled_cell(cell, 0.002, 0.0005)
    assert scaled.cell[:3] == pytest.approx([1.002 * length for length in cell[:3]])
    assert scaled.cell[3:] == cell[3:]
    assert scaled.sigma[:3] == pytest.approx([5e-4 * length for length in scaled.cell[:3]])
    assert scaled.sigma[3:] == (0, 0, 0)


SRM_640E = next(row for row in reference("certified_cells")["rows"] if row["srm"] == "640e")
SILICON = ((1, 1, 1), (2, 2, 0), (3, 1, 1), (4, 0, 0), (3, 3, 1), (4, 2, 2), (5, 1, 1), (4, 4, 0))
HEIGHTS = [100, 55, 30, 6, 11, 12, 6, 3]  # NBS Monograph 25 sec 13 p 35
SIGMA_DEG = 0.005
_DISPLACEMENT_RATIO = settings.DISPLACEMENT_DEG / settings.ZERO_SHIFT_DEG


@pytest.mark.parametrize(
    ("zero_deg", "displaced_deg"), [(0.0, 0.0), (0.03, 0.0), (-0.04, 0.05), (0.0, -0.08)]
)
def test_silicon_has_its_certified_cell_however_the_diffractometer_is_off(
    shelf: Selection, zero_deg: float, displaced_deg: float
) -> None:
    """SRM 640e, a = 5.431179(8) Å. A zero shift moves every 2θ, a displacement goes with cos θ."""
    a_A = SRM_640E["a_A"]
    d = np.array([a_A / np.sqrt(sum(i * i for i in hkl)) for hkl in SILICON])
    theta = np.arcsin(CU_KA1_A / 2 / d)
    angles = np.degrees(2 * theta) + zero_deg + displaced_deg * np.cos(theta)
    rings = rings_from_values(
        angles.round(3).tolist(),
        column="two_theta_deg",
        probe="x-ray Cu Ka1",
        scale_uncertainty=1e-5,
        sigma=SIGMA_DEG,
        intensities=HEIGHTS,
    )
    best = identify([rings], shelf).hypotheses[0]  # type: ignore[arg-type]
    assert len(best.phases) == 1
    answer = best.phases[0]
    if not is_phase(answer.phase, "Si", 227):
        assert any(is_phase(other, "Si", 227) for other in answer.indistinguishable)
    assert answer.cell is not None
    assert answer.cell_sigma is not None
    assert answer.cell[0] == pytest.approx(a_A, abs=2.5 * answer.cell_sigma[0])
    # what shift, displacement and strain leave open together: their joint normal distribution, no
    # ring's place taken as known better than 1e-4 or than listed lines stray
    effects = -0.5 / np.tan(theta) * np.radians([[settings.ZERO_SHIFT_DEG]])
    reading = np.maximum(0.5 / np.tan(theta) * np.radians(SIGMA_DEG), 1e-4)
    lever = np.vstack(
        [np.ones(len(theta)), effects, effects * np.cos(theta) * _DISPLACEMENT_RATIO]
    ) / np.hypot(reading, settings.LISTED_JITTER)
    prior = np.diag([1 / settings.STRAIN**2, 1.0, 1.0])
    expected = a_A * np.sqrt(np.linalg.inv(lever @ lever.T + prior)[0, 0])
    assert answer.cell_sigma[0] == pytest.approx(expected, rel=0.2)
    # read as if the instrument were right, the first ring alone is far off
    naive = CU_KA1_A / 2 / np.sin(np.radians(angles[0]) / 2) * np.sqrt(3)
    if zero_deg > 0:
        assert abs(naive - a_A) > 3 * abs(answer.cell[0] - a_A)


def test_a_hexagonal_cell_from_a_plate_with_a_poor_camera_constant(
    starter_library: Library,
) -> None:
    """The scale limits both lengths alike: their ratio is known far better than either."""
    certified = next(r for r in reference("certified_cells")["rows"] if r["material"] == "ZnO")
    a_A, c_A = certified["a_A"], certified["c_A"]
    unit = gemmi.UnitCell(a_A, a_A, c_A, 90, 90, 120)
    hkl = [(1, 0, 0), (0, 0, 2), (1, 0, 1), (1, 0, 2), (1, 1, 0), (1, 0, 3), (1, 1, 2)]
    d = np.array([unit.calculate_d(list(h)) for h in hkl]) * 1.008
    rings = rings_from_values(
        d.tolist(),
        probe="electron 200 kV",
        scale_uncertainty=0.01,
        sigma=(0.001 * d).tolist(),
        intensities=["s", "m", "vs", "m", "s", "m", "m"],
    )
    hypotheses = identify([rings], starter_library).hypotheses
    best = next(h for h in hypotheses if is_phase(h.phases[0].phase, "ZnO", 186))
    answer = best.phases[0]
    assert answer.cell is not None
    assert answer.cell_sigma is not None
    for found, sigma, true in zip(
        (answer.cell[0], answer.cell[2]),
        (answer.cell_sigma[0], answer.cell_sigma[2]),
        (a_A, c_A),
        strict=True,
    ):
        assert found == pytest.approx(true, abs=2 * sigma)
    assert answer.cell[2] / answer.cell[0] == pytest.approx(c_A / a_A, rel=2e-3)
    assert best.scale[0].factor == pytest.approx(1.008, abs=3 * best.scale[0].sigma)
