"""An instrument's constant from a standard, against certified cells and printed ring tables."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from phaseid.errors import InputError
from phaseid.matching.calibrate import Calibration, calibrate, record
from phaseid.matching.standards import Standard, find_standard, standard_names
from phaseid.rings import RingTable, parse_table, table_from_values

REFERENCE = Path(__file__).parent.parent / "reference"
PUBLISHED = {
    pattern["formula"]: pattern
    for pattern in json.loads((REFERENCE / "published_patterns.json").read_text("utf-8"))[
        "patterns"
    ]
}
STANDARD_RINGS = {
    table["formula"]: table
    for table in json.loads((REFERENCE / "standard_rings.json").read_text("utf-8"))["tables"]
}
CERTIFIED = json.loads((REFERENCE / "certified_cells.json").read_text("utf-8"))["rows"]
HANDBOOK = json.loads((REFERENCE / "handbook_cells.json").read_text("utf-8"))["rows"]
ELECTRONS = "electron 200 kV"
FCC = [(1, 1, 1), (2, 0, 0), (2, 2, 0), (3, 1, 1), (2, 2, 2), (4, 0, 0), (3, 3, 1), (4, 2, 0)]


def _standard(name: str) -> Standard:
    found = find_standard(name)
    assert found is not None
    return found


def _radii(a_A: float, constant: float, hkl: list[tuple[int, int, int]] = FCC) -> list[str]:
    return [f"{constant * math.sqrt(sum(i * i for i in h)) / a_A:.3f}" for h in hkl]


def _table(radii: list[str], sigma: str | None = "0.02", column: str = "radius_mm") -> RingTable:
    return table_from_values(radii, column=column, sigma=sigma)


def _gold(**given: Any) -> Calibration:
    return calibrate(_table(_radii(4.0782, 25.0)), _standard("Au"), probe=ELECTRONS, **given)


@pytest.mark.parametrize(
    "row",
    [
        r
        for r in CERTIFIED
        if r["srm"]
        in (
            "640b",
            "640c",
            "640d",
            "640e",
            "640f",
            "660a",
            "660b",
            "660c",
        )
    ],
    ids=lambda row: row["srm"],
)
def test_certified_cells_are_those_of_the_certificates(row: dict[str, Any]) -> None:
    standard = find_standard(f"SRM {row['srm']}", temperature_C=row["T_C"])
    assert standard is not None
    assert standard.cell[0] == pytest.approx(row["a_A"], abs=1e-7)


@pytest.mark.parametrize(
    "row",
    [
        r
        for r in HANDBOOK
        if r["material"]
        in (
            "Al",
            "Ag",
            "Au",
            "Pt",
            "MgO",
            "NaCl",
            "TlCl",
        )
    ],
    ids=lambda row: row["material"],
)
def test_handbook_cells_agree_between_compilations(row: dict[str, Any]) -> None:
    standard = _standard(row["material"])
    assert standard.cell[0] == pytest.approx(row["handbook_A"], rel=5e-4)


def test_the_standards_asked_for_are_there() -> None:
    wanted = {"Si", "LaB6", "CeO2", "Al2O3", "Au", "Al", "Ag", "Pt", "TlCl", "MgO", "NaCl", "C"}
    assert wanted <= set(standard_names())
    assert _standard("gold").label == _standard("Au").label == "Au"
    assert _standard("O3Al2").label == "Al2O3"
    assert _standard("graphite").cell[2] == pytest.approx(6.708, abs=0.01)
    assert find_standard("unobtainium") is None


def test_a_warm_standard_is_larger() -> None:
    """Al 2.31e-5 per K (handbook, from memory): 20 K are 0.046 %."""
    cold, warm = find_standard("Al", 25.0), find_standard("Al", 45.0)
    assert cold is not None
    assert warm is not None
    assert warm.cell[0] / cold.cell[0] - 1 == pytest.approx(4.6e-4, rel=0.02)
    assert cold.relative_sigma < _standard("Al").relative_sigma  # a stated temperature helps
    with pytest.raises(InputError, match="temperature"):
        find_standard("Al", 2000.0)


@pytest.mark.parametrize("formula", ["Al", "Ag", "Si", "NaCl", "MgO", "CeO2", "Al2O3"])
def test_printed_ring_tables_give_the_camera_constant(formula: str) -> None:
    """Spacings printed by the NBS, turned into radii with a constant of 25 Å mm, give it back."""
    radii = [f"{25.0 / line['d_A']:.4f}" for line in PUBLISHED[formula]["lines"]]
    result = calibrate(_table(radii, "0.05%"), _standard(formula), probe=ELECTRONS)
    constant = result.camera_constant
    assert constant is not None
    assert abs(constant.value - 25.0) < 3 * constant.sigma
    assert constant.sigma / constant.value < 5e-4
    assert len(result.assignments) >= 0.9 * len(radii)
    printed = [tuple(line["hkl"]) for line in PUBLISHED[formula]["lines"]]
    for ring in result.assignments:
        d_printed = PUBLISHED[formula]["lines"][ring.ring]["d_A"]
        assert ring.d_A == pytest.approx(d_printed, rel=3e-3)
        if formula != "Al2O3":  # there several hkl share a ring
            assert sorted(map(abs, ring.hkl)) == sorted(map(abs, printed[ring.ring]))


@pytest.mark.parametrize("left_out", [None, 0, 2])
@pytest.mark.parametrize("formula", ["Au", "Pt", "LaB6", "TlCl"])
def test_tables_of_cubic_standards_give_the_constant(formula: str, left_out: int | None) -> None:
    """NBS tables (from memory), also with a ring missing, against the cells of handbooks."""
    lines = [line for k, line in enumerate(STANDARD_RINGS[formula]["lines"]) if k != left_out]
    radii = [f"{25.0 / d:.4f}" for d, *_ in lines]
    result = calibrate(_table(radii, "0.02%"), _standard(formula), probe=ELECTRONS)
    constant = result.camera_constant
    assert constant is not None
    assert abs(constant.value - 25.0) < 3 * constant.sigma
    # compilations of TlCl disagree by 0.2 %, and its uncertainty says so
    assert constant.sigma / constant.value < (2e-3 if formula == "TlCl" else 5e-4)
    assert result.rejected == ()
    assert [sum(i * i for i in ring.hkl) for ring in result.assignments] == [
        sum(i * i for i in hkl) for _, *hkl in lines
    ]


def test_radii_need_no_camera_constant() -> None:
    result = _gold()
    assert result.camera_constant is not None
    assert result.camera_constant.value == pytest.approx(25.0, rel=2e-4)
    assert result.factor.value == 1.0
    assert result.plate_unit == "mm"
    assert [ring.hkl for ring in result.assignments] == FCC
    assert result.camera_length_mm == pytest.approx(25.0 / 0.0250793, rel=2e-4)  # λ(200 kV)
    assert {ring.ring for ring in result.assignments} | set(result.rejected) == set(range(8))


def test_a_stated_constant_makes_the_factor() -> None:
    result = _gold(camera_constant="24.5 +- 0.5 A mm")
    assert result.factor.value == pytest.approx(25.0 / 24.5, rel=2e-4)
    assert result.camera_constant is not None
    assert result.camera_constant.value == pytest.approx(25.0, rel=2e-4)


def test_the_stated_uncertainty_holds_the_error_as_often_as_it_should() -> None:
    """Known constants, readings and the cell off by their sigmas, one ring missing: 68 %, 95 %.

    Sigmas are never shrunk (Birge), so a little more; binomial limits of 30 draws at 99 %.
    """
    generator = np.random.default_rng(3)
    gold = find_standard("Au", 25.0)
    assert gold is not None
    off = []
    for _ in range(30):
        constant = 25.0 * math.exp(0.1 * generator.normal())
        edge = gold.cell[0] * (1 + gold.relative_sigma * generator.normal())
        radii = [float(r) + 0.02 * generator.normal() for r in _radii(edge, constant)]
        del radii[int(generator.integers(len(radii)))]
        result = calibrate(_table([f"{r:.4f}" for r in radii]), gold, probe=ELECTRONS)
        found = result.camera_constant
        assert found is not None
        off.append(abs(found.value - constant) / found.sigma)
    assert 0.45 < np.mean(np.array(off) < 1) < 0.93
    assert np.mean(np.array(off) < 2) > 0.83
    assert max(off) < 4.5


@pytest.mark.parametrize("error", [0.97, 0.995, 1.004, 1.05])
def test_an_injected_error_of_spacings_comes_back(error: float) -> None:
    d = [f"{error * 4.0782 / math.sqrt(sum(i * i for i in h)):.4f}" for h in FCC]
    table = table_from_values(d, column="d_A", sigma="0.1%")
    result = calibrate(table, _standard("Au"), probe=ELECTRONS, scale_uncertainty="1%")
    assert abs(result.factor.value * error - 1.0) < 3 * result.factor.sigma
    assert result.camera_constant is None
    assert result.wavelength_A is None


def test_angles_give_the_wavelength() -> None:
    """LaB6 of SRM 660c seen with 1.5425 Å while 1.540593 Å is believed."""
    hkl = [(1, 0, 0), (1, 1, 0), (1, 1, 1), (2, 0, 0), (2, 1, 0), (2, 1, 1), (3, 0, 0), (3, 1, 0)]
    hkl += [(3, 1, 1), (3, 2, 0), (3, 2, 1), (4, 1, 0)]
    sines = [1.5425 * math.sqrt(sum(i * i for i in h)) / 2 / 4.156826 for h in hkl]
    angles = [f"{2 * math.degrees(math.asin(sine)):.3f}" for sine in sines]
    table = table_from_values(angles, column="two_theta_deg", sigma="0.005")
    result = calibrate(table, _standard("LaB6"), probe="x-ray Cu Ka1", scale_uncertainty="0.2%")
    assert result.wavelength_A is not None
    assert abs(result.wavelength_A.value - 1.5425) < 3 * result.wavelength_A.sigma
    assert result.wavelength_A.sigma < 5e-4
    assert result.camera_constant is None


def test_pixels_at_a_camera_length_have_a_size() -> None:
    radii = _radii(4.0782, 1000.0)
    table = _table(radii, "0.5", "radius_px")
    result = calibrate(table, _standard("Au"), probe=ELECTRONS, camera_length_mm=500.0)
    assert result.pixel_um is not None
    assert result.pixel_um.value == pytest.approx(0.0250793 * 500 / 1000 * 1e3, rel=5e-4)  # λL/C
    assert result.plate_unit == "px"


def test_two_directions_give_the_ellipse() -> None:
    along, across = _table(_radii(4.0782, 25.0)), _table(_radii(4.0782, 25.25))
    result = calibrate(along, _standard("Au"), probe=ELECTRONS, across=across)
    assert result.ellipse is not None
    assert abs(result.ellipse.ratio.value - 1.01) < 3 * result.ellipse.ratio.sigma
    assert result.ellipse.long_axis == "across"
    assert result.camera_constant is not None
    assert result.camera_constant.value == pytest.approx(math.sqrt(25.0 * 25.25), rel=3e-4)


def test_a_round_pattern_has_no_ellipse() -> None:
    same = _table(_radii(4.0782, 25.0))
    result = calibrate(same, _standard("Au"), probe=ELECTRONS, across=same)
    assert any("no ellipse" in remark for remark in result.remarks)
    assert record(result, "round").ellipse is None


def test_a_saved_ellipse_brings_both_directions_to_one_spacing() -> None:
    """Radii of gold 1 % longer at 120° than at 30°: later lists of either give the same d."""
    along, across = (_radii(4.0782, c) for c in (25.0, 25.25))
    text = "# probe: electron 200 kV\n# direction: {}\nradius_mm,sigma\n"
    first = text.format(30) + "".join(f"{r},0.02\n" for r in along)
    result = calibrate(parse_table(first, "a.csv"), _standard("Au"), across=_table(across))
    kept = record(result, "oval")
    assert kept.long_axis_deg == pytest.approx(120.0)
    for angle, radii in ((30, along), (120, across)):
        later = text.format(angle) + "".join(f"{r},0.02\n" for r in radii)
        rings = kept.apply(parse_table(later, "later.csv"))
        edges = rings.d_A * [math.sqrt(sum(i * i for i in h)) for h in FCC]
        assert np.allclose(edges, 4.0782, rtol=4 * rings.probe.scale_sigma)


def test_an_ellipse_measured_on_the_image_is_kept() -> None:
    """`phaseid measure` writes the ellipse it took off its radii into the list."""
    text = (
        "# probe: electron 200 kV\n"
        "# ellipse corrected: axes ratio 1.00812 +- 0.00010, long axis at 34.1 +- 0.2 degrees\n"
        "radius_px,sigma\n"
    ) + "".join(f"{r},0.2\n" for r in _radii(4.0782, 1000.0))
    result = calibrate(parse_table(text, "plate.csv"), _standard("Au"))
    assert result.ellipse is not None
    assert result.camera_constant is not None
    assert result.camera_constant.value == pytest.approx(1000.0, rel=3e-4)
    kept = record(result, "plate")
    assert (kept.ellipse_ratio, kept.long_axis_deg) == (1.00812, 34.1)


def test_x_rays_on_a_flat_plate_follow_the_tangent() -> None:
    """CeO2 at 0.4959 Å (25 keV) and 150 mm: radius × d is no constant there, λL is."""
    wavelength, length = 12.39842 / 25.0, 150.0
    hkl = [(1, 1, 1), (2, 0, 0), (2, 2, 0), (3, 1, 1), (2, 2, 2), (4, 0, 0), (3, 3, 1), (4, 2, 0)]
    sines = [wavelength * math.sqrt(sum(i * i for i in h)) / 2 / 5.411651 for h in hkl]
    radii = [f"{length * math.tan(2 * math.asin(sine)):.3f}" for sine in sines]
    result = calibrate(_table(radii), _standard("CeO2"), probe="x-ray 25 keV")
    assert result.camera_length_mm == pytest.approx(length, rel=5e-4)
    assert len(result.assignments) == 8


def test_an_internal_standard_scales_the_specimen_on_its_plate() -> None:
    """Gold sputtered on corundum, all read with a constant 1.5 % off: the standard corrects it."""
    corundum = [3.4797, 2.5508, 2.0853, 1.6015, 1.3738]  # Å; NBS Circular 539 vol. 9, from memory
    plate = [float(r) for r in _radii(4.0782, 25.375, FCC[:6])] + [25.375 / d for d in corundum]
    text = "# probe: electron 200 kV\n# camera constant: 25.0 +- 0.5 A mm\nradius_mm,sigma\n"
    table = parse_table(text + "".join(f"{r:.3f},0.02\n" for r in plate), "plate.csv")
    result = calibrate(table, _standard("Au"))
    assert {a.ring for a in result.assignments} >= set(range(6))
    rings = record(result, "plate").apply(table)
    assert rings.d_A[6:] == pytest.approx(corundum, rel=1.5e-3)


@pytest.mark.parametrize("seed", range(3))
def test_rings_of_a_specimen_beside_the_standard_are_rejected(seed: int) -> None:
    generator = np.random.default_rng(seed)
    foreign = generator.uniform(8.0, 24.0, 5)
    radii = [float(r) for r in _radii(4.0782, 25.0)]
    mixed = np.array(radii + foreign.tolist())
    table = _table([f"{r:.3f}" for r in mixed], "0.02")
    result = calibrate(table, _standard("Au"), probe=ELECTRONS, camera_constant="25 +- 0.5 A mm")
    assert abs(result.factor.value - 1.0) < 3 * result.factor.sigma
    assert set(range(8)) <= {ring.ring for ring in result.assignments}


def test_a_wrong_standard_is_told_with_the_likely_one() -> None:
    silicon = [(1, 1, 1), (2, 2, 0), (3, 1, 1), (4, 0, 0), (3, 3, 1), (4, 2, 2)]
    for name in ("Al2O3", "TlCl"):
        with pytest.raises(InputError, match=r"fit.*Si"):
            calibrate(_table(_radii(5.4311, 25.0, silicon)), _standard(name), probe=ELECTRONS)


def test_a_standard_of_the_same_type_is_noticed_by_the_scale() -> None:
    platinum = _table(_radii(3.9236, 25.0))
    constant = "25 +- 0.1 A mm"
    right = calibrate(platinum, _standard("Pt"), probe=ELECTRONS, camera_constant=constant)
    assert not any("sigma from the" in remark for remark in right.remarks)
    wrong = calibrate(platinum, _standard("Au"), probe=ELECTRONS, camera_constant=constant)
    assert any("Pt" in remark and "right standard" in remark for remark in wrong.remarks)


def test_a_second_standard_on_the_plate_is_noticed() -> None:
    silicon = [(1, 1, 1), (2, 2, 0), (3, 1, 1), (4, 0, 0), (3, 3, 1), (4, 2, 2)]
    both = _radii(4.0782, 25.0) + _radii(5.4311, 25.0, silicon)
    result = calibrate(_table(both), _standard("Au"), probe=ELECTRONS)
    assert any("Si" in remark and "two standards" in remark for remark in result.remarks)


def test_rings_that_fit_in_several_ways_are_refused_with_a_remedy() -> None:
    with pytest.raises(InputError, match="--camera-constant"):
        calibrate(_table(["10.0"]), _standard("Au"), probe=ELECTRONS)


def test_a_rough_constant_settles_it() -> None:
    table = _table(["10.62", "12.26"])
    result = calibrate(table, _standard("Au"), probe=ELECTRONS, camera_constant="25 +- 0.5 A mm")
    assert [ring.hkl for ring in result.assignments] == FCC[:2]


@pytest.mark.parametrize("cell", ["-10.2", "0", "ten"])
def test_a_bad_radius_is_told(cell: str) -> None:
    text = f"# probe: electron 200 kV\nradius_mm\n10.6\n{cell}\n17.3\n"
    with pytest.raises(InputError, match="line 4"):
        calibrate(parse_table(text, "gold.csv"), _standard("Au"))


def test_angles_without_a_probe_are_refused() -> None:
    with pytest.raises(InputError, match="probe"):
        calibrate(parse_table("two_theta_deg\n38.2\n44.4\n", "g.csv"), _standard("Au"))


def test_a_record_keeps_what_is_needed_later() -> None:
    result = _gold()
    kept = record(result, "plate80")
    assert kept.camera_constant == pytest.approx(25.0, rel=2e-4)
    assert kept.relative_sigma == pytest.approx(result.relative_sigma)
    assert (kept.standard, kept.quantity, kept.plate_unit) == ("Au", "radius", "mm")
    read = kept.apply(_table(["10.0"]))
    assert read.d_A[0] == pytest.approx(2.5, rel=2e-4)
