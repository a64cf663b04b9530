"""A picture as PDF, drawn with reportlab: letters stay letters, in faces that the file holds."""

from __future__ import annotations

import io
from functools import cache
from pathlib import Path
from typing import Any

from phaseid import __version__
from phaseid.reports.picture import (
    Arc,
    Line,
    Picture,
    Shade,
    Text,
    rectangle,
    strokes,
    words_beside,
    words_on_lines,
)
from phaseid.reports.picture_faces import FACE_RATIO, runs
from phaseid.reports.picture_style import LIGHT, colour, dashes
from phaseid.reports.plain import safe

UNITS_PER_INCH = 100.0
POINTS = 72.0 / UNITS_PER_INCH
_HALO = 3.0
_ROUND = 1  # of PDF's line joins
_STROKED = 1  # of its ways to render text
_UNTOLD = "/Span <</ActualText <FEFF0020>>> BDC"  # found, copied and read out as a blank


def pdf(picture: Picture) -> bytes:
    """The bytes of a PDF file; the same picture gives the same bytes."""
    from reportlab.pdfgen.canvas import Canvas

    stream = io.BytesIO()
    (first, _), *_ = runs("A", False, _embeddable)
    size = (picture.width * POINTS, picture.height * POINTS)
    canvas = Canvas(
        stream, size, invariant=1, pageCompression=1, initialFontName=str(first), lang="en"
    )
    _describe(canvas, safe(picture.label))
    canvas.scale(POINTS, POINTS)
    canvas.setLineJoin(_ROUND)
    pen = _Pen(canvas, picture.height)
    pen.draw(rectangle(0, 0, picture.width, picture.height, "ground"))
    for part in strokes(picture):
        pen.draw(part)
    on_lines = words_on_lines(picture)
    pen.clear(on_lines)
    for text in (*words_beside(picture), *on_lines):
        pen.write(text)
    canvas.showPage()
    canvas.save()
    return stream.getvalue()


def _describe(canvas: Any, title: str) -> None:
    """Title and origin; no date, so that the bytes tell nothing but the picture."""
    from reportlab.pdfbase.pdfdoc import PDFDictionary, PDFInfo, PDFString

    class Description(PDFInfo):  # type: ignore[misc]
        def format(self, document: Any) -> Any:
            told = {"Title": title, "Creator": f"phaseid {__version__}", "Producer": self.producer}
            return PDFDictionary({k: PDFString(v) for k, v in told.items()}).format(document)

    canvas._doc.info = Description()
    canvas.setTitle(title)


@cache
def _embeddable(file: Path) -> bool:
    """Whether a face can be put into a PDF; made known to reportlab by its path."""
    from reportlab.pdfbase.pdfmetrics import registerFont
    from reportlab.pdfbase.ttfonts import TTFont

    try:
        registerFont(TTFont(str(file), str(file)))
    except Exception:  # outlines of another kind, not to be embedded, or a damaged file
        return False
    return True


class _Pen:
    """Draws on a canvas whose y runs upward, while that of a picture runs downward."""

    def __init__(self, canvas: Any, height: float) -> None:
        self._canvas = canvas
        self._height = height

    def draw(self, part: Line | Arc | Shade) -> None:
        if isinstance(part, Shade):
            self._lay(part)
        elif isinstance(part, Line) and part.filled:
            self._fill(part)
        else:
            self._stroke(part)

    def _fill(self, line: Line) -> None:
        self._canvas.setFillColorRGB(*_rgb(colour(line.role)))
        path = self._path(line.points)
        path.close()
        self._canvas.drawPath(path, stroke=0, fill=1)

    def _stroke(self, part: Line | Arc) -> None:
        canvas = self._canvas
        canvas.setStrokeColorRGB(*_rgb(colour(part.role)))
        canvas.setLineWidth(part.width)
        canvas.setDash(list(dashes(part.role)))
        if isinstance(part, Line):
            canvas.drawPath(self._path(part.points), stroke=1, fill=0)
            return
        x, y, r = part.x, self._height - part.y, part.radius
        canvas.arc(x - r, y - r, x + r, y + r, part.start_deg, part.end_deg - part.start_deg)

    def _path(self, points: tuple[tuple[float, float], ...]) -> Any:
        path = self._canvas.beginPath()
        for step, (x, y) in enumerate(points):
            (path.lineTo if step else path.moveTo)(x, self._height - y)
        return path

    def _lay(self, shade: Shade) -> None:
        """Ink as opaque as the image has it, within its circle."""
        from PIL import Image
        from reportlab.lib.utils import ImageReader

        opaque = Image.fromarray(shade.ink)
        image = Image.new("RGB", opaque.size, LIGHT.ink)
        image.putalpha(opaque)
        canvas = self._canvas
        canvas.saveState()
        circle = canvas.beginPath()
        circle.circle(shade.centre_x, self._height - shade.centre_y, shade.radius)
        canvas.clipPath(circle, stroke=0, fill=0)
        low = self._height - shade.y - shade.height
        canvas.drawImage(ImageReader(image), shade.x, low, shade.width, shade.height, mask="auto")
        canvas.restoreState()

    def clear(self, texts: list[Text]) -> None:
        """Clear the ground around words on rings."""
        canvas = self._canvas
        canvas.saveState()
        canvas.setDash([])
        canvas.setLineWidth(_HALO)
        canvas.setStrokeColorRGB(*_rgb(LIGHT.ground))
        canvas.addLiteral(_UNTOLD)
        for text in texts:
            self._set(text, stroked=True)
        canvas.addLiteral("EMC")
        canvas.restoreState()

    def write(self, text: Text) -> None:
        self._canvas.setFillColorRGB(*_rgb(colour(text.role)))
        self._set(text)

    def _set(self, text: Text, *, stroked: bool = False) -> None:
        size = text.size * FACE_RATIO
        pieces = [(str(file), words) for file, words in runs(text.words, text.bold, _embeddable)]
        wide = sum(self._canvas.stringWidth(words, file, size) for file, words in pieces)
        x = text.x - {"start": 0.0, "middle": 0.5, "end": 1.0}[text.anchor] * wide
        line = self._canvas.beginText(x, self._height - text.y)
        if stroked:
            line.setTextRenderMode(_STROKED)
        for file, words in pieces:
            line.setFont(file, size)
            line.textOut(words)
        self._canvas.drawText(line)


def _rgb(name: str) -> tuple[float, ...]:
    return tuple(int(name[k : k + 2], 16) / 255 for k in (1, 3, 5))
