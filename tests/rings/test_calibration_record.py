"""Calibrations kept by name, and ring lists read by them."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from datetime import date
from pathlib import Path

import pytest

from phaseid.errors import InputError
from phaseid.rings import parse_table
from phaseid.rings.calibration_record import (
    CalibrationRecord,
    calibration_names,
    load_calibration,
    save_calibration,
)

TODAY = date(2024, 5, 10)
PLATE = CalibrationRecord(
    name="plate80",
    created="2024-05-01",
    standard="Au",
    cell_source="handbook",
    probe="electron 200 kV",
    wavelength_A=0.02507934,
    quantity="radius",
    relative_sigma=0.001,
    camera_constant=25.0,
    plate_unit="mm",
)
ANGLES = replace(
    PLATE,
    name="lab",
    probe="x-ray Cu Ka1",
    wavelength_A=1.5421,
    quantity="two_theta",
    camera_constant=None,
    plate_unit="",
    zero_shift_deg=0.05,
)
SPACINGS = replace(PLATE, quantity="d", camera_constant=None, plate_unit="", factor=1.02)
RADII = "# probe: electron 200 kV\nradius_mm,sigma\n10.0,0.02\n12.5,0.02\n"


def test_radii_are_read_with_the_constant_and_its_uncertainty() -> None:
    rings = PLATE.apply(parse_table(RADII, "r.csv"), today=TODAY)
    assert rings.d_A.tolist() == pytest.approx([2.5, 2.0])
    assert rings.probe.scale_sigma == pytest.approx(0.001)
    assert any("plate80" in remark for remark in rings.remarks)
    assert not any("Warning" in remark for remark in rings.remarks)


def test_a_list_without_a_probe_takes_that_of_the_calibration() -> None:
    rings = PLATE.apply(parse_table("radius_mm\n10.0\n", "r.csv"), today=TODAY)
    assert rings.probe.label == "electron 200 kV"


def test_diameters_are_halved() -> None:
    rings = PLATE.apply(parse_table("diameter_mm\n20.0\n", "r.csv"), today=TODAY)
    assert rings.d_A.tolist() == pytest.approx([2.5])


def test_measured_spacings_are_multiplied() -> None:
    table = parse_table("# probe: electron 200 kV\ng_1/nm,sigma\n4.0,0.04\n", "g.csv")
    rings = SPACINGS.apply(table, today=TODAY)
    assert rings.d_A.tolist() == pytest.approx([2.55])
    assert (rings.sigma_A / rings.d_A).tolist() == pytest.approx([0.01])


def test_angles_take_the_wavelength_and_lose_the_zero_shift() -> None:
    table = parse_table("# probe: x-ray Cu Ka1\ntwo_theta_deg,sigma\n60.05,0.02\n", "a.csv")
    rings = ANGLES.apply(table, today=TODAY)
    assert rings.d_A.tolist() == pytest.approx([1.5421])  # λ / (2 sin 30°)
    assert rings.probe.wavelength_A == pytest.approx(1.5421)


def test_an_old_calibration_is_warned_about() -> None:
    rings = PLATE.apply(parse_table(RADII, "r.csv"), today=date(2024, 7, 1))
    assert any("61 days old" in remark for remark in rings.remarks)


def test_another_voltage_is_warned_about_and_widens_the_scale() -> None:
    table = parse_table(RADII.replace("200 kV", "195 kV"), "r.csv")
    rings = PLATE.apply(table, today=TODAY)
    assert any("195 kV" in remark and "Warning" in remark for remark in rings.remarks)
    assert rings.probe.scale_sigma == pytest.approx(0.0150, abs=0.002)  # the wavelengths' ratio
    stated = PLATE.apply(table, scale_uncertainty="0.5%", today=TODAY)
    assert stated.probe.scale_sigma == pytest.approx(0.005)


@pytest.mark.parametrize(
    ("record", "text"),
    [
        (PLATE, "# probe: electron 200 kV\nd_A\n2.3\n"),
        (PLATE, "# probe: electron 200 kV\nradius_px\n412\n"),
        (SPACINGS, RADII),
        (ANGLES, RADII),
        (ANGLES, "# probe: x-ray Mo Ka1\ntwo_theta_deg\n20.0\n"),
    ],
)
def test_a_calibration_of_another_kind_is_refused(record: CalibrationRecord, text: str) -> None:
    with pytest.raises(InputError, match="calibration"):
        record.apply(parse_table(text, "r.csv"), today=TODAY)


def test_the_newest_of_a_name_is_used_and_none_is_lost(tmp_path: Path) -> None:
    save_calibration(PLATE, tmp_path / "kept")
    path = save_calibration(replace(PLATE, camera_constant=26.0), tmp_path / "kept")
    assert load_calibration("plate80", tmp_path / "kept").camera_constant == 26.0
    assert "25.0" in path.read_text(encoding="utf-8")
    assert calibration_names(tmp_path / "kept") == ["plate80"]


@pytest.mark.parametrize("name", ["", "../up", "a/b", ".hidden", "x" * 80])
def test_a_name_that_is_no_file_name_is_refused(name: str, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="name"):
        save_calibration(replace(PLATE, name=name), tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_an_unknown_name_is_told_the_nearest(tmp_path: Path) -> None:
    save_calibration(PLATE, tmp_path)
    with pytest.raises(InputError, match="plate80"):
        load_calibration("cm20", tmp_path)
    with pytest.raises(InputError, match="--save"):
        load_calibration("cm20", tmp_path / "empty")


@pytest.mark.parametrize(
    "text",
    [
        "",
        "{}",
        "[1]",
        '{"schema": "phaseid.calibration-record/1", "records": [{"name": 1}]}',
        "\xff",
    ],
)
def test_a_damaged_record_is_told_and_left(text: str, tmp_path: Path) -> None:
    path = tmp_path / "plate80.json"
    path.write_text(text, encoding="latin-1")
    with pytest.raises(InputError, match=r"plate80\.json"):
        load_calibration("plate80", tmp_path)
    with pytest.raises(InputError, match=r"plate80\.json"):
        save_calibration(PLATE, tmp_path)
    assert path.read_text(encoding="latin-1") == text


OVAL = replace(PLATE, ellipse_ratio=1.02, ellipse_ratio_sigma=0.001, long_axis_deg=30.0)
LONG, SHORT = math.sqrt(1.02), 1 / math.sqrt(1.02)


@pytest.mark.parametrize(("direction", "stretch"), [("30", LONG), ("120 degrees", SHORT)])
def test_the_ellipse_is_taken_off_radii_of_a_known_direction(
    direction: str, stretch: float
) -> None:
    """Half-axes of an ellipse of the area of a unit circle are √ratio and 1/√ratio."""
    text = f"# probe: electron 200 kV\n# direction: {direction}\nradius_mm\n{10 * stretch:.6f}\n"
    rings = OVAL.apply(parse_table(text, "r.csv"), today=TODAY)
    assert rings.d_A[0] == pytest.approx(2.5, rel=1e-6)
    assert rings.probe.scale_sigma == pytest.approx(math.hypot(0.001, 0.001 / 1.02 / 2))
    assert rings.position[0] == pytest.approx(10 * stretch, rel=1e-6)


@pytest.mark.parametrize("turn", [0.0, 20.0, 45.0, 77.0, 110.0])
def test_points_of_an_ellipse_lie_on_it(turn: float) -> None:
    x, y = (OVAL.ellipse.stretch(30.0 + turn) * f(math.radians(turn)) for f in (math.cos, math.sin))
    assert (x / LONG) ** 2 + (y / SHORT) ** 2 == pytest.approx(1.0)


def test_an_unknown_direction_widens_the_scale_by_the_ellipse() -> None:
    """The root mean square of ln stretch over all directions, by brute force."""
    every = [math.log(OVAL.ellipse.stretch(angle)) for angle in range(180)]
    spread = math.sqrt(sum(e * e for e in every) / 180)
    rings = OVAL.apply(parse_table(RADII, "r.csv"), today=TODAY)
    assert rings.d_A.tolist() == pytest.approx([2.5, 2.0])
    assert rings.probe.scale_sigma == pytest.approx(math.hypot(0.001, spread), rel=0.02)
    assert any("direction" in remark for remark in rings.remarks)


def test_an_ellipse_measured_on_the_image_itself_is_enough() -> None:
    own = "# ellipse corrected: axes ratio 1.01 +- 0.001, long axis at 3.0 +- 1.0 degrees\n"
    rings = OVAL.apply(parse_table(own + RADII, "r.csv"), today=TODAY)
    assert rings.d_A.tolist() == pytest.approx([2.5, 2.0])
    assert rings.probe.scale_sigma == pytest.approx(0.001)


def test_a_direction_that_is_none_is_told() -> None:
    with pytest.raises(InputError, match="direction 'upward'"):
        OVAL.apply(parse_table("# direction: upward\n" + RADII, "r.csv"), today=TODAY)


def test_a_record_of_before_ellipses_is_still_read(tmp_path: Path) -> None:
    path = save_calibration(PLATE, tmp_path)
    held = json.loads(path.read_text("utf-8"))
    for key in ("ellipse_ratio", "ellipse_ratio_sigma", "long_axis_deg"):
        del held["records"][0][key]
    path.write_text(json.dumps(held), encoding="utf-8")
    assert load_calibration(PLATE.name, tmp_path) == PLATE
