"""`phaseid measure`, and images and profiles where ring lists are taken."""

from __future__ import annotations

import json
import xml.etree.ElementTree as ET

import numpy as np
import pytest
import tifffile
from PIL import Image

from phaseid.resources import data_path
from phaseid.rings import read_rings

PLATE = str(data_path("demo") / "foil_plate.png")
GIVEN = ("--camera-constant", "255 +- 3 A px", "--probe", "electron 200 kV")
# how scripts/build_demo.py draws the plate
CENTRE, CONSTANT, D_AL111 = (148.3, 155.6), 256.0, 2.3380


@pytest.fixture
def scan(tmp_path):
    """A profile with three Gaussian peaks."""
    x = np.arange(20.0, 60.0, 0.04)
    y = np.full_like(x, 100.0)
    for at, top in ((28.44, 2000), (47.30, 1100), (56.12, 600)):
        y += top * np.exp(-0.5 * ((x - at) / 0.06) ** 2)
    counts = np.random.default_rng(4).poisson(y)
    path = tmp_path / "scan.csv"
    rows = "".join(f"{a:.2f},{b}\n" for a, b in zip(x, counts, strict=True))
    path.write_text(f"# probe: x-ray Cu Ka1\ntwo_theta_deg,counts\n{rows}")
    return path


def test_an_image_in_json(phaseid) -> None:
    value = phaseid("measure", PLATE, *GIVEN, "--json").json("measurement-1")
    assert value["center_px"] == pytest.approx(CENTRE, abs=0.1)
    assert value["ellipse"]["ratio"] == pytest.approx(1.006, abs=0.001)
    first = value["rings"][0]
    assert first["radius_px"] == pytest.approx(CONSTANT / D_AL111, abs=0.05)
    assert first["d_A"] == pytest.approx(255 / first["radius_px"], rel=1e-4)


def test_without_a_constant_there_are_radii_only(phaseid) -> None:
    value = phaseid("measure", PLATE, "--json").json("measurement-1")
    assert all(ring["d_A"] is None and ring["radius_px"] > 0 for ring in value["rings"])


def test_the_ring_list_written_is_one(phaseid, tmp_path) -> None:
    path = tmp_path / "rings.csv"
    done = phaseid("measure", PLATE, *GIVEN, "-o", str(path))
    assert done.code == 0
    rings = read_rings(path)
    assert rings.position_column == "radius_px"
    assert len(rings) == 5
    assert rings.probe.scale_sigma == pytest.approx(3 / 255)
    assert "detection limit" in rings.metadata


def test_a_profile_in_json(phaseid, scan) -> None:
    value = phaseid("measure", str(scan), "--json").json("measurement-1")
    assert value["center_px"] is value["ellipse"] is None
    found = [ring["two_theta_deg"] for ring in value["rings"]]
    assert found == pytest.approx([28.44, 47.30, 56.12], abs=0.01)


def test_identify_takes_the_image_itself(phaseid) -> None:
    done = phaseid("identify", PLATE, *GIVEN, "--only", "Al,Mg,O", "--json")
    best = done.json("identification-1")["hypotheses"][0]
    assert {phase["formula"] for phase in best["phases"]} == {"Al", "MgO"}


def test_identify_takes_the_profile_itself(phaseid, scan) -> None:
    # 28.44, 47.30, 56.12 degrees with Cu Kα1: 111, 220, 311 of silicon (NIST SRM 640)
    done = phaseid("identify", str(scan), "--only", "Si,O", "--json")
    best = json.loads(done.out)["hypotheses"][0]
    assert best["phases"][0]["formula"] == "Si"


@pytest.mark.parametrize("options", [(), ("--json",)])
def test_what_is_no_image_ends_with_code_2(phaseid, tmp_path, options) -> None:
    path = tmp_path / "noise.png"
    path.write_bytes(b"\x89PNG nothing")
    done = phaseid("measure", str(path), *options)
    assert done.code == 2
    assert done.out == ""
    assert "not an image" in done.err


def test_a_missing_file_ends_with_code_2(phaseid, tmp_path) -> None:
    done = phaseid("measure", str(tmp_path / "none.tif"))
    assert done.code == 2
    assert "cannot be read" in done.err


def test_a_list_that_cannot_be_written_ends_with_code_2(phaseid, tmp_path) -> None:
    done = phaseid("measure", PLATE, "-o", str(tmp_path / "no" / "rings.csv"))
    assert done.code == 2
    assert "cannot be written" in done.err


def test_a_standard_in_the_image_gives_the_constant(phaseid, tmp_path) -> None:
    path = tmp_path / "rings.csv"
    done = phaseid(
        "measure", PLATE, "--standard", "Al", "--probe", "electron 200 kV", "-o", str(path)
    )
    assert done.code == 0
    assert "from 3 of 5 rings of Al" in done.out
    found = read_rings(path)
    assert found.camera_constant.value == pytest.approx(CONSTANT, abs=0.15)
    assert found.d_A[0] == pytest.approx(D_AL111, rel=6e-4)


def test_a_standard_that_is_not_in_it_is_refused(phaseid, scan) -> None:
    done = phaseid("measure", str(scan), "--standard", "Si")
    assert done.code == 2
    assert "phaseid calibrate" in done.err


def test_one_image_of_several(phaseid, tmp_path) -> None:
    plate = np.asarray(Image.open(PLATE))
    path = tmp_path / "stack.tif"
    tifffile.imwrite(path, np.stack([plate, np.zeros_like(plate)]), photometric="minisblack")
    done = phaseid("measure", str(path), "--frame", "1", "--json")
    assert done.json("measurement-1")["center_px"] == pytest.approx(CENTRE, abs=0.1)
    assert "2 images were added" in phaseid("measure", str(path)).out
    done = phaseid("measure", str(path), "--frame", "2")
    assert done.code == 2
    assert "constant" in done.err


def test_the_picture_of_what_was_found(phaseid, scan, tmp_path) -> None:
    path = tmp_path / "found.svg"
    assert phaseid("measure", str(scan), "--plot", str(path)).code == 0
    words = [text.text for text in ET.parse(path).iter("{http://www.w3.org/2000/svg}text")]
    assert {"1", "2", "3", "2θ in degrees", "background"} <= set(words)
    rings = tmp_path / "rings.csv"
    done = phaseid("measure", str(scan), "--plot", str(tmp_path / "a.txt"), "-o", str(rings))
    assert done.code == 2
    assert ".svg" in done.err
    assert not rings.exists()
