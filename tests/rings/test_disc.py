"""The small picture of a measured image, against the radii drawn by `ring_images`."""

from __future__ import annotations

import numpy as np
import pytest
from ring_images import Scene, draw

from phaseid.rings.measuring import Disc, measure_pixels

SCENE = Scene(
    size=(520, 560),
    centre=(283.3, 246.8),
    radii=(90.0, 150.0, 220.0),
    heights=(300.0, 200.0, 150.0),
    ratio=1.04,
    angle=30.0,
    tail=4000.0,
)


def brightest(disc: Disc, direction_deg: float, near: float) -> float:
    """Distance (px of the image) of the brightest pixel along a direction within 15 of `near`."""
    t = np.arange(near - 15.0, near + 15.0, 0.25)
    turn = np.radians(direction_deg)
    columns = np.rint(disc.centre + t * np.cos(turn) / disc.px_per_pixel).astype(int)
    rows = np.rint(disc.centre + t * np.sin(turn) / disc.px_per_pixel).astype(int)
    level = disc.grey[rows, columns].astype(float)
    return float((t * level).sum() / level.sum())


@pytest.fixture(scope="module", params=[1, 4], ids=["as it is", "four times as large"])
def pictured(request: pytest.FixtureRequest) -> tuple[int, Disc]:
    factor = request.param
    image = np.kron(draw(SCENE), np.ones((factor, factor))).astype(np.float32)
    found = measure_pixels(image, np.ones(image.shape, dtype=bool), source="drawn")
    assert found.disc is not None
    return factor, found.disc


def test_rings_are_circles_at_their_radius(pictured: tuple[int, Disc]) -> None:
    factor, disc = pictured
    assert disc.grey.shape[0] == disc.grey.shape[1] <= 801
    for radius in SCENE.radii:
        along = [brightest(disc, angle, factor * radius) for angle in range(0, 360, 15)]
        assert np.mean(along) == pytest.approx(factor * radius, abs=0.5 * disc.px_per_pixel)
        assert np.std(along) < 1.2 * disc.px_per_pixel


def test_the_scale_follows_the_camera_constant(pictured: tuple[int, Disc]) -> None:
    factor, disc = pictured
    ring = brightest(disc, 0.0, factor * 150.0) / disc.px_per_pixel  # pixels of the picture
    # radius × d = 980 Å px: d = 980 / radius
    assert ring * disc.per_A_per_pixel(980.0) == pytest.approx(factor * 150.0 / 980.0, rel=0.01)


def test_rings_are_bright_and_what_lies_between_is_dark(pictured: tuple[int, Disc]) -> None:
    factor, disc = pictured
    row = disc.grey[round(disc.centre)].astype(float)
    at = [round(disc.centre + factor * r / disc.px_per_pixel) for r in (90.0, 150.0, 120.0, 185.0)]
    first, second, gap, outer_gap = (row[i - 2 : i + 3].max() for i in at)
    assert min(first, second) > 2.5 * max(gap, outer_gap)


def test_the_picture_does_not_keep_the_image(pictured: tuple[int, Disc]) -> None:
    _, disc = pictured
    assert disc.grey.base is None
    assert disc.grey.nbytes + disc.seen.nbytes < 1_400_000


def test_what_lies_outside_the_frame_is_not_seen() -> None:
    image = draw(Scene(**{**SCENE.__dict__, "centre": (150.0, 260.0)})).astype(np.float32)
    disc = measure_pixels(image, np.ones(image.shape, dtype=bool), source="drawn").disc
    assert disc is not None
    assert not disc.seen[round(disc.centre), 0]
    assert disc.seen[round(disc.centre), -1]
    assert not disc.grey[~disc.seen].any()


def test_the_curve_goes_with_the_ring_list() -> None:
    image = draw(SCENE).astype(np.float32)
    found = measure_pixels(image, np.ones(image.shape, dtype=bool), source="drawn")
    rings = found.ring_list(probe="electron 200 kV", camera_constant="980 A px")
    assert rings.curve is not None
    radius, counts = rings.curve.T
    for ring, drawn, height in zip(rings.position, SCENE.radii, SCENE.heights, strict=True):
        near = np.abs(radius - ring) < 10
        assert radius[near][np.argmax(counts[near])] == pytest.approx(drawn, abs=1.5)
        assert counts[near].max() == pytest.approx(height, rel=0.15)
