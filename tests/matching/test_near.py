"""Looking up strong lines near spacings, against gemmi's d of handbook cells."""

from __future__ import annotations

import gemmi
import pytest

from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.near import near_lines
from phaseid.probes import parse_probe
from tests.matching.published import PATTERNS, is_published

ELECTRON = parse_probe("electron 200 kV")
XRAY = parse_probe("x-ray Cu Ka1")


@pytest.mark.parametrize("name", ["aluminium", "corundum", "rutile", "tin (beta, white)"])
def test_the_strongest_published_lines_lead_to_their_phase(
    starter_library: Library, name: str
) -> None:
    lines = sorted(PATTERNS[name]["lines"], key=lambda line: -line["I"])[:3]
    found = near_lines([line["d_A"] for line in lines], starter_library, XRAY, tolerance=0.004)
    own = [line for line in found if is_published(line.phase, name)]
    assert {line.wanted_d_A for line in own} == {line["d_A"] for line in lines}
    cell = gemmi.UnitCell(*own[0].phase.cell)
    for line in own:
        assert cell.calculate_d(list(line.hkl)) == pytest.approx(line.d_A, rel=1e-5)


def test_everything_returned_is_near_and_strong_enough(starter_library: Library) -> None:
    found = near_lines([2.338], starter_library, ELECTRON, tolerance=0.002, min_intensity=50.0)
    assert found
    for line in found:
        assert abs(line.d_A / 2.338 - 1) <= 0.002
        assert 50.0 <= line.intensity <= 100.0


def test_phases_that_meet_more_of_the_spacings_come_first(starter_library: Library) -> None:
    found = near_lines([2.338, 2.024, 1.431], starter_library, ELECTRON)
    met: dict[str, set[float]] = {}
    for line in found:
        met.setdefault(line.phase.phase_id, set()).add(line.wanted_d_A)
    counts = [len(spacings) for spacings in met.values()]
    assert counts == sorted(counts, reverse=True)
    assert counts[0] == 3


def test_a_wider_tolerance_only_adds(starter_library: Library) -> None:
    def ids(tolerance: float) -> set[tuple[str, tuple[int, int, int]]]:
        found = near_lines([2.338], starter_library, ELECTRON, tolerance=tolerance)
        return {(line.phase.phase_id, line.hkl) for line in found}

    assert ids(0.001) < ids(0.01)


def test_chemistry_narrows_the_look_up(starter_library: Library) -> None:
    chemistry = Chemistry.parse("Al", "Al,O", None)
    found = near_lines([2.338, 2.085], starter_library, ELECTRON, chemistry=chemistry)
    assert found
    for line in found:
        assert "Al" in line.phase.elements
        assert set(line.phase.elements) <= {"Al", "O"}


@pytest.mark.parametrize("spacing", [0.0, -2.3, float("inf"), float("nan")])
def test_a_spacing_that_is_none_is_an_error(starter_library: Library, spacing: float) -> None:
    with pytest.raises(InputError, match="no lattice spacing"):
        near_lines([2.338, spacing], starter_library, ELECTRON)


@pytest.mark.parametrize("tolerance", [0.0, -0.01, 1.0])
def test_a_tolerance_out_of_range_is_an_error(starter_library: Library, tolerance: float) -> None:
    with pytest.raises(InputError, match="tolerance"):
        near_lines([2.338], starter_library, ELECTRON, tolerance=tolerance)
