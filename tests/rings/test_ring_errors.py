"""One broken file per rule; each refusal says where, what and what to do next."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from phaseid.errors import InputError
from phaseid.rings import (
    RingList,
    parse_camera_constant,
    read_rings,
    rings_from_text,
    rings_from_values,
    write_rings,
)

BAD = Path(__file__).parents[1] / "bad"

# file: (line the message names, words of it)
DEFECTS: dict[str, tuple[int | None, str]] = {
    "empty": (None, "no header and no rings"),
    "only_comments": (None, "no header and no rings"),
    "header_without_rows": (None, "header but no rings"),
    "no_probe": (None, "Add a line '# probe: …'"),
    "unknown_probe": (2, "Did you mean 'electron'?"),
    "probe_without_unit": (1, "'electron 200 kV'"),
    "header_missing": (2, "'d_A,intensity'"),
    "metadata_without_hash": (1, "Begin metadata lines with '#'"),
    "two_position_columns": (2, "d_A and g_1/nm"),
    "no_position_column": (2, "two_theta_deg, radius_mm"),
    "position_column_misspelt": (2, "Did you mean 'd_A' or 'd_nm'?"),
    "angle_column_misnamed": (2, "Did you mean 'two_theta_deg'?"),
    "two_sigma_columns": (2, "two columns 'sigma'"),
    "sigma_column_misspelt": (2, "Did you mean 'sigma'?"),
    "intensity_column_misnamed": (2, "Did you mean 'intensity'?"),
    "negative_position": (4, "d_A is negative (-2.024)"),
    "zero_position": (4, "d_A is zero"),
    "nan_position": (3, "'nan' is not a number"),
    "infinite_position": (3, "too large"),
    "missing_position": (3, "d_A is missing"),
    "position_not_a_number": (4, "'about 2' is not a number"),
    "impossible_spacing": (4, "wrong unit?"),
    "angle_beyond_180": (4, "angles end at 180"),
    "angles_without_wavelength": (None, "states none"),
    "angles_by_time_of_flight": (None, "Give d_A"),
    "radii_without_camera_constant": (None, "# camera constant: 25.1 +- 0.3 A mm"),
    "camera_constant_of_other_plate": (None, "in A mm, the one given is in A px"),
    "camera_constant_without_unit": (2, "'A mm' or 'A px'"),
    "camera_constant_not_a_number": (2, "'25.1 +- 0.3 A mm'"),
    "camera_constant_sigma_too_large": (2, "below 20 %"),
    "negative_sigma": (4, "sigma is negative"),
    "zero_sigma": (4, "sigma is zero"),
    "sigma_not_a_number": (3, "'small' is not a number"),
    "negative_intensity": (3, "intensity is negative"),
    "unknown_grade": (4, "did you mean 'vs'?"),
    "decimal_comma": (None, "decimal comma"),
    "scale_uncertainty_without_percent": (2, "'1.5 %'"),
    "scale_uncertainty_not_a_number": (2, "'1 %'"),
    "scale_uncertainty_negative": (2, "'1 %'"),
    "probe_given_twice": (2, "given twice"),
    "several_bad_rows": (None, "3 rows"),
    "latin1": (2, "UTF-8"),
    "utf16": (None, "UTF-8"),
    "binary": (None, "binary"),
}


def test_every_broken_file_has_its_rule_and_every_rule_its_file() -> None:
    names = {path.stem.removeprefix("rings_") for path in BAD.glob("rings_*.csv")}
    assert names == set(DEFECTS)


@pytest.mark.parametrize("name", DEFECTS)
def test_broken_file_is_refused_with_place_and_remedy(name: str) -> None:
    path = BAD / f"rings_{name}.csv"
    line, words = DEFECTS[name]
    with pytest.raises(InputError) as refused:
        read_rings(path)
    error = refused.value
    assert str(path) in str(error)
    assert words in str(error)
    assert error.line == line
    assert error.remedy


def test_all_bad_rows_are_reported_together() -> None:
    with pytest.raises(InputError) as refused:
        read_rings(BAD / "rings_several_bad_rows.csv")
    message = str(refused.value)
    assert "line 4: d_A is negative" in message
    assert "line 5: sigma is zero" in message
    assert "line 7: d_A 'one' is not a number" in message
    assert "line 3" not in message


def test_a_thousand_bad_rows_are_not_all_printed() -> None:
    text = "# probe: electron 200 kV\nd_A\n" + "x\n" * 1000
    with pytest.raises(InputError, match="and 980 more"):
        rings_from_text(text)


def test_files_that_are_not_there(tmp_path: Path) -> None:
    for path in (tmp_path / "none.csv", tmp_path):
        with pytest.raises(InputError, match="cannot be read"):
            read_rings(path)


def test_huge_files_are_refused_without_reading_them_whole(tmp_path: Path) -> None:
    path = tmp_path / "huge.csv"
    path.write_text("d_A\n" + "2.338\n" * 500_000)
    with pytest.raises(InputError, match="phaseid measure"):
        read_rings(path)
    with pytest.raises(InputError, match="at most 2000"):
        rings_from_text("# probe: electron 200 kV\nd_A\n" + "2.338\n" * 2001)
    with pytest.raises(InputError, match="longer than"):
        rings_from_text("d_A," + "x" * 200_000)


def test_errors_of_arguments_do_not_blame_the_file() -> None:
    text = "# probe: electron 200 kV\nd_A\n2.338\n"
    for given_wrong in (
        {"probe": "elektron"},
        {"scale_uncertainty": "much"},
        {"camera_constant": "2"},
    ):
        with pytest.raises(InputError) as refused:
            rings_from_text(text, source="film.csv", **given_wrong)
        assert "film.csv" not in str(refused.value)


@pytest.mark.parametrize(
    "wrong",
    [
        {"values": []},
        {"values": [2.3, -1.0]},
        {"values": [2.3, float("nan")]},
        {"values": ["2.3 cm"]},
        {"values": [2.3], "column": "d_pm"},
        {"values": [2.3], "sigma": [0.1, 0.1]},
        {"values": [2.3], "intensities": [1.0, 2.0]},
        {"values": [2.3], "intensities": ["bright"]},
        {"values": [2.3], "sigma": 0.0},
    ],
)
def test_typed_numbers_that_make_no_sense(wrong: dict[str, object]) -> None:
    with pytest.raises(InputError) as refused:
        rings_from_values(**{"probe": "electron 200 kV", **wrong})  # type: ignore[arg-type]
    assert refused.value.remedy


@pytest.mark.parametrize(
    "text", ["", "x", "25.1 mm", "25.1 mm px", "-25 A mm", "0 A mm", "1e999 A mm"]
)
def test_camera_constants_that_make_no_sense(text: str) -> None:
    with pytest.raises(InputError, match="A mm"):
        parse_camera_constant(text)


def test_writing_where_nothing_can_be_written(tmp_path: Path) -> None:
    rings = rings_from_values([2.338], probe="electron 200 kV")
    with pytest.raises(InputError, match="cannot be written"):
        write_rings(rings, tmp_path / "no folder" / "rings.csv")


cells = st.text(alphabet="0123456789.,;-+eE()%vsmw #:\t\"'dAnm_/Å", max_size=12)


@given(
    st.sampled_from(["d_A", "two_theta_deg", "radius_mm", "d_A,sigma", "d_A;intensity;note"]),
    st.lists(st.lists(cells, max_size=4).map(",".join), max_size=6),
)
@settings(max_examples=200, deadline=None, database=None)
def test_any_text_is_a_ring_list_or_a_clear_refusal(header: str, rows: list[str]) -> None:
    text = "\n".join(["# probe: x-ray Cu Ka", "# camera constant: 25 A mm", header, *rows])
    try:
        rings = rings_from_text(text)
    except InputError as refused:
        assert refused.remedy  # noqa: PT017 - either outcome is right, a refusal must help
    else:
        assert isinstance(rings, RingList)
        assert (rings.d_A > 0).all()
        assert (rings.sigma_A > 0).all()
