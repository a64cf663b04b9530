"""A picture as PNG, drawn with Pillow: quick to load, shapes three times too large, then averaged.

Words are set at their final size by the font engine.
"""

from __future__ import annotations

import io
import math
from collections.abc import Iterator
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING

from phaseid.reports.picture import (
    Arc,
    Line,
    Picture,
    Shade,
    Text,
    strokes,
    words_beside,
    words_on_lines,
)
from phaseid.reports.picture_faces import FACE_RATIO, face, runs
from phaseid.reports.picture_style import LIGHT, colour, dashes
from phaseid.reports.plain import safe

if TYPE_CHECKING:
    from PIL.Image import Image
    from PIL.ImageDraw import ImageDraw

DOTS_PER_INCH = 200
DOTS = 2
"""Dots of the file to one unit of the picture, which is 1/100 inch."""
_OVER = 3
_FINE = DOTS * _OVER
_BAND = 256
"""Rows of the file drawn at a time: a long sheet needs no more memory than a short one."""
_STEP_DEG = 2.0
_HALO = 1.5
_DEFLATE = 3  # quicker than the usual 6, and hardly larger for plain lines


def png(picture: Picture) -> bytes:
    """The bytes of a PNG file, 200 dots per inch, on white ground."""
    from PIL import Image
    from PIL.PngImagePlugin import PngInfo

    wide, high = (math.ceil(size * DOTS) for size in (picture.width, picture.height))
    sheet = Image.new("RGB", (wide, high), LIGHT.ground)
    parts = list(strokes(picture))
    masks = {id(part): _mask(part) for part in parts if isinstance(part, Shade)}
    for top in range(0, high, _BAND):
        rows = min(_BAND, high - top)
        sheet.paste(_band(parts, masks, wide, rows, top), (0, top))
    _write(sheet, picture)
    told = PngInfo()
    told.add_itxt("Title", safe(picture.label))
    stream = io.BytesIO()
    sheet.save(
        stream, "PNG", dpi=(DOTS_PER_INCH, DOTS_PER_INCH), pnginfo=told, compress_level=_DEFLATE
    )
    return stream.getvalue()


def _band(
    parts: list[Line | Arc | Shade], masks: dict[int, Image], wide: int, rows: int, top: int
) -> Image:
    """Some rows of the sheet, without words; `masks` are those of the images, by identity."""
    from PIL import Image, ImageDraw

    fine = Image.new("RGB", (wide * _OVER, rows * _OVER), LIGHT.ground)
    pen = ImageDraw.Draw(fine)
    low, high = top / DOTS, (top + rows) / DOTS
    for part in parts:
        above, below = _extent(part)
        if below < low or above > high:
            continue
        if isinstance(part, Shade):
            place = (round(part.x * _FINE), round((part.y - low) * _FINE))
            fine.paste(LIGHT.ink, place, masks[id(part)])
        else:
            _draw(pen, part, low)
    return fine.reduce(_OVER)


def _extent(part: Line | Arc | Shade) -> tuple[float, float]:
    """How far up and down a part reaches."""
    if isinstance(part, Shade):
        return part.centre_y - part.radius, part.centre_y + part.radius
    if isinstance(part, Arc):
        return part.y - part.radius - part.width, part.y + part.radius + part.width
    heights = [y for _, y in part.points]
    return min(heights) - part.width, max(heights) + part.width


def _mask(shade: Shade) -> Image:
    """How much ink each fine dot of an image's box takes, none beyond its circle."""
    from PIL import Image, ImageDraw

    size = (round(shade.width * _FINE), round(shade.height * _FINE))
    ink = Image.fromarray(shade.ink).resize(size, Image.Resampling.BILINEAR)
    x, y = (shade.centre_x - shade.x) * _FINE, (shade.centre_y - shade.y) * _FINE
    radius = shade.radius * _FINE
    within = Image.new("L", size)
    ImageDraw.Draw(within).ellipse((x - radius, y - radius, x + radius, y + radius), fill=255)
    return Image.composite(ink, Image.new("L", size), within)


def _draw(pen: ImageDraw, part: Line | Arc, low: float) -> None:
    ink = colour(part.role)
    if isinstance(part, Arc):
        for start, end in _pieces_of_arc(part):
            if _misses(part, start, end, low):
                continue
            _stroke_arc(pen, part, start, end, low, ink)
        return
    points = [(x * _FINE, (y - low) * _FINE) for x, y in part.points]
    if part.filled:
        pen.polygon([(round(x), round(y)) for x, y in points], fill=ink)
        return
    width = max(round(part.width * _FINE), 1)
    pattern = tuple(length * _FINE for length in dashes(part.role))
    for piece in _pieces_of_line(points, pattern):
        if len(piece) == 2:
            pen.polygon(_bar(piece, part.width * _FINE), fill=ink)
        else:
            pen.line(piece, fill=ink, width=width, joint="curve")


def _stroke_arc(pen: ImageDraw, arc: Arc, start: float, end: float, low: float, ink: str) -> None:
    """A piece of a ring as a polygon: much quicker than Pillow's own arcs where it is short."""
    inner, outer = ((arc.radius + side * arc.width / 2) * _FINE for side in (-1, 1))
    steps = max(1, math.ceil((end - start) / _STEP_DEG))
    turns = [math.radians(start + (end - start) * k / steps) for k in range(steps + 1)]
    x, y = arc.x * _FINE - 0.5, (arc.y - low) * _FINE - 0.5
    edge = [(x + outer * math.cos(t), y - outer * math.sin(t)) for t in turns]
    edge += [(x + inner * math.cos(t), y - inner * math.sin(t)) for t in reversed(turns)]
    pen.polygon([(round(a), round(b)) for a, b in edge], fill=ink)


def _misses(arc: Arc, start: float, end: float, low: float) -> bool:
    """Whether a piece of a ring lies above or below the band that begins at `low`."""
    middle = arc.y - arc.radius * math.sin(math.radians((start + end) / 2))
    reach = arc.radius * math.radians(end - start) / 2 + arc.width
    return middle + reach < low or middle - reach > low + _BAND / DOTS


def _pieces_of_arc(arc: Arc) -> Iterator[tuple[float, float]]:
    """(Start, end) of what is drawn of an arc, in degrees: all of it, or its dashes."""
    start, end = sorted((arc.start_deg, arc.end_deg))
    pattern = dashes(arc.role)
    if not pattern:
        yield start, end
        return
    turn = math.degrees(1.0 / arc.radius)
    for first, last in _dashed(end - start, tuple(length * turn for length in pattern)):
        yield end - last, end - first


def _pieces_of_line(
    points: list[tuple[float, float]], pattern: tuple[float, ...]
) -> Iterator[list[tuple[float, float]]]:
    if not pattern:
        yield points
        return
    for (x1, y1), (x2, y2) in pairwise(points):
        length = math.hypot(x2 - x1, y2 - y1)
        for first, last in _dashed(length, pattern):
            a, b = first / length, last / length
            yield [
                (x1 + a * (x2 - x1), y1 + a * (y2 - y1)),
                (x1 + b * (x2 - x1), y1 + b * (y2 - y1)),
            ]


def _dashed(length: float, pattern: tuple[float, ...]) -> Iterator[tuple[float, float]]:
    """(First, last) of each dash along a stretch; `pattern` is dash, gap, dash, gap, …"""
    at, k = 0.0, 0
    while at < length:
        step = pattern[k % len(pattern)]
        if k % 2 == 0:
            yield at, min(at + step, length)
        at, k = at + step, k + 1


def _bar(piece: list[tuple[float, float]], width: float) -> list[tuple[int, int]]:
    """The corners of a straight stroke with square-cut ends, as dots that Pillow fills.

    Its polygons hold their edge, so that a stroke of six dots has corners five dots apart.
    """
    (x1, y1), (x2, y2) = piece
    long = math.hypot(x2 - x1, y2 - y1) or 1.0
    along_x, along_y = (x2 - x1) / long, (y2 - y1) / long
    half = max(width - 1.0, 0.0) / 2.0
    return [
        (
            math.floor(x + end * along_x - side * half * along_y),
            math.floor(y + end * along_y + side * half * along_x),
        )
        for x, y, end, side in (
            (x1, y1, 0.5, 1),
            (x2, y2, -0.5, 1),
            (x2, y2, -0.5, -1),
            (x1, y1, 0.5, -1),
        )
    ]


def _write(sheet: Image, picture: Picture) -> None:
    """Set the words; those on rings and lines clear the ground around them."""
    from PIL import ImageDraw

    pen = ImageDraw.Draw(sheet)
    on_lines = words_on_lines(picture)
    for text in on_lines:
        _set(pen, text, halo=True)
    for text in (*on_lines, *words_beside(picture)):
        _set(pen, text, halo=False)


def _set(pen: ImageDraw, text: Text, *, halo: bool) -> None:
    size = round(text.size * DOTS * FACE_RATIO)
    pieces = [(face(file, size), words) for file, words in runs(text.words, text.bold, _any_face)]
    lengths = [font.getlength(words) for font, words in pieces]
    x = text.x * DOTS - {"start": 0.0, "middle": 0.5, "end": 1.0}[text.anchor] * sum(lengths)
    for (font, words), length in zip(pieces, lengths, strict=True):
        pen.text(
            (x, text.y * DOTS),
            words,
            fill=LIGHT.ground if halo else colour(text.role),
            font=font,
            anchor="ls",
            stroke_width=round(_HALO * DOTS) if halo else 0,
        )
        x += length


def _any_face(_file: Path) -> bool:
    return True
