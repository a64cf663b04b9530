"""The picture: rings where they belong, told apart without colour, whole in every format."""

from __future__ import annotations

import errno
import io
import math
import os
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from collections.abc import Callable, Iterator
from dataclasses import replace
from itertools import combinations
from pathlib import Path

import numpy as np
import pypdfium2
import pytest
from numpy.typing import NDArray

from phaseid.errors import InputError
from phaseid.matching.identification import Identification
from phaseid.reports import picture_faces, picture_paper
from phaseid.reports.picture import Arc, Line, Picture, Room, Text, rectangle, tick_text, ticks
from phaseid.reports.picture_axis import axis_for, axis_name, common_axis
from phaseid.reports.picture_disc import RADIUS, disc, disc_of_two
from phaseid.reports.picture_faces import runs
from phaseid.reports.picture_file import write_picture
from phaseid.reports.picture_paper import pdf
from phaseid.reports.picture_pixels import DOTS, png
from phaseid.reports.picture_scene import scene
from phaseid.reports.picture_sheet import probability_parts, sheet
from phaseid.reports.picture_sticks import sticks
from phaseid.reports.picture_style import DARK, DASHES, LIGHT, MISSING_DASH, Palette
from phaseid.reports.picture_svg import svg, svg_file
from phaseid.rings import rings_from_values

SVG = "{http://www.w3.org/2000/svg}"


def _tree(picture: Picture) -> ET.Element:
    return ET.fromstring(svg_file(picture).encode())


def _marks(picture: Picture) -> dict[str, list[ET.Element]]:
    """The groups of a picture by the ring or line they show."""
    found: dict[str, list[ET.Element]] = {}
    for group in _tree(picture).iter(f"{SVG}g"):
        found.setdefault(group.attrib["data-key"], []).append(group)
    return found


def _radius(group: ET.Element) -> float:
    path = group.find(f"{SVG}path")
    assert path is not None
    return float(re.search(r"A([\d.]+) ", path.attrib["d"])[1])  # type: ignore[index]


def _roles(groups: list[ET.Element]) -> set[str]:
    return {part.attrib.get("class", "") for group in groups for part in group}


def test_radii_of_a_cubic_metal_stand_as_the_square_roots_of_h2_k2_l2(
    answer: Identification,
) -> None:
    # 111, 200, 220 of a cubic crystal: 1/d² as 3 : 4 : 8, the quadratic form of its cell
    marks = _marks(disc(scene(answer, answer.hypotheses[0], 0)))
    radii = [_radius(marks[key][0]) for key in ("p1r2", "p1r3", "p1r4")]
    assert radii[1] / radii[0] == pytest.approx(math.sqrt(4 / 3), abs=2e-3)
    assert radii[2] / radii[0] == pytest.approx(math.sqrt(8 / 3), abs=2e-3)
    assert max(radii) < RADIUS


def test_measured_rings_meet_their_lines_after_the_scale(answer: Identification) -> None:
    marks = _marks(disc(scene(answer, answer.hypotheses[0], 0)))
    for key in ("p1r1", "p1r2", "p1r3", "p1r4"):
        calculated, measured = (_radius(group) for group in marks[key])
        assert measured == pytest.approx(calculated, abs=0.2)
    off = replace(answer.hypotheses[0], scale=())
    marks = _marks(disc(scene(answer, off, 0)))
    calculated, measured = (_radius(group) for group in marks["p1r4"])
    assert calculated / measured == pytest.approx(1.003, abs=1e-3)  # as the fixture was made


def test_leftover_and_missing_look_like_nothing_else(answer: Identification) -> None:
    marks = _marks(disc(scene(answer, answer.hypotheses[0], 0)))
    assert {"leftover ink", "hollow ground"} <= _roles(marks["p1r5"])
    assert "missing phase1" in _roles(marks["p1m1"])
    dashed = [p.attrib["stroke-dasharray"] for p in marks["p1m1"][0] if p.tag == f"{SVG}path"]
    assert dashed == ["1.5 4.5"]
    words = "".join(_tree(disc(scene(answer, answer.hypotheses[0], 0))).itertext())
    assert "5 ?" in words
    assert "A 311 ×" in words


def test_a_stronger_ring_is_drawn_heavier(answer: Identification) -> None:
    marks = _marks(disc(scene(answer, answer.hypotheses[0], 0)))
    widths = [float(marks[key][1][1].attrib["stroke-width"]) for key in ("p1r2", "p1r3", "p1r4")]
    assert widths == sorted(widths, reverse=True)
    assert len(set(widths)) == 3


def test_a_ring_of_two_phases_shows_both(answer: Identification) -> None:
    best = answer.hypotheses[0]
    shared = replace(best.assignments[0], phase=0)
    both = replace(best, assignments=(*best.assignments, shared))
    groups = _marks(disc(scene(answer, both, 0)))["p1r1"]
    assert {"ring phase1", "ring phase2"} <= _roles(groups[-1:])


def test_two_probes_share_a_disc(answer: Identification) -> None:
    pattern = answer.patterns[0]
    other = replace(pattern, probe=replace(pattern.probe, label="x-ray Cu Kα"))
    best = answer.hypotheses[0]
    second = tuple(replace(a, pattern=1) for a in best.assignments)
    left = tuple(replace(u, pattern=1) for u in best.unexplained)
    both = replace(
        best,
        assignments=(*best.assignments, *second),
        unexplained=(*best.unexplained, *left),
        scale=(*best.scale, replace(best.scale[0], pattern=1)),
    )
    two = replace(answer, patterns=(pattern, other), hypotheses=(both,))
    picture = disc_of_two(scene(two, both, 0), scene(two, both, 1))
    marks = _marks(picture)
    assert _radius(marks["p1r2"][0]) == _radius(marks["p2r2"][0])
    words = "".join(_tree(sheet(two)).itertext())
    assert "electron 200 kV" in words
    assert "x-ray Cu Kα" in words


def test_three_patterns_have_a_disc_each(answer: Identification) -> None:
    pattern, best = answer.patterns[0], answer.hypotheses[0]
    three = replace(
        answer,
        patterns=(pattern,) * 3,
        hypotheses=(
            replace(
                best,
                assignments=tuple(
                    replace(a, pattern=number) for number in range(3) for a in best.assignments
                ),
                unexplained=tuple(
                    replace(u, pattern=number) for number in range(3) for u in best.unexplained
                ),
            ),
        ),
    )
    picture = sheet(three)
    words = [text.text for text in _tree(picture).iter(f"{SVG}text")]
    assert words.count("measured") == words.count("calculated") == 3
    assert picture.height > 3 * disc(scene(three, three.hypotheses[0], 0)).height


@pytest.mark.parametrize(
    ("name", "value"),
    # d = 2.338 Å with Cu Kα1 (λ = 1.5406 Å, from memory): 2θ = 2 asin(λ/2d) = 38.47°
    [("d", 2.338), ("1/d", 4.277), ("q", 2.687), ("two-theta", 38.47)],
)
def test_the_axes_mean_what_they_say(name: str, value: float) -> None:
    rings = rings_from_values([2.338], probe="x-ray 1.5406 A", scale_uncertainty=0.001)
    assert axis_for(rings, axis_name(name)).value(2.338) == pytest.approx(value, rel=2e-4)


@pytest.mark.parametrize(
    ("column", "value", "usual"),
    [("two_theta_deg", 38.5, "two-theta"), ("q_1/A", 2.7, "q"), ("d_A", 2.34, "d")],
)
def test_the_axis_follows_the_measurement(column: str, value: float, usual: str) -> None:
    rings = rings_from_values([value], column=column, probe="x-ray Cu Ka1", scale_uncertainty=0.001)
    assert axis_for(rings, None).name == usual


def test_patterns_of_one_specimen_share_an_axis() -> None:
    angles, spacings = (
        rings_from_values([38.5], column=column, probe=probe, scale_uncertainty=0.001)
        for column, probe in (("two_theta_deg", "x-ray Cu Ka1"), ("d_A", "electron 200 kV"))
    )
    assert common_axis([angles, spacings], None) == "1/d"
    assert common_axis([angles, spacings], "q") == "q"
    assert axis_for(angles, common_axis([angles, angles], None)).name == "two-theta"


def test_an_axis_that_is_none_is_refused() -> None:
    with pytest.raises(InputError, match="two-theta"):
        axis_name("radius")


def test_sticks_stand_as_high_as_they_are_strong(answer: Identification) -> None:
    one = scene(answer, answer.hypotheses[0], 0)
    marks = _marks(sticks(one, axis_for(one.pattern, None)))
    heights = []
    for key in ("p1r2", "p1r3"):
        up = marks[key][1].find(f"{SVG}polyline")
        assert up is not None
        ends = [float(point.split(",")[1]) for point in up.attrib["points"].split()]
        heights.append(abs(ends[0] - ends[-1]))
    assert heights[1] / heights[0] == pytest.approx(0.45, abs=0.01)  # intensities 45 and 100


def test_a_far_deviation_is_written_out(answer: Identification) -> None:
    best = answer.hypotheses[0]
    far = replace(best.assignments[0], residual_sigma=-7.4)
    wild = replace(best, assignments=(far, *best.assignments[1:]))
    one = scene(answer, wild, 0)
    words = [e.text for e in _tree(sticks(one, axis_for(one.pattern, None))).iter(f"{SVG}text")]
    assert "-7.4" in words
    assert any("1.0031 ± 0.0007" in (text or "") for text in words)


def test_without_intensities_the_picture_says_so(answer: Identification) -> None:
    pattern = answer.patterns[0]
    nothing = np.full(len(pattern), np.nan)
    plain = replace(pattern, intensity=nothing, grades=("",) * len(pattern))
    words = "".join(_tree(sheet(replace(answer, patterns=(plain,)))).itertext())
    assert "no intensities given" in words


def test_the_picture_tells_cells_shares_and_those_alike(answer: Identification) -> None:
    words = " ".join(text.text or "" for text in _tree(sheet(answer)).iter(f"{SVG}text"))
    assert "refined cell a = 4.0501 ± 0.0020 Å; 80 ± 5 % by weight" in words
    assert "fibre axis [1 1 1]" in words
    assert "cannot tell it from another phase" in words


def test_a_bar_of_many_answers_names_the_first(answer: Identification) -> None:
    best = answer.hypotheses[0]
    many = tuple(replace(best, rank=rank, probability=0.94 / 200) for rank in range(1, 201))
    parts = probability_parts(replace(answer, hypotheses=many))
    assert len(parts) == 10
    assert parts[-2] == ("other answers from this library", pytest.approx(0.97 - 8 * 0.0047))


def test_no_answer_is_drawn_too(answer: Identification) -> None:
    none = replace(answer, verdict="no-match", hypotheses=(), unlisted_probability=1.0)
    words = "".join(_tree(sheet(none)).itertext())
    assert "no line matches" in words
    assert words.count(" ?") >= len(answer.patterns[0])


def test_the_probabilities_of_the_bar_are_all_there_is(answer: Identification) -> None:
    parts = probability_parts(answer)
    assert sum(share for _, share in parts) == pytest.approx(1.0, abs=1e-9)
    assert parts[-1] == ("something not in this library", 0.03)
    assert parts[-2][1] == pytest.approx(0.01)


@pytest.mark.parametrize("suffix", [".svg", ".png", ".pdf"])
def test_a_picture_is_written_whole(answer: Identification, tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"foil{suffix.upper()}"
    write_picture(answer, path)
    data = path.read_bytes()
    assert [*tmp_path.iterdir()] == [path]
    if suffix == ".svg":
        assert ET.fromstring(data).tag == f"{SVG}svg"
    elif suffix == ".pdf":
        assert data.startswith(b"%PDF-")
        assert data.rstrip().endswith(b"%%EOF")
    else:
        from PIL import Image

        with Image.open(io.BytesIO(data)) as image:
            image.load()
            assert image.width == pytest.approx(2 * sheet(answer).width, abs=2)
            assert image.info["dpi"] == pytest.approx((200, 200), abs=0.1)
            assert len(image.convert("RGB").getcolors(1 << 24) or []) > 10


def _grey(picture: Picture) -> NDArray[np.float64]:
    from PIL import Image

    with Image.open(io.BytesIO(png(picture))) as image:
        return np.asarray(image.convert("L"), dtype=np.float64)


def _ink(picture: Picture) -> float:
    """Area (square units) that black shapes of a PNG cover."""
    return float((255.0 - _grey(picture)).sum()) / 255.0 / DOTS**2


# areas by Euclid: a stroke is length × width, a half ring π r × width
def test_pixels_cover_what_the_shapes_do() -> None:
    black = 255.0 / (255.0 - float(_grey(_one(rectangle(10, 10, 5, 5, "ink")))[24, 24]))
    for shape, area in (
        (Line(((20.0, 30.0), (80.0, 30.0)), "ink", 3.0), 180.0),
        (Line(((20.0, 30.0), (20.0, 80.0)), "ink", 1.0), 50.0),
        (Line(((10.0, 10.0), (70.0, 90.0)), "ink", 2.0), 200.0),
        (Arc(50.0, 50.0, 40.0, 90.0, 270.0, "ink", 2.0), 80.0 * math.pi),
    ):
        assert black * _ink(_one(shape)) == pytest.approx(area, rel=0.06)
    dotted = Line(((10.0, 50.0), (90.0, 50.0)), "missing ink", 2.0)
    share = MISSING_DASH[0] / sum(MISSING_DASH)
    assert black * _ink(_one(dotted)) == pytest.approx(160.0 * share, rel=0.1)


def _one(shape: Line | Arc) -> Picture:
    return Picture(100.0, 100.0, "a test", (shape,))


def test_a_half_ring_lies_on_its_side() -> None:
    left = _grey(_one(Arc(50.0, 50.0, 40.0, 90.0, 270.0, "ink", 4.0))) < 128
    rows, columns = np.nonzero(left)
    assert columns.max() <= 50 * DOTS + 1
    assert columns.min() == pytest.approx((50 - 42) * DOTS, abs=1)
    assert (rows.min(), rows.max()) == pytest.approx((8 * DOTS, 92 * DOTS), abs=1)


@pytest.mark.parametrize("suffix", [".png", ".pdf"])
def test_no_picture_loads_matplotlib(suffix: str) -> None:
    code = (
        "import sys; from phaseid.reports.picture import Picture, Text;"
        "from phaseid.reports.picture_file import drawn;"
        f"drawn(Picture(50.0, 50.0, 'a', (Text(5, 20, 'Å'),)), '{suffix}');"
        "sys.exit('matplotlib' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


@pytest.fixture
def other_faces(monkeypatch: pytest.MonkeyPatch) -> Iterator[pytest.MonkeyPatch]:
    """Faces may be changed; nothing of that is remembered."""
    for cached in (picture_faces._face, picture_faces._found):
        cached.cache_clear()
    yield monkeypatch
    for cached in (picture_faces._face, picture_faces._found):
        cached.cache_clear()


def _set_in(words: str, bold: bool = False) -> list[tuple[str, str]]:
    return [(file.name, said) for file, said in runs(words, bold, lambda _file: True)]


def test_the_face_has_the_letters_of_the_trade() -> None:
    letters = "Åθλσαβγπ²³±×°µ…–’−₂̄"
    assert _set_in(letters) == [("DejaVuSans.ttf", letters)]
    assert _set_in(letters, bold=True) == [("DejaVuSans-Bold.ttf", letters)]


def test_a_picture_is_drawn_without_that_face(other_faces: pytest.MonkeyPatch) -> None:
    other_faces.setattr(picture_faces, "_FAMILY", ("Vera.ttf",))
    assert _set_in("d in Å") == [("Vera.ttf", "d in Å")]
    assert _grey(Picture(80.0, 30.0, "a test", (Text(5.0, 20.0, "d in Å"),))).min() < 100


def test_without_any_face_an_error_says_so(other_faces: pytest.MonkeyPatch) -> None:
    other_faces.setattr(picture_faces, "_FAMILY", ())
    other_faces.setattr(picture_faces, "SYSTEM_FACES", ())
    with pytest.raises(InputError, match="no face"):
        _set_in("d")


def test_a_damaged_face_is_passed_over(tmp_path: Path) -> None:
    broken = tmp_path / "broken.ttf"
    broken.write_bytes(b"\0\1\0\0" + bytes(range(256)))
    assert not picture_paper._embeddable(broken)


# U+2323 smile is in STIX General and not in DejaVu Sans; no face of either has U+9244, iron
def test_letters_the_face_lacks_come_from_another(other_faces: pytest.MonkeyPatch) -> None:
    other_faces.setattr(picture_faces, "SYSTEM_FACES", ("STIXGeneral.ttf",))
    assert _set_in("a ⌣ b") == [
        ("DejaVuSans.ttf", "a "),
        ("STIXGeneral.ttf", "⌣"),
        ("DejaVuSans.ttf", " b"),
    ]
    assert "a ⌣ b" in _pages(pdf(Picture(90.0, 30.0, "a", (Text(5.0, 20.0, "a ⌣ b"),))))


def test_letters_no_face_has_are_told_by_their_code(other_faces: pytest.MonkeyPatch) -> None:
    other_faces.setattr(picture_faces, "SYSTEM_FACES", ("no such file.ttf",))
    assert _set_in("\u9244 film") == [("DejaVuSans.ttf", "[U+9244] film")]
    assert _set_in("\u9244\u9271 film") == [("DejaVuSans.ttf", "[U+9244…] film")]


# Unicode Standard Annex #15: U+339C "square mm" is compatible with "mm", e + U+0301 composes to é
def test_letters_are_taken_for_what_they_mean(other_faces: pytest.MonkeyPatch) -> None:
    other_faces.setattr(picture_faces, "SYSTEM_FACES", ())
    assert _set_in("25 \u339c, e\u0301") == [("DejaVuSans.ttf", "25 mm, \u00e9")]


def _pages(data: bytes) -> str:
    """The words of a PDF as PDFium finds them."""
    with pypdfium2.PdfDocument(data) as document:
        return str(document[0].get_textpage().get_text_range())


def test_words_of_a_pdf_are_found(answer: Identification) -> None:
    words = _pages(pdf(sheet(answer)))
    for said in (
        "refined cell a = 4.0501 ± 0.0020 Å; 80 ± 5 % by weight",
        "A ring match is evidence",
        "A 311 ×",
    ):
        assert words.count(said) == 1


def test_a_pdf_holds_its_faces_and_no_date(answer: Identification) -> None:
    data = pdf(sheet(answer))
    with pypdfium2.PdfDocument(data) as document:
        told = document.get_metadata_dict(skip_empty=True)
    assert set(told) == {"Title", "Creator", "Producer"}
    assert told["Title"] == sheet(answer).label
    faces = re.findall(rb"/BaseFont /(\S+)", data)
    assert sorted(faces) == [b"AAAAAA+DejaVuSans", b"AAAAAA+DejaVuSans-Bold"]
    assert len(re.findall(rb"/FontFile2 ", data)) == len(faces)


# another rasteriser, PDFium, draws the PDF as Pillow draws the PNG
def test_pdf_and_png_show_the_same(
    answer: Identification, on_image: Callable[..., Identification]
) -> None:
    for picture in (sheet(answer), sheet(on_image(answer))):
        with pypdfium2.PdfDocument(pdf(picture)) as document:
            shown = document[0].render(scale=200 / 72).to_pil().convert("L")
        drawn = _grey(picture)
        seen = np.asarray(shown, dtype=np.float64)[: drawn.shape[0], : drawn.shape[1]]
        assert np.corrcoef(_blurred(seen), _blurred(drawn))[0, 1] > 0.98
        assert seen.mean() == pytest.approx(drawn.mean(), abs=0.5)


def _blurred(grey: NDArray[np.float64]) -> NDArray[np.float64]:
    """Means of squares of 16 × 16 dots, wider than where a dash may begin."""
    high, wide = (size // 16 for size in grey.shape)
    squares = grey[: 16 * high, : 16 * wide].reshape(high, 16, wide, 16)
    return np.asarray(squares.mean(axis=(1, 3)).ravel())


def test_a_picture_is_the_same_each_time(answer: Identification, tmp_path: Path) -> None:
    for suffix in (".svg", ".pdf"):
        paths = [tmp_path / f"{name}{suffix}" for name in "ab"]
        for path in paths:
            write_picture(answer, path)
        assert paths[0].read_bytes() == paths[1].read_bytes()


@pytest.mark.parametrize("name", ["foil.jpg", "foil", "foil.svg.gz"])
def test_another_suffix_is_refused(answer: Identification, tmp_path: Path, name: str) -> None:
    with pytest.raises(InputError, match=r"\.png, \.svg or \.pdf"):
        write_picture(answer, tmp_path / name)


@pytest.mark.parametrize(
    ("name", "said"),
    [("file/a.svg", "no such folder"), ("b.svg", "is a folder"), (f"{'c' * 300}.svg", "too long")],
)
def test_a_place_that_cannot_be_written_is_told(
    answer: Identification, tmp_path: Path, name: str, said: str
) -> None:
    (tmp_path / "file").write_text("x")
    (tmp_path / "b.svg").mkdir()
    with pytest.raises(InputError, match=said):
        write_picture(answer, tmp_path / name)


def test_an_old_picture_survives_a_full_disk(
    answer: Identification, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "foil.svg"
    path.write_text("old")

    def full(*_args: object) -> int:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    with monkeypatch.context() as patch:
        patch.setattr(Path, "write_bytes", full)
        with pytest.raises(InputError, match="no space"):
            write_picture(answer, path)
    assert path.read_text() == "old"
    assert [*tmp_path.iterdir()] == [path]


def test_markup_and_dollars_in_names_are_text(answer: Identification, tmp_path: Path) -> None:
    part = answer.hypotheses[0].phases[0]
    evil = replace(part.phase, name='</svg><script>x</script>" $\\frac{1}$ & \x1b')
    best = replace(answer.hypotheses[0], phases=(replace(part, phase=evil),))
    best = replace(best, assignments=best.assignments[1:2], missing=())
    odd = replace(answer, hypotheses=(best,))
    tree = _tree(sheet(odd))
    assert not [e for e in tree.iter() if e.tag.endswith("script")]
    assert "</svg><script>x</script>" in "".join(tree.itertext())
    write_picture(odd, tmp_path / "odd.png")


# How well colours are told apart: contrast by W3C, WCAG 2.1, "relative luminance" (3:1 for
# graphics, 4.5:1 for words); dichromats by Viénot, Brettel & Mollon (1999), Color Res. Appl. 24,
# 243 (matrices from memory); differences in CIELAB, D65 (about 2.3 is just noticeable, common
# practice).
_TO_LMS = np.array(
    [[17.8824, 43.5161, 4.11935], [3.45565, 27.1554, 3.86714], [0.0299566, 0.184309, 1.46709]]
)
_EYES = {
    "usual": np.eye(3),
    "protanope": np.array([[0, 2.02344, -2.52581], [0, 1, 0], [0, 0, 1]]),
    "deuteranope": np.array([[1, 0, 0], [0.494207, 0, 1.24827], [0, 0, 1]]),
}
_TO_XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])


def _linear(colour: str) -> NDArray[np.float64]:
    value = np.array([int(colour[k : k + 2], 16) for k in (1, 3, 5)]) / 255
    return np.where(value <= 0.04045, value / 12.92, ((value + 0.055) / 1.055) ** 2.4)


def _contrast(one: str, other: str) -> float:
    high, low = sorted((float(_TO_XYZ[1] @ _linear(c)) for c in (one, other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def _lab(colour: str, eye: NDArray[np.float64]) -> NDArray[np.float64]:
    seen = np.clip(np.linalg.inv(_TO_LMS) @ eye @ _TO_LMS @ _linear(colour), 0, 1)
    t = (_TO_XYZ @ seen) / (_TO_XYZ @ np.ones(3))
    f = np.where(t > 0.008856, np.cbrt(t), 7.787 * t + 16 / 116)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
def test_words_and_lines_stand_out_from_the_ground(palette: Palette) -> None:
    for colour in (palette.ink, palette.soft, *palette.phases):
        assert _contrast(colour, palette.ground) >= 4.5
    for colour in (palette.ink, *palette.phases):  # a row that is lit
        assert _contrast(colour, palette.faint) >= 3.0


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize("eye", _EYES)
def test_phases_are_told_apart(palette: Palette, eye: str) -> None:
    seen = [_lab(colour, _EYES[eye]) for colour in palette.phases]
    assert min(float(np.linalg.norm(a - b)) for a, b in combinations(seen, 2)) > 10


def test_phases_are_told_apart_without_colour() -> None:
    assert len({*DASHES, MISSING_DASH}) == len(DASHES) + 1


def test_words_keep_clear_of_each_other() -> None:
    room = Room([])
    first = Text(10, 20, "A 111", size=11)
    assert room.claim(first)
    assert not room.claim(replace(first, x=20))
    moved = room.first_free([replace(first, x=20), replace(first, y=60)])
    assert moved is not None
    assert moved.y == 60


@pytest.mark.parametrize(
    ("low", "high", "about", "expected"),
    [(0.0, 10.4, 6, ["0", "2", "4", "6", "8", "10"]), (0.81, 1.02, 3, ["0.9", "1.0"])],
)
def test_ticks_are_round(low: float, high: float, about: int, expected: list[str]) -> None:
    values = ticks(low, high, about)
    assert [tick_text(value, values) for value in values] == expected


def test_an_inline_picture_says_what_it_shows(answer: Identification) -> None:
    picture = disc(scene(answer, answer.hypotheses[0], 0))
    root = ET.fromstring(svg(picture))
    assert root.attrib["role"] == "img"
    assert "5 rings, 1 unexplained" in root.attrib["aria-label"]
    titles = {title.text for title in root.iter(f"{SVG}title")}
    assert "Ring 5, measured 1.9000 Å; unexplained" in titles
