"""Images drawn by `ring_images` (which shares no code with the finder) measured again."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from PIL import Image
from ring_images import Scene, draw, random_scene

from phaseid.errors import InputError
from phaseid.rings.measuring import Measurement, measure_image, measure_pixels
from phaseid.rings.measuring.images import read_image

PLAIN = Scene(
    size=(300, 320),
    centre=(163.3, 146.8),
    radii=(60.0, 69.3, 98.0, 114.9, 120.0),
    heights=(90.0, 40.0, 30.0, 35.0, 10.0),
    seed=3,
)


def measured(scene: Scene) -> Measurement:
    image = draw(scene).astype(np.float32)
    usable = np.ones(image.shape, dtype=bool)
    return measure_pixels(image, usable, source="drawn")


def matched(found: Measurement, scene: Scene) -> dict[float, int]:
    """Drawn radius -> index of the ring found within 2 px."""
    pairs = {}
    for radius in scene.radii:
        off = [abs(ring.position - radius) for ring in found.rings]
        if min(off) < 2.0:
            pairs[radius] = int(np.argmin(off))
    return pairs


@pytest.fixture(scope="module")
def many() -> list[tuple[Scene, Measurement]]:
    scenes = [random_scene(seed, 300) for seed in range(40, 52)]
    return [(scene, measured(scene)) for scene in scenes]


def test_centres_come_back(many) -> None:
    off = [
        np.hypot(found.geometry.x - scene.centre[0], found.geometry.y - scene.centre[1])
        for scene, found in many
    ]
    assert np.median(off) < 0.2
    assert max(off) < 1.0


def test_ellipses_come_back_within_their_sigma(many) -> None:
    pulls = []
    for scene, found in many:
        if not found.geometry.ellipse_known:
            continue
        e, turn = 0.5 * np.log(scene.ratio), np.radians(2 * scene.angle)
        spread = np.sqrt(np.diag(found.geometry.covariance))
        pulls.append((found.geometry.stretch_c - e * np.cos(turn)) / spread[2])
        pulls.append((found.geometry.stretch_s - e * np.sin(turn)) / spread[3])
    assert len(pulls) >= 16
    assert 0.5 < np.std(pulls) < 1.5
    assert max(np.abs(pulls)) < 4.5


def test_radii_scatter_as_their_sigmas_say(many) -> None:
    pulls = [
        (found.rings[i].position - radius) / found.rings[i].sigma
        for scene, found in many
        for radius, i in matched(found, scene).items()
    ]
    assert len(pulls) > 50
    assert 0.7 < np.std(pulls) < 1.35


def test_few_rings_are_missed_and_none_invented(many) -> None:
    clear = seen = extra = 0
    for scene, found in many:
        pairs = matched(found, scene)
        extra += len(found.rings) - len(set(pairs.values()))
        for radius, height in zip(scene.radii, scene.heights, strict=True):
            ground = scene.background + scene.tail * np.exp(-radius / scene.tail_length)
            pixels = 2 * np.pi * radius * scene.sigma  # matched filter, counting noise only
            if height * np.sqrt(pixels / (ground + height)) > 12:
                clear += 1
                seen += radius in pairs
    assert clear > 40
    assert seen >= 0.9 * clear
    assert extra <= 1


def test_intensities_and_widths_are_those_drawn() -> None:
    found = measured(PLAIN)
    for radius, i in matched(found, PLAIN).items():
        ring = found.rings[i]
        height = PLAIN.heights[PLAIN.radii.index(radius)]
        area = height * PLAIN.sigma * np.sqrt(2 * np.pi)
        assert ring.intensity == pytest.approx(area, abs=5 * ring.intensity_sigma + 0.02 * area)
        assert ring.total == pytest.approx(2 * np.pi * radius * ring.intensity, rel=1e-3)
        assert ring.width == pytest.approx(2.355 * PLAIN.sigma, rel=0.1)
        assert ring.spottiness < 0.2


def test_close_rings_are_told_apart() -> None:
    scene = replace(PLAIN, radii=(60.0, 100.0, 105.5), heights=(50.0, 60.0, 40.0))
    assert len(matched(measured(scene), scene)) == 3


def test_a_centre_off_the_frame() -> None:
    scene = replace(
        PLAIN,
        centre=(-25.0, 140.0),
        radii=(90.0, 120.0, 160.0, 200.0, 240.0),
        heights=(80.0, 60.0, 50.0, 40.0, 30.0),
    )
    found = measured(scene)
    assert np.hypot(found.geometry.x + 25.0, found.geometry.y - 140.0) < 1.0
    assert len(matched(found, scene)) >= 4


def test_a_halo_is_no_ring() -> None:
    scene = replace(PLAIN, halo=(80.0, 30.0, 40.0))
    found = measured(scene)
    assert set(matched(found, scene)) == set(scene.radii)
    assert len(found.rings) == 5


def test_spots_show_in_the_spottiness() -> None:
    even, spotty = measured(PLAIN), measured(replace(PLAIN, spots=80))
    assert max(ring.spottiness for ring in even.rings if ring.intensity > 100) < 0.2
    assert min(ring.spottiness for ring in spotty.rings if ring.intensity > 100) > 0.5
    assert any(ring.note for ring in spotty.rings)


def test_a_saturated_beam_is_left_out(tmp_path) -> None:
    scene = replace(PLAIN, tail=6000.0, tail_length=12.0, saturation=255.0)
    path = tmp_path / "plate.png"
    Image.fromarray(draw(scene).astype(np.uint8)).save(path)
    found = measure_image(path)
    assert found.masked > 0.03
    assert set(matched(found, scene)) == set(scene.radii)


@pytest.mark.parametrize("kind", ["uint8", "uint16", "int32", "float32"])
def test_tiff_counts_are_read_as_they_are(tmp_path, kind: str) -> None:
    counts = np.minimum(draw(replace(PLAIN, size=(64, 80), centre=(30, 30))), 250).astype(kind)
    counts[3, 5] = 251
    path = tmp_path / "image.tif"
    Image.fromarray(counts).save(path)
    assert np.array_equal(read_image(path).counts, counts.astype(np.float32))


@pytest.mark.parametrize(("mode", "kind"), [(0, "i1"), (1, "<i2"), (2, "<f4"), (6, "<u2")])
def test_mrc_counts_are_read_as_they_are(tmp_path, mode: int, kind: str) -> None:
    # header words 1-4 (columns, rows, sections, mode) and 53 ("MAP "): MRC2014, from memory
    counts = np.arange(40 * 50).reshape(40, 50) % 100
    header = np.zeros(256, dtype="<i4")
    header[:4] = 50, 40, 1, mode
    header[52] = int.from_bytes(b"MAP ", "little")
    header[53] = 0x4444
    path = tmp_path / "image.mrc"
    path.write_bytes(header.tobytes() + counts.astype(kind).tobytes())
    assert np.array_equal(read_image(path).counts, counts)
    path.write_bytes(path.read_bytes()[:-10])
    with pytest.raises(InputError, match="cut short"):
        read_image(path)


def test_saturated_rings_keep_their_place() -> None:
    scene = replace(PLAIN, saturation=75.0, tail=40.0)
    found = measured(scene)
    pairs = matched(found, scene)
    assert set(pairs) == set(scene.radii)
    assert len(found.rings) == len(scene.radii)
    strong = found.rings[pairs[60.0]]
    assert "saturated" in strong.note
    assert strong.position == pytest.approx(60.0, abs=max(4 * strong.sigma, 0.1))
    assert "saturated" not in found.rings[pairs[98.0]].note


@pytest.mark.parametrize("through", [0.0, 0.2, 0.35])
def test_a_beam_stop_that_lets_some_through(through: float) -> None:
    scene = replace(PLAIN, stop=(8.0, 14.0, 200.0), through=through, background=60.0)
    found = measured(scene)
    assert np.hypot(found.geometry.x - 163.3, found.geometry.y - 146.8) < 0.1
    assert 0.02 < found.masked < 0.15
    assert set(matched(found, scene)) == set(scene.radii)
    assert max(ring.spottiness for ring in found.rings if ring.intensity > 100) < 0.25


def test_texture_is_told_from_spots() -> None:
    arcs = measured(replace(PLAIN, texture=0.9)).rings
    spots = measured(replace(PLAIN, spots=80)).rings
    even = measured(PLAIN).rings
    strong = [ring for ring in arcs if ring.intensity > 100]
    # 1 + 0.9 cos 4φ has a standard deviation of 0.9 / √2, in whose square neighbours 10 degrees
    # apart agree to cos 40°
    wanted = 0.9 / 2**0.5 * np.cos(np.radians(40.0)) ** 0.5
    assert np.median([ring.arcs for ring in strong]) == pytest.approx(wanted, abs=0.1)
    assert {ring.note for ring in strong} == {"textured"}
    assert {ring.note for ring in spots if ring.intensity > 100} == {"spotty"}
    assert max(ring.arcs for ring in even) < 0.1
    along = np.array(strong[2].along)
    turn = np.radians(np.arange(5.0, 360.0, 10.0))
    assert np.nanmean(along) == pytest.approx(1.0, abs=0.02)
    assert np.corrcoef(along, 1 + 0.9 * np.cos(4 * turn + PLAIN.radii[2]))[0, 1] > 0.9


def test_the_ring_list_carries_limit_and_unevenness() -> None:
    found = measured(replace(PLAIN, texture=0.9))
    rings = found.ring_list(probe="electron 200 kV", camera_constant="250 A px")
    strongest = max(ring.intensity for ring in found.rings)
    assert rings.detection_limit == pytest.approx(100 * found.limit / strongest, rel=1e-3)
    assert rings.spottiness == pytest.approx([r.spottiness for r in found.rings], abs=1e-3)
    assert rings.arcs == pytest.approx([r.arcs for r in found.rings], abs=1e-3)


@pytest.mark.parametrize("name", ["camera", "coins", "moon", "page", "grass", "brick"])
def test_photographs_are_refused(tmp_path, name: str) -> None:
    data = pytest.importorskip("skimage.data", reason="scikit-image is not installed")
    path = tmp_path / "photograph.png"
    Image.fromarray(getattr(data, name)()).save(path)
    with pytest.raises(InputError, match="no rings"):
        measure_image(path)


def bad_image(kind: str) -> np.ndarray:
    rng = np.random.default_rng(1)
    y, x = np.mgrid[0:200, 0:220]
    if kind == "noise":
        return rng.poisson(50, (200, 220)).astype(np.uint16)
    if kind == "constant":
        return np.full((200, 220), 7, dtype=np.uint8)
    if kind == "tiny":
        return rng.integers(0, 200, (8, 8)).astype(np.uint8)
    if kind == "colour":
        return rng.integers(0, 255, (200, 220, 3)).astype(np.uint8)
    picture = np.full((200, 220), 20.0)
    if kind == "spots":  # a square net, as a single crystal shows
        for i in range(-4, 5):
            for j in range(-4, 5):
                at = 110 + 21.3 * i + 3 * j, 100 + 21.3 * j - 3 * i
                picture += (
                    3000
                    / (1 + i * i + j * j)
                    * np.exp(-0.5 * ((x - at[0]) ** 2 + (y - at[1]) ** 2) / 1.5**2)
                )
    if kind == "streets":  # straight edges and blocks, as a photograph has
        picture += 80 * ((x // 31 + y // 47) % 2) + 30 * ((x - y) // 60 % 2) + 0.2 * y
    return rng.poisson(picture).astype(np.uint16)


@pytest.mark.parametrize(
    ("kind", "says"),
    [
        ("noise", "no rings"),
        ("constant", "constant"),
        ("tiny", "too small"),
        ("colour", "colour"),
        ("spots", "single"),
        ("streets", "no rings"),
    ],
)
def test_what_is_no_ring_image_is_refused(tmp_path, kind: str, says: str) -> None:
    path = tmp_path / "image.png"
    Image.fromarray(bad_image(kind)).save(path)
    with pytest.raises(InputError, match=says):
        measure_image(path)


def test_damaged_files_are_refused(tmp_path) -> None:
    path = tmp_path / "image.png"
    Image.fromarray(draw(PLAIN).astype(np.uint8)).save(path)
    path.write_bytes(path.read_bytes()[:3000])
    with pytest.raises(InputError, match="damaged"):
        measure_image(path)
    path.write_bytes(b"\x89PNG no picture")
    with pytest.raises(InputError, match="not an image"):
        measure_image(path)
    path.write_bytes(b"")
    with pytest.raises(InputError, match="empty"):
        measure_image(path)


def test_a_halo_alone_is_named(tmp_path) -> None:
    scene = replace(PLAIN, radii=(80.0,), heights=(60.0,), sigma=20.0)
    with pytest.raises(InputError, match="halos of amorphous matter"):
        measured(scene)
