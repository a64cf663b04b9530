"""Profiles of certified standards, drawn from their cells, measured again."""

from __future__ import annotations

import numpy as np
import pytest
from ring_profiles import A_LAB6_A, CU_KA1_A, CU_KA2_A, angle

from phaseid.errors import InputError
from phaseid.rings.measuring import measure_profile, read_curve

SUMS = (1, 2, 3, 4, 5, 6, 8, 9)  # h² + k² + l² of a primitive cubic cell


def profile(seed: int, *, doublet: bool, pair: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    """Angles and counts; `pair` adds a peak so far above each of two."""
    rng = np.random.default_rng(seed)
    x = np.arange(18.0, 69.0, 0.03)
    y = 80.0 + 200.0 * np.exp(-(x - 18.0) / 15.0)
    for i, total in enumerate(SUMS):
        height = 2500.0 / (1 + (5 * i) % 7)
        lines = [(angle(total, CU_KA1_A), height)]
        if doublet:
            lines.append((angle(total, CU_KA2_A), 0.5 * height))
        if pair and i in (0, 5):
            lines.append((angle(total, CU_KA1_A) + pair, 0.5 * height))
        for at, top in lines:
            width = 0.09 + 0.0005 * at
            u = (x - at) / width
            y = y + top * (0.4 / (1 + 4 * u * u) + 0.6 * np.exp(-4 * np.log(2) * u * u))
    return x, rng.poisson(y).astype(float)


def write(path, x, y, head="# probe: x-ray Cu Ka\ntwo_theta_deg,counts\n"):
    path.write_text(head + "".join(f"{a:.4f},{b:g}\n" for a, b in zip(x, y, strict=True)))
    return path


@pytest.mark.parametrize("doublet", [True, False])
def test_a_certified_cell_comes_back_within_the_sigmas(tmp_path, doublet: bool) -> None:
    pulls = []
    for seed in range(3):
        found = measure_profile(write(tmp_path / "scan.csv", *profile(seed, doublet=doublet)))
        assert len(found.rings) == len(SUMS)
        for ring, total in zip(found.rings, SUMS, strict=True):
            pulls.append((ring.position - angle(total, CU_KA1_A)) / ring.sigma)
        assert found.metadata["probe"] == ("x-ray Cu Ka1" if doublet else "x-ray Cu Ka")
    assert 0.7 < np.std(pulls) < 1.35
    assert abs(np.mean(pulls)) < 0.6


def test_spacings_of_the_list_follow_the_certified_cell(tmp_path) -> None:
    found = measure_profile(write(tmp_path / "scan.csv", *profile(5, doublet=True)))
    d_A = found.ring_list().d_A
    wanted = A_LAB6_A / np.sqrt(np.array(SUMS))
    assert np.abs(d_A / wanted - 1).max() < 2e-4


def test_overlapping_peaks_are_fitted_together(tmp_path) -> None:
    x, y = profile(7, doublet=False, pair=0.22)
    found = measure_profile(write(tmp_path / "scan.csv", x, y), probe="x-ray Cu Ka1")
    assert len(found.rings) == len(SUMS) + 2
    at = angle(SUMS[0], CU_KA1_A)
    first, second = found.rings[0], found.rings[1]
    assert first.position == pytest.approx(at, abs=5 * first.sigma)
    assert second.position == pytest.approx(at + 0.22, abs=5 * second.sigma)


def test_a_powder_block_of_a_cif(tmp_path) -> None:
    x, y = profile(8, doublet=False)
    rows = "".join(f"{a:.3f} {b:.0f}\n" for a, b in zip(x, y, strict=True))
    path = tmp_path / "scan.cif"
    path.write_text(
        "data_lab6\n_diffrn_radiation_probe x-ray\n_diffrn_radiation_wavelength 1.5405929\n"
        f"loop_\n_pd_meas_2theta_scan\n_pd_meas_counts_total\n{rows}"
    )
    found = measure_profile(path)
    assert [ring.position for ring in found.rings] == pytest.approx(
        [angle(total, CU_KA1_A) for total in SUMS], abs=0.03
    )
    assert found.metadata["probe"] == "x-ray 1.54059 A"


def test_noise_alone_has_no_peaks(tmp_path) -> None:
    x = np.arange(10.0, 60.0, 0.05)
    y = np.random.default_rng(2).poisson(100 + 300 * np.exp(-x / 20)).astype(float)
    with pytest.raises(InputError, match="no peak"):
        measure_profile(write(tmp_path / "scan.csv", x, y))


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty"),
        ("two_theta_deg,counts\n" + "10,5\n11,6\n" * 3, "points"),
        ("two_theta_deg,counts\n" + "".join(f"{i},5\n" for i in range(1, 90)), "constant"),
        ("two_theta_deg,counts\n" + "".join(f"{i},{-i}\n" for i in range(1, 90)), "negative"),
        ("10 5\n11 6\n", "does not say"),
        ("two_theta_deg,counts\n10,5\nsome words\n", "not a row"),
        ("two_theta_deg,counts\n10,5\n11\n", "numbers where"),
        ("data_x\n_pd_block_id x\n", "no powder profile"),
    ],
)
def test_bad_profiles_are_refused(tmp_path, text: str, says: str) -> None:
    path = tmp_path / "scan.csv"
    path.write_text(text)
    with pytest.raises(InputError, match=says):
        read_curve(path)
