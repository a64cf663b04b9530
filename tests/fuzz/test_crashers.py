"""What fuzzing broke, each by its name; mended since."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from phaseid.cli.settings import read_config, write_config
from phaseid.errors import InputError
from phaseid.library.conditions import space_group_number
from phaseid.library.sources import read_all
from phaseid.library.tally import Rejected
from phaseid.rings import rings_from_values, rings_to_text, write_rings
from phaseid.rings.calibration_record import load_calibration
from phaseid.rings.measuring import curves, measure_profile, read_curve, read_image
from phaseid.rings.measuring.peaks import candidates
from tests.fuzz.targets import TARGETS

NO_NUMBERS: list[Any] = ["x", [1], {}, True, 10**400, 1e300, math.inf, math.nan]
NO_TEXTS: list[Any] = [[1], {}, True, None, 3]


@pytest.mark.parametrize("kind", range(len(TARGETS["calibration"].seeds)))
def test_a_calibration_of_wrong_kinds_is_told(kind: int, tmp_path: Path) -> None:
    seed = json.loads(TARGETS["calibration"].seeds[kind])
    path = tmp_path / "x.json"
    for key, value in seed["records"][0].items():
        for wrong in NO_TEXTS if isinstance(value, str) else NO_NUMBERS:
            record = {**seed["records"][0], key: wrong}
            path.write_text(json.dumps({**seed, "records": [record]}))
            with pytest.raises(InputError, match="no calibration that can be read"):
                load_calibration("x", tmp_path)


def test_a_calibration_of_nested_lists_is_told(tmp_path: Path) -> None:
    (tmp_path / "x.json").write_text('{"schema":' + "[" * 100_000)
    with pytest.raises(InputError, match="no calibration that can be read"):
        load_calibration("x", tmp_path)


@pytest.mark.parametrize(
    "text", ["probe = " + "[" * 100_000, "probe = " + "{a=" * 50_000, "probe = " + "1" * 10_000]
)
def test_a_deep_or_endless_configuration_is_told(text: str, tmp_path: Path) -> None:
    path = tmp_path / "config.toml"
    path.write_text(text)
    with pytest.raises(InputError, match="is not TOML"):
        read_config(path)


def test_a_setting_that_is_no_text_is_told(tmp_path: Path) -> None:
    path = tmp_path / "config.toml"
    with pytest.raises(InputError, match="no text that can be kept"):
        write_config({"library": "\udcff"}, path)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no devices on this system")
def test_a_device_is_never_replaced(tmp_path: Path) -> None:
    """Renaming a finished file over /dev/null would make it an ordinary file."""
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(InputError, match="no file that settings can be kept in"):
        write_config({"probe": "electron 200 kV"}, tmp_path / "pipe")
    reader = os.open(tmp_path / "pipe", os.O_RDONLY | os.O_NONBLOCK)
    try:
        rings = rings_from_values([2.0, 1.5], probe="electron 200 kV")
        write_rings(rings, tmp_path / "pipe")
        assert os.read(reader, 100_000).decode() == rings_to_text(rings)
    finally:
        os.close(reader)
    assert [path.name for path in tmp_path.iterdir()] == ["pipe"]
    assert (tmp_path / "pipe").is_fifo()


@pytest.mark.skipif(not Path("/dev/zero").exists(), reason="no endless file on this system")
def test_an_endless_configuration_is_left() -> None:
    with pytest.raises(InputError, match="is not TOML"):
        read_config(Path("/dev/zero"))


@pytest.mark.parametrize("text", ["\udcff", "1" * 5000, "F\u0305m3m", "", "0", "231"])
def test_what_is_no_space_group_is_told(text: str) -> None:
    with pytest.raises(InputError, match="is no space group"):
        space_group_number(text)


def test_adding_from_a_folder_that_is_gone(tmp_path: Path) -> None:
    (tmp_path / "gone").mkdir()
    before = Path.cwd()
    try:
        os.chdir(tmp_path / "gone")
        (tmp_path / "gone").rmdir()
        (found,) = read_all([Path("x.cif")])
    finally:
        os.chdir(before)
    assert isinstance(found, Rejected)
    assert found.code == "no_such_file"


def test_a_tiff_whose_pages_run_in_a_circle_is_told(tmp_path: Path) -> None:
    data = bytearray(136)
    data[:14] = b"II*\0\x08\0\0\0\x09\0\0\0\x04\0"
    data[14] = 1
    for at in (42, 57, 82, 86, 90, 101, 118):
        data[at] = 40
    path = tmp_path / "circle.tif"
    path.write_bytes(data)
    begun = time.process_time()
    with pytest.raises(InputError):
        read_image(path)
    assert time.process_time() - begun < 5


@pytest.mark.parametrize("last", ["1e6", "1e12", "1e300"])
def test_a_profile_with_one_point_far_away_is_told(last: str, tmp_path: Path) -> None:
    """Even steps over such a range would fill the memory."""
    rows = [f"{20 + n / 20:.2f},{100 + n % 5}" for n in range(200)]
    path = tmp_path / "far.xy"
    path.write_text("\n".join(["q_1/A,counts", *rows, f"{last},100"]))
    with pytest.raises(InputError, match="steps too uneven"):
        measure_profile(path)


def test_a_profile_of_too_many_points_is_left_early(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    assert curves.MAX_POINTS <= 1_000_000
    monkeypatch.setattr(curves, "MAX_POINTS", 1000)
    path = tmp_path / "long.xy"
    path.write_text("two_theta_deg counts\n" + "1 1\n" * 1_000_000)
    begun = time.process_time()
    with pytest.raises(InputError, match="more than 1000 points"):
        read_curve(path)
    assert time.process_time() - begun < 2
    path.write_text("two_theta_deg counts\n" + "1 " * 1_000_000)
    with pytest.raises(InputError, match="5000 characters a line"):
        read_curve(path)


def test_a_peak_is_sought_at_no_width() -> None:
    """Sawteeth left the search without any width that fits."""
    flat = np.ones(50)
    assert candidates(flat, flat, np.array([]), 3.0) == []


def test_a_profile_of_many_columns_keeps_three(tmp_path: Path) -> None:
    path = tmp_path / "wide.xy"
    rows = [f"{20 + n / 20:.2f} {100 + n % 5} 10 " + "1 " * 500 for n in range(100)]
    path.write_text("two_theta_deg counts\n" + "\n".join(rows))
    np.testing.assert_array_equal(read_curve(path).sigma, np.full(100, 10.0))


@pytest.mark.skipif(not Path("/dev/zero").exists(), reason="no endless file on this system")
def test_endless_standard_input_is_left() -> None:
    with Path("/dev/zero").open("rb") as endless:
        done = subprocess.run(
            [sys.executable, "-m", "phaseid", "identify", "-", "--probe", "electron 200 kV"],
            stdin=endless, capture_output=True, text=True, check=False, timeout=60,
        )  # fmt: skip
    assert done.returncode == 2
    assert "standard input: is larger than 2 MB" in done.stderr
