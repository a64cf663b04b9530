"""Fibre texture: factors against their own mean over all axes, and a textured film identified."""

from __future__ import annotations

import numpy as np
import pytest

from phaseid.library import Library
from phaseid.matching.identify import identify
from phaseid.matching.lineset import reciprocal_metric
from phaseid.matching.texture import fibre_factors, likely_axes
from phaseid.probes import parse_probe
from phaseid.rings import rings_from_values


def _rows_of(library: Library, name: str) -> tuple:
    table = library.line_table("electron")
    phase = table.phase_ids.index(library.choose(name).phase_id)
    return table, phase, np.arange(table.offsets[phase], table.offsets[phase + 1])


@pytest.mark.parametrize("name", ["gold", "magnesium", "corundum", "baddeleyite"])
@pytest.mark.parametrize("probe", ["electron 200 kV", "x-ray Cu Ka"])
def test_over_all_directions_of_the_axis_the_mean_is_a_random_powder(
    starter_library: Library, name: str, probe: str
) -> None:
    table, phase, rows = _rows_of(starter_library, name)
    basis = np.linalg.inv(np.linalg.cholesky(np.linalg.inv(reciprocal_metric(table, phase))).T)
    directions = np.random.default_rng(5).normal(size=(20_000, 3))
    axes = tuple(map(tuple, (directions @ basis.T).tolist()))
    factors = fibre_factors(table, phase, rows[:6], axes, parse_probe(probe))
    # one reflection's orbit covers the sphere coarsely: 20 000 axes leave a few per cent
    assert factors.mean(axis=0) == pytest.approx(1.0, abs=0.1)


def test_a_111_film_seen_along_its_normal_shows_220_and_hides_111_and_200(
    starter_library: Library,
) -> None:
    """Plane normals at right angles to [111]: 220 and 422, not 111 or 200 (arithmetic)."""
    table, phase, rows = _rows_of(starter_library, "gold")
    (factors,) = fibre_factors(table, phase, rows, ((1, 1, 1),), parse_probe("electron 200 kV"))
    by_form = {
        tuple(sorted(map(abs, table.hkl[row].tolist()), reverse=True)): factor
        for row, factor in zip(rows, factors, strict=True)
    }
    assert by_form[(2, 2, 0)] > 2.0
    assert by_form[(4, 2, 2)] > 1.0
    assert by_form[(1, 1, 1)] < 0.5
    assert by_form[(2, 0, 0)] < 0.3


def test_in_reflection_a_111_film_shows_111_alone(starter_library: Library) -> None:
    """Bragg-Brentano sees planes parallel to the surface (arithmetic)."""
    table, phase, rows = _rows_of(starter_library, "gold")
    (factors,) = fibre_factors(table, phase, rows, ((1, 1, 1),), parse_probe("x-ray Cu Ka"))
    first = {
        tuple(map(abs, table.hkl[row].tolist())): f for row, f in zip(rows, factors, strict=True)
    }
    assert first[(1, 1, 1)] > 10.0
    assert first[(2, 0, 0)] < 0.2


def test_likely_axes_follow_the_lattice(starter_library: Library) -> None:
    for name, axis in (("gold", (1, 1, 1)), ("magnesium", (0, 0, 1)), ("baddeleyite", (0, 1, 0))):
        table, phase, _ = _rows_of(starter_library, name)
        assert axis in likely_axes(reciprocal_metric(table, phase))


def test_a_textured_film_is_named_with_its_axis(starter_library: Library) -> None:
    """Handbook spacings of gold (a = 4.0782 Å); 220 and 422 strong, the rest faint: a 111 film."""
    a = 4.0782
    forms = {(2, 2, 0): 100, (1, 1, 1): 12, (4, 2, 2): 30, (3, 1, 1): 9, (2, 0, 0): 4}
    rings = rings_from_values(
        [a / np.sqrt(sum(i * i for i in hkl)) for hkl in forms],
        probe="electron 200 kV",
        scale_uncertainty=0.002,
        intensities=list(forms.values()),
    )
    best = identify([rings], starter_library).hypotheses[0]
    (answer,) = best.phases
    names = {answer.phase.name, *(p.name for p in answer.indistinguishable)}
    assert "gold" in names
    assert answer.fibre_axis == (1, 1, 1)
    assert not best.unexplained
