"""The image, the curve and the weak lines in the picture: each where its spacing belongs."""

from __future__ import annotations

import base64
import io
import math
import re
import xml.etree.ElementTree as ET
from collections.abc import Callable
from dataclasses import replace
from types import SimpleNamespace
from typing import Any, cast

import numpy as np
import pytest
from numpy.typing import NDArray

from phaseid.crystal.lines import Lines
from phaseid.library import Library
from phaseid.matching.identification import Identification
from phaseid.reports.measuring_picture import STEPS, measurement_picture
from phaseid.reports.picture import Arc, Group, Line, Picture, Shade, Text
from phaseid.reports.picture_axis import axis_for
from phaseid.reports.picture_disc import CENTRE_X, CENTRE_Y, RADIUS, disc, disc_of_two
from phaseid.reports.picture_paper import pdf
from phaseid.reports.picture_pixels import DOTS, png
from phaseid.reports.picture_scene import scene
from phaseid.reports.picture_sticks import BASE, UP_TOP, sticks
from phaseid.reports.picture_svg import Store, svg, svg_file
from phaseid.reports.picture_weak import weak_lines
from phaseid.rings.measuring import Disc, MeasuredRing, Measurement

OnImage = Callable[..., Identification]


def _grey(picture: Picture) -> NDArray[np.float64]:
    from PIL import Image

    with Image.open(io.BytesIO(png(picture))) as image:
        return np.asarray(image.convert("L"), dtype=np.float64)


def _profile(grey: NDArray[np.float64], angle_deg: float) -> NDArray[np.float64]:
    """Darkness along a ray from the centre of the disc, at every unit of the picture."""
    r = np.arange(20.0, RADIUS)
    turn = math.radians(angle_deg)
    columns = np.floor((CENTRE_X + r * math.cos(turn)) * DOTS).astype(int)
    rows = np.floor((CENTRE_Y - r * math.sin(turn)) * DOTS).astype(int)
    return np.stack([r, 255.0 - grey[rows, columns]], axis=1)


def test_the_image_meets_the_calculated_rings(answer: Identification, on_image: OnImage) -> None:
    # d of Al 111 and 220 by a / sqrt(h² + k² + l²): 1/d in the ratio sqrt(3) : sqrt(8)
    shown = on_image(answer)
    picture = disc(scene(shown, shown.hypotheses[0], 0))
    grey = _grey(picture)
    reach = 1.04 * math.sqrt(11) / 4.0495  # of 311, the outermost line: missing
    for hkl2 in (3, 8):
        expected = RADIUS * math.sqrt(hkl2) / 4.0495 / reach
        for angle in (115.0, 217.0, 245.0):
            r, dark = _profile(grey, angle).T
            near = np.abs(r - expected) < 4
            centre = float((r[near] * dark[near]).sum() / dark[near].sum())
            assert dark[near].max() > 150
            assert centre == pytest.approx(expected, abs=0.6)


def test_the_image_keeps_to_its_half(answer: Identification, on_image: OnImage) -> None:
    shown = on_image(answer)
    bare = replace(shown.hypotheses[0], assignments=(), missing=(), unexplained=())
    picture = disc(scene(shown, bare, 0))
    shades = [shape for shape in picture.shapes if isinstance(shape, Shade)]
    assert len(shades) == 1
    assert shades[0].x + shades[0].width == pytest.approx(CENTRE_X)
    assert shades[0].radius <= RADIUS
    only = _grey(replace(picture, shapes=tuple(shades)))
    assert only[:, int(CENTRE_X * DOTS) + 1 :].min() == 255
    assert only[:, : int(CENTRE_X * DOTS)].min() < 100


def test_a_leftover_ring_stands_out_on_the_image(answer: Identification, on_image: OnImage) -> None:
    shown = on_image(answer)
    picture = disc(scene(shown, shown.hypotheses[0], 0))
    group = next(g for g in picture.shapes if isinstance(g, Group) and g.key == "p1r5")
    lines = [part for part in group.shapes if getattr(part, "role", "") == "leftover ink"]
    assert len(lines) == 2  # one on each side of the ring, which stays free
    assert group.touched is not None


def test_two_images_have_a_half_each(answer: Identification, on_image: OnImage) -> None:
    one = on_image(answer)
    best = one.hypotheses[0]
    both = replace(
        best,
        assignments=(*best.assignments, *(replace(a, pattern=1) for a in best.assignments)),
        unexplained=(*best.unexplained, *(replace(u, pattern=1) for u in best.unexplained)),
    )
    two = replace(one, patterns=one.patterns * 2, hypotheses=(both,))
    picture = disc_of_two(scene(two, both, 0), scene(two, both, 1))
    left, right = (shape for shape in picture.shapes if isinstance(shape, Shade))
    assert left.x + left.width == pytest.approx(right.x)
    assert np.array_equal(left.ink, right.ink[:, ::-1])  # the image drawn is symmetric


def test_the_half_is_the_one_that_was_measured(answer: Identification, on_image: OnImage) -> None:
    lopsided = on_image(answer, left_only=True)
    picture = disc(scene(lopsided, lopsided.hypotheses[0], 0))
    shade = next(shape for shape in picture.shapes if isinstance(shape, Shade))
    assert shade.ink.max() == 255
    assert len(np.unique(shade.ink)) <= 16


def test_an_image_in_svg_is_held_once(answer: Identification, on_image: OnImage) -> None:
    shown = on_image(answer)
    picture = disc(scene(shown, shown.hypotheses[0], 0))
    store = Store()
    pages = svg(picture, store=store) + svg(picture, store=store)
    assert "data:" not in pages
    assert pages.count('href="#image-1"') == 2
    cuts = re.findall(r'clipPath id="([^"]+)"', pages)
    assert len(set(cuts)) == 2
    assert store.definitions().count("<image ") == 1
    root = ET.fromstring(svg_file(picture).encode())
    image = next(root.iter("{http://www.w3.org/2000/svg}image"))
    from PIL import Image

    kind, data = image.attrib["href"].split(",", 1)
    assert kind == "data:image/png;base64"
    with Image.open(io.BytesIO(base64.b64decode(data))) as held:
        ink = np.asarray(held.convert("RGBA"))[..., 3]
    shade = next(shape for shape in picture.shapes if isinstance(shape, Shade))
    assert np.array_equal(ink, shade.ink)
    assert len(data) < 120_000


def test_an_image_reaches_a_pdf(answer: Identification, on_image: OnImage) -> None:
    shown = on_image(answer)
    picture = disc(scene(shown, shown.hypotheses[0], 0))
    assert b"/Subtype /Image" in pdf(picture)
    assert b"/Subtype /Image" not in pdf(disc(scene(answer, answer.hypotheses[0], 0)))


def _scanned(answer: Identification) -> Identification:
    """X-ray angles with a peak at each of the answer's rings, heights as their intensities."""
    pattern = answer.patterns[0]
    position = np.degrees(2 * np.arcsin(1.5406 / 2 / pattern.d_A))  # Bragg
    angle = np.arange(20.0, 80.0, 0.02)
    counts = sum(
        height * np.exp(-(((angle - at) / 0.15) ** 2))
        for at, height in zip(position[:4], pattern.intensity[:4], strict=True)
    )
    probe = replace(pattern.probe, kind="x-ray", wavelength_A=1.5406, geometry="bragg-brentano")
    rings = replace(
        pattern,
        probe=probe,
        position_column="two_theta_deg",
        position=position,
        curve=np.stack([angle, counts], axis=1),
    )
    return replace(answer, patterns=(rings,))


def _outline(picture: Picture) -> NDArray[np.float64]:
    return np.array(
        next(s.points for s in picture.shapes if isinstance(s, Line) and s.role == "soft")
    )


def test_the_curve_peaks_where_the_sticks_stand(answer: Identification) -> None:
    scan = _scanned(answer)
    one = scene(scan, scan.hypotheses[0], 0)
    picture = sticks(one, axis_for(one.pattern, None))
    x, y = _outline(picture).T
    height = (BASE - y) / (BASE - UP_TOP)
    for key, share in (("p1r1", 0.60), ("p1r2", 1.0), ("p1r3", 0.45), ("p1r4", 0.30)):
        group = next(g for g in picture.shapes if isinstance(g, Group) and g.key == key)
        stick = next(part for part in group.shapes if isinstance(part, Line))
        near = np.abs(x - stick.points[0][0]) < 3
        assert height[near].max() == pytest.approx(share, abs=0.02)
        assert x[near][np.argmax(height[near])] == pytest.approx(stick.points[0][0], abs=0.8)


def test_the_curve_follows_a_calibration(answer: Identification) -> None:
    scan = _scanned(answer)
    pattern = scan.patterns[0]
    shifted = replace(
        pattern,
        position=pattern.position + 0.2,  # a zero shift that a calibration took off d
        curve=cast(NDArray[np.float64], pattern.curve) + np.array([0.2, 0.0]),
    )
    curves = [
        scene(replace(scan, patterns=(p,)), scan.hypotheses[0], 0).curve for p in (pattern, shifted)
    ]
    peaks = [float(c[np.argmax(c[:, 1]), 0]) for c in curves if c is not None]
    assert peaks[1] == pytest.approx(peaks[0], rel=2e-4)


# multiplicities of a face-centred cubic metal's lines, International Tables A (from memory)
_FCC = {(1, 1, 1): 8, (2, 0, 0): 6, (2, 2, 0): 12, (3, 1, 1): 24, (2, 2, 2): 8}


class _Shelf:
    """A library of one phase: a point scatterer on a face-centred lattice, |F|² given."""

    def __init__(self, f2: dict[tuple[int, int, int], float]) -> None:
        hkl = np.array(list(_FCC))
        squares = np.array([f2.get(one, 1.0) for one in _FCC])
        self._lines = Lines(
            d_A=4.0495 / np.sqrt((hkl**2).sum(axis=1)),
            hkl=hkl,
            multiplicity=np.array(list(_FCC.values())),
            f2_xray=squares,
            f2_electron=squares,
            f2_neutron=squares,
            volume_A3=4.0495**3,
            complete_to_A=0.5,
            floor=0.0,
        )

    def lines(self, phase_id: str) -> Lines:
        assert phase_id == "Al-aaaa"
        return self._lines


def _alone(answer: Identification, **more: Any) -> Identification:
    best = answer.hypotheses[0]
    part = replace(best.phases[0], fibre_axis=None, **more)
    own = tuple(a for a in best.assignments if a.phase == 0)
    left = tuple(SimpleNamespace(pattern=0, ring=ring, hint="") for ring in (0, 4))
    alone = replace(best, phases=(part,), assignments=own, missing=(), unexplained=cast(Any, left))
    return replace(answer, hypotheses=(alone,))


def test_weak_lines_are_those_nothing_else_tells_of(answer: Identification) -> None:
    alone = _alone(answer)
    pattern = replace(alone.patterns[0], d_A=np.append(alone.patterns[0].d_A[:4], 1.15))
    shelf = cast(Library, _Shelf({(2, 2, 2): 0.1}))
    found = weak_lines(alone.hypotheses[0], 0, pattern, shelf)
    assert {line.hkl for line in found} == {(3, 1, 1), (2, 2, 2)}
    # electrons along the ring: m |F|² d² (Vainshtein 1964), 111 the strongest
    expected = 100 * (24 * 3 / 11) / 8
    assert found[0].hkl == (3, 1, 1)
    assert found[0].relative_intensity == pytest.approx(expected, rel=1e-6)
    assert found[1].relative_intensity == pytest.approx(0.1 * 100 * (3 / 12), rel=1e-6)


def test_weak_lines_end_with_the_pattern_and_with_texture(answer: Identification) -> None:
    shelf = cast(Library, _Shelf({}))
    alone = _alone(answer)
    assert weak_lines(alone.hypotheses[0], 0, alone.patterns[0], shelf) == ()
    wide = replace(alone.patterns[0], d_A=np.append(alone.patterns[0].d_A[:4], 1.15))
    film = answer.hypotheses[0].phases[0]
    textured = replace(alone.hypotheses[0], phases=(replace(film, fibre_axis=(1, 1, 1)),))
    assert weak_lines(textured, 0, wide, shelf) == ()


def test_weak_lines_are_drawn_faintly_and_named(answer: Identification) -> None:
    alone = _alone(answer)
    pattern = replace(alone.patterns[0], d_A=np.append(alone.patterns[0].d_A[:4], 1.15))
    alone = replace(alone, patterns=(pattern,))
    shelf = cast(Library, _Shelf({}))
    one = scene(alone, alone.hypotheses[0], 0, shelf)
    for picture in (disc(one), sticks(one, axis_for(pattern, None))):
        faint = [
            shape
            for shape in picture.shapes
            if isinstance(shape, Group) and shape.shapes[0].role == "weak phase1"
        ]
        assert len(faint) == 2
        assert all("Too weak to be seen" in group.title for group in faint)
        text = svg(picture, hits=True)
        assert "Al 3 1 1, calculated 1.2210 Å" in text
        assert 'data-key=""' not in text
    words = "".join(ET.fromstring(svg_file(disc(one)).encode()).itertext())
    assert "calculated, too weak to be seen here" in words


def test_a_phase_without_a_ring_is_drawn_low(answer: Identification) -> None:
    alone = _alone(answer)
    shelf = cast(Library, _Shelf({}))
    pattern = replace(alone.patterns[0], d_A=np.append(alone.patterns[0].d_A[:4], 1.15))
    best = replace(alone.hypotheses[0], assignments=())
    one = scene(replace(alone, patterns=(pattern,)), best, 0, shelf)
    assert {line.kind for line in one.calculated} == {"weak"}
    assert max(line.height for line in one.calculated) == pytest.approx(10.0)


def test_two_patterns_of_one_probe_are_told_apart_by_title(answer: Identification) -> None:
    best, pattern = answer.hypotheses[0], answer.patterns[0]
    two = replace(answer, patterns=(pattern, replace(pattern, title="Foil B")))
    words = "".join(
        ET.fromstring(
            svg_file(disc_of_two(scene(two, best, 0), scene(two, best, 1))).encode()
        ).itertext()
    )
    assert "Foil A" in words
    assert "Foil B" in words


def _measurement(with_disc: bool = True) -> Measurement:
    """Two peaks over a falling background; on the plate, two rings at 40 and 80 px."""
    x = np.arange(10.0, 100.0, 0.01)
    background = 20.0 + 200.0 * np.exp(-x / 10)
    mean = background + 500 * np.exp(-(((x - 40) / 2) ** 2)) + 90 * np.exp(-(((x - 80) / 2) ** 2))
    median = mean if not with_disc else mean + 0.5
    steps = np.arange(201) - 100.0
    radius = np.hypot(*np.meshgrid(steps, steps))
    grey = 255 * (np.exp(-(((radius - 40) / 2) ** 2)) + np.exp(-(((radius - 80) / 2) ** 2)))
    image = Disc(np.clip(grey, 0, 255).astype(np.uint8), np.ones((201, 201), dtype=bool), 1.0)
    rings = tuple(MeasuredRing(at, 0.01, 3.0, 0.1, 100.0, 1.0) for at in (40.0, 80.0))
    return Measurement(
        source="some/plate.tif",
        column="radius_px" if with_disc else "two_theta_deg",
        rings=rings,
        curve=np.stack([x, mean, median, background], axis=1),
        limit=1.0,
        disc=image if with_disc else None,
    )


def test_rings_found_are_drawn_on_the_rings_of_the_plate() -> None:
    picture = measurement_picture(_measurement())
    plain = replace(picture, shapes=tuple(s for s in picture.shapes if not isinstance(s, Group)))
    arcs = [s.shapes[0] for s in picture.shapes if isinstance(s, Group)][:2]
    grey = _grey(plain)
    for arc in arcs:
        assert isinstance(arc, Arc)
        for turn in (-50.0, 25.0, 50.0):
            x = arc.x + arc.radius * math.cos(math.radians(turn))
            y = arc.y - arc.radius * math.sin(math.radians(turn))
            assert grey[round(y * DOTS), round(x * DOTS)] < 120
            assert grey[round(y * DOTS), round((x - 24) * DOTS)] > 230
    assert arcs[1].radius == pytest.approx(2 * arcs[0].radius)


def _heights(picture: Picture) -> dict[float, float]:
    """Where the numbers beside the axis of counts stand."""
    return {
        float(shape.words): shape.y - 4
        for shape in picture.shapes
        if isinstance(shape, Text) and shape.anchor == "end" and shape.words.isdigit()
    }


def test_counts_stand_on_a_logarithmic_axis() -> None:
    picture = measurement_picture(_measurement(with_disc=False))
    heights = _heights(picture)
    assert heights[20.0] - heights[200.0] == pytest.approx(heights[50.0] - heights[500.0])
    assert heights[20.0] - heights[50.0] == pytest.approx(heights[200.0] - heights[500.0])
    words = [shape.words for shape in picture.shapes if isinstance(shape, Text)]
    assert {"plate.tif", "2θ in degrees", "measured", "background"} <= set(words)
    assert "median along the ring" not in words
    numbers = [s.shapes[1] for s in picture.shapes if isinstance(s, Group) and len(s.shapes) == 2]
    assert [n.words for n in numbers if isinstance(n, Text)] == ["1", "2"]


def test_a_long_profile_is_drawn_in_few_points_and_keeps_its_peaks() -> None:
    found = _measurement(with_disc=False)
    picture = measurement_picture(found)
    lines = [s for s in picture.shapes if isinstance(s, Line) and s.role == "ink"]
    mean = max(lines, key=lambda line: len(line.points))
    assert len(found.curve) > 8000
    assert 2 * STEPS + 2 >= len(mean.points) > STEPS
    heights = _heights(picture)
    per_fold = (heights[20.0] - heights[200.0]) / math.log(10)
    highest = heights[200.0] - per_fold * math.log(found.curve[:, 1].max() / 200.0)
    assert min(y for _, y in mean.points) == pytest.approx(highest, abs=0.01)


def test_a_curve_of_nothing_is_drawn_too() -> None:
    empty = replace(_measurement(with_disc=False), rings=())
    curve = empty.curve.copy()
    curve[:, 1:] = 0.0
    curve[3, 1] = np.nan
    assert svg_file(measurement_picture(replace(empty, curve=curve))).startswith("<?xml")
