"""Ring list files: what the format promises, friendly spellings, remarks, writing back."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from phaseid.errors import InputError
from phaseid.probes import parse_probe
from phaseid.rings import (
    GRADES,
    RingList,
    parse_camera_constant,
    read_rings,
    rings_from_text,
    rings_from_values,
    rings_to_text,
    write_rings,
)

FILM = """\
# title: film A, area 3
# probe: electron 200 kV
# camera constant: 25.1 +- 0.3 A mm
# operator's remark: slightly out of focus
# a comment without a key
radius_mm,sigma,intensity,note
10.735,0.05,100,"strong, continuous"
12.40,0.05,vs,
17.55,0.05,w,spotty
20.56,,,
"""


def _same(a: RingList, b: RingList) -> None:
    for name in ("position", "position_sigma", "d_A", "sigma_A", "intensity", "intensity_range"):
        assert getattr(a, name) == pytest.approx(getattr(b, name), rel=1e-15, nan_ok=True), name
    assert (a.title, a.position_column, a.grades) == (b.title, b.position_column, b.grades)
    assert (a.notes, a.camera_constant) == (b.notes, b.camera_constant)
    for name in ("detection_limit", "spottiness", "arcs"):
        one, other = getattr(a, name), getattr(b, name)
        assert (one is None) == (other is None)
        assert one is None or one == pytest.approx(other, rel=1e-15, nan_ok=True)
    assert a.probe.wavelength_A == b.probe.wavelength_A
    assert a.probe.scale_sigma == b.probe.scale_sigma


def test_a_file_with_everything(tmp_path: Path) -> None:
    path = tmp_path / "film.csv"
    path.write_text(FILM, encoding="utf-8")
    rings = read_rings(path)
    assert rings.title == "film A, area 3"
    assert rings.source == str(path)
    assert rings.probe.label == "electron 200 kV"
    assert rings.probe.scale_sigma == pytest.approx(0.3 / 25.1)
    assert rings.d_A == pytest.approx(25.1 / rings.position)
    assert rings.sigma_A[:3] / rings.d_A[:3] == pytest.approx(0.05 / rings.position[:3])
    assert rings.notes == ("strong, continuous", "", "spotty", "")
    assert rings.grades == ("", "vs", "w", "")
    assert rings.intensity[0] == 100.0
    assert rings.intensity[1] == pytest.approx((70 * 100) ** 0.5)
    assert np.isnan(rings.intensity[3])
    assert rings.intensity_range[2].tolist() == [7.0, 28.0]
    assert not rings.sigma_stated
    assert rings.metadata["operator's remark"] == "slightly out of focus"


def test_the_order_of_the_file_is_kept() -> None:
    rings = rings_from_text("# probe: electron 200 kV\nd_A\n1.43\n2.34\n1.22\n2.02\n")
    assert rings.d_A.tolist() == [1.43, 2.34, 1.22, 2.02]


def test_scale_uncertainty_comes_from_argument_then_file_then_camera_constant_then_probe() -> None:
    plain = "# probe: electron 200 kV\nd_A\n2.338\n"
    constant = "# camera constant: 25.1 +- 0.251 A mm\n" + plain
    both = "# scale uncertainty: 0.5 %\n" + constant
    assert rings_from_text(plain).probe.scale_sigma == 0.015
    assert not rings_from_text(plain).probe.scale_stated
    assert rings_from_text(constant).probe.scale_sigma == pytest.approx(0.01)
    assert rings_from_text(both).probe.scale_sigma == 0.005
    assert rings_from_text(both, scale_uncertainty="0.2 %").probe.scale_sigma == 0.002
    assert rings_from_text(both, scale_uncertainty=0.003).probe.scale_sigma == 0.003


def test_arguments_win_over_the_file() -> None:
    text = "# probe: x-ray Cu Ka\ntwo_theta_deg\n38.47\n"
    assert rings_from_text(text, probe="x-ray Mo Ka").d_A[0] < 1.1
    given = parse_probe("x-ray Co Ka", scale_sigma=0.001)
    assert rings_from_text(text, probe=given).probe == given
    assert rings_from_text(text, probe=given, scale_uncertainty="1 %").probe.scale_sigma == 0.01
    wrong = "# probe: nonsense\nd_A\n2.338\n"
    assert rings_from_text(wrong, probe="electron 200 kV").probe.kind == "electron"


@pytest.mark.parametrize(
    "text",
    [
        "d_A,intensity\n2.338,45\n",
        "d_A;intensity\n2,338;45\n",
        "d_A;intensity\n2.338;45\n",
        "d_A\tintensity\n2,338\t45\n",
        "d_A intensity\n2.338   45\n",
        '"d_A","intensity"\n"2.338","45"\n',
        "D (Å) , Intensity,,\n2.338, 45 %,,\n\n,,,\n",
        "d_A,intensity\r\n# a remark in between\r\n2.338,45\r\n",
        "\ufeffd_A,intensity\n2.338,45",
        "d_A,fwhm,intensity\n2.338,0.02,45\n",
        "d_A,intensity,note\n2.338,45,spotty, weak to the left\n",
    ],
)
def test_friendly_spellings_of_the_same_list(text: str) -> None:
    rings = rings_from_text(text, probe="electron 200 kV")
    assert rings.d_A.tolist() == [2.338]
    assert rings.intensity.tolist() == [100.0]


def test_metadata_keys_may_be_spelt_in_any_case_and_stand_anywhere() -> None:
    rings = rings_from_text("d_A\n2.338\n# PROBE: electron 80 kV\n#Scale_Uncertainty : 1%\n")
    assert rings.probe.label == "electron 80 kV"
    assert rings.probe.scale_sigma == 0.01


def test_unknown_keys_are_kept_and_a_close_spelling_is_pointed_out() -> None:
    text = "# probe: electron 200 kV\n# scale uncertanty: 3 %\n# date: 3 May\nd_A\n2.338\n"
    rings = rings_from_text(text)
    assert rings.metadata["scale uncertanty"] == "3 %"
    assert rings.metadata["date"] == "3 May"
    assert rings.probe.scale_sigma == 0.015
    pointed = [remark for remark in rings.remarks if "did you mean" in remark]
    assert len(pointed) == 1
    assert "Line 2" in pointed[0]
    assert "'scale uncertainty'" in pointed[0]


def test_grades_stand_for_intervals_in_order() -> None:
    # common practice, no source: vs ~100, s 60-80, m 30-50, w 10-20, vw < 10
    for grade, typical in {"vs": 100, "s": 70, "m": 40, "w": 15, "vw": 5}.items():
        rings = rings_from_values([2.3], probe="electron 200 kV", intensities=[grade.upper()])
        low, high = rings.intensity_range[0]
        assert low <= typical <= high
        assert rings.intensity[0] == pytest.approx((low * high) ** 0.5)
    middles = [(low * high) ** 0.5 for low, high in GRADES.values()]
    assert middles == sorted(middles, reverse=True)


def test_numbers_are_scaled_to_the_strongest_and_zero_is_absent() -> None:
    rings = rings_from_values([2.3, 2.0, 1.4], probe="electron 200 kV", intensities=[8, 2, 0])
    assert rings.intensity[:2].tolist() == [100.0, 25.0]
    assert np.isnan(rings.intensity[2])
    assert rings.grades == ("", "", "")


def test_grade_words_and_mixed_lists() -> None:
    rings = rings_from_values(
        [2.3, 2.0, 1.4], probe="electron 200 kV", intensities=["very strong", 40.0, "vw"]
    )
    assert rings.grades == ("vs", "", "vw")
    assert rings.intensity[1] == 100.0
    assert any("mixed" in remark for remark in rings.remarks)


def test_default_sigma_of_plates_is_what_the_trade_reads() -> None:
    # a single ring on film or camera 0.2 to 0.5 %: common practice, no source
    rings = rings_from_values(["2.338", "1.431"], probe="electron 200 kV")
    assert np.all((rings.sigma_A / rings.d_A > 0.002) & (rings.sigma_A / rings.d_A < 0.005))
    assert any("Sigma not stated" in remark for remark in rings.remarks)


def test_default_sigma_counts_how_far_numbers_were_rounded() -> None:
    rings = rings_from_values(["2.3", "1.4"], probe="electron 200 kV")
    assert rings.sigma_A == pytest.approx(np.hypot(0.003 * rings.d_A, 0.1 / 12**0.5))
    # trailing zeros lost in a spreadsheet: the column's longest number tells the rounding
    mixed = rings_from_values(["2.338", "2"], probe="electron 200 kV")
    assert mixed.sigma_A[1] < 0.007


def test_default_sigma_of_a_diffractometer_is_an_angle() -> None:
    rings = rings_from_values(["38.4721", "100.4550"], column="two_theta_deg", probe="x-ray Cu Ka")
    assert rings.position_sigma == pytest.approx(0.02, rel=1e-3)
    assert rings.sigma_A[1] < 0.2 * rings.sigma_A[0]


def test_sigma_in_brackets_percent_and_with_its_unit_in_the_name() -> None:
    brackets = rings_from_text("# probe: electron 200 kV\nd_A\n2.338(5)\n")
    assert brackets.sigma_A[0] == pytest.approx(0.005)
    assert brackets.sigma_stated
    percent = rings_from_text("# probe: electron 200 kV\nd_A,sigma\n2.5,0.4 %\n")
    assert percent.sigma_A[0] == pytest.approx(0.01)
    named = rings_from_text("# probe: x-ray Cu Ka\ntwo_theta_deg,sigma_deg\n38.47,0.03\n")
    assert named.position_sigma[0] == 0.03


@pytest.mark.parametrize(
    ("column", "values", "probe", "says"),
    [
        ("d_A", [0.2338, 0.2024], "electron 200 kV", "d_nm"),
        ("d_nm", [2.338, 2.024], "electron 200 kV", "d_A"),
        ("g_1/A", [4.277, 4.94], "electron 200 kV", "g_1/nm"),
        ("g_1/nm", [0.4277, 0.494], "electron 200 kV", "g_1/A"),
        ("q_1/nm", [2.687, 3.104], "electron 200 kV", "q_1/A"),
        ("two_theta_deg", [16.1, 18.6], "electron 200 kV", "unusual for electrons"),
        ("d_A", [2.338, 0.7], "x-ray Cu Ka", "λ/2"),
        ("d_A", [2, 2, 1], "electron 200 kV", "decimal commas"),
        ("d_A", [2.338, 2.024, 2.338], "electron 200 kV", "value 1, value 3"),
    ],
)
def test_likely_slips_are_remarked(column: str, values: list[float], probe: str, says: str) -> None:
    rings = rings_from_values(values, column=column, probe=probe, sigma="0.3 %")
    assert any(says in remark for remark in rings.remarks)


def test_a_sound_list_draws_no_remark() -> None:
    rings = rings_from_values(
        [2.338, 2.024, 1.431],
        probe="electron 200 kV",
        scale_uncertainty="1 %",
        sigma=0.007,
        intensities=[100, 47, 22],
    )
    assert rings.remarks == ()


def test_plates_at_large_angles_are_remarked() -> None:
    rings = rings_from_values(
        [50.0, 60.0], column="radius_mm", probe="x-ray Cu Ka", camera_constant="100 A mm"
    )
    assert any("small angles" in remark for remark in rings.remarks)


@pytest.mark.parametrize(
    ("text", "value", "sigma", "unit"),
    [
        ("25.1 +- 0.3 A mm", 25.1, 0.3, "mm"),
        ("25.1 ± 0,3 Å·mm", 25.1, 0.3, "mm"),
        ("25.1(3) A*mm", 25.1, 0.3, "mm"),
        ("25.1 A mm +/- 0.3 A mm", 25.1, 0.3, "mm"),
        ("2.51 nm mm ± 1 %", 25.1, 0.251, "mm"),
        ("2.51 A cm", 25.1, None, "mm"),
        ("9800 mm A", 9800.0, None, "mm"),
        ("9800 +- 60 A px", 9800.0, 60.0, "px"),
        ("980 nm pixels", 9800.0, None, "px"),
    ],
)
def test_camera_constants(text: str, value: float, sigma: float | None, unit: str) -> None:
    constant = parse_camera_constant(text)
    assert constant.value == pytest.approx(value)
    assert constant.sigma == (None if sigma is None else pytest.approx(sigma))
    assert constant.plate_unit == unit


@pytest.mark.parametrize(
    "rings",
    [
        rings_from_text(FILM, source="film.csv"),
        rings_from_values(
            [38.4721, 44.738],
            column="two_theta_deg",
            probe="x-ray Cu Ka1",
            intensities=[1 / 3, 1.0],
        ),
        rings_from_values(["2.3(1)", "1"], probe="neutron 25.3 meV", title="two"),
        rings_from_values(
            [412, 503.25],
            column="radius_px",
            probe="electron 80 kV",
            camera_constant="980.5(7) A px",
        ),
    ],
    ids=["film", "angles", "neutron", "pixels"],
)
def test_writing_and_reading_gives_the_same_list(rings: RingList, tmp_path: Path) -> None:
    path = tmp_path / "again.csv"
    write_rings(rings, path)
    again = read_rings(path)
    _same(rings, again)
    assert rings_to_text(again) == rings_to_text(rings)
    assert [item.name for item in tmp_path.iterdir()] == ["again.csv"]


def test_unknown_metadata_survives_writing() -> None:
    text = rings_to_text(rings_from_text(FILM))
    assert "# operator's remark: slightly out of focus" in text
    assert text.count("# probe:") == 1


MEASURED = """\
# probe: electron 200 kV
# detection limit: 0.6
d_A,sigma,intensity,spottiness,arcs,note
2.338,0.004,50,0.12,0,
2.025,0.004,25,80 %,0.4,textured
1.432,0.003,,,,
"""


def test_what_measuring_adds_is_carried() -> None:
    rings = rings_from_text(MEASURED)
    assert rings.detection_limit == pytest.approx(1.2)  # with intensity: strongest = 100
    assert rings.spottiness == pytest.approx([0.12, 0.8, np.nan], nan_ok=True)
    assert rings.arcs == pytest.approx([0.0, 0.4, np.nan], nan_ok=True)
    _same(rings, rings_from_text(rings_to_text(rings)))


def test_a_list_without_them_states_nothing() -> None:
    rings = rings_from_text("# probe: electron 200 kV\nd_A,intensity\n2.3,100\n")
    assert rings.detection_limit is rings.spottiness is rings.arcs is None


@pytest.mark.parametrize("limit", ["-1", "0", "weak", "60", "nan"])
def test_a_limit_that_is_none_is_refused(limit: str) -> None:
    with pytest.raises(InputError, match="detection limit") as error:
        rings_from_text(MEASURED.replace("0.6", limit))
    assert error.value.line == 2


@pytest.mark.parametrize("cell", ["-0.1", "some"])
def test_an_unevenness_that_is_none_is_refused(cell: str) -> None:
    with pytest.raises(InputError, match="spottiness"):
        rings_from_text(MEASURED.replace("0.12", cell))
