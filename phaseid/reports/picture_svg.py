"""A picture as SVG text: inside a page, or a file that stands alone."""

from __future__ import annotations

import base64
import io
import math
from dataclasses import replace
from html import escape

import numpy as np

from phaseid.reports.picture import Arc, Group, Line, Picture, Shade, Shape, Text, arc_points
from phaseid.reports.picture_style import LIGHT, dashes, palette_css, picture_css
from phaseid.reports.plain import safe

HIT_WIDTH = 9.0  # a line this wide can be hit with a finger or an unsteady mouse


class Store:
    """Images that several pictures of a page show: held once, under a name."""

    def __init__(self) -> None:
        self._images: dict[bytes, tuple[bytes, float]] = {}  # PNG and height / width, by ink
        self._cuts = 0

    def image(self, shade: Shade) -> str:
        """The name of an image; the same one always the same."""
        ink = shade.ink.tobytes()
        if ink not in self._images:
            self._images[ink] = _shade_png(shade), shade.height / shade.width
        return f"image-{list(self._images).index(ink) + 1}"

    def cut(self) -> str:
        """A name for one more shape to cut an image by."""
        self._cuts += 1
        return f"cut-{self._cuts}"

    def definitions(self) -> str:
        """All images, each one unit wide; nothing where there are none."""
        images = "".join(
            f'<image id="image-{number}" width="1" height="{ratio:g}" preserveAspectRatio="none" '
            f'href="data:image/png;base64,{base64.b64encode(png).decode()}"/>'
            for number, (png, ratio) in enumerate(self._images.values(), start=1)
        )
        return f"<defs>{images}</defs>" if images else ""


def svg(picture: Picture, *, hits: bool = False, store: Store | None = None) -> str:
    """The picture as an `<svg>` element; its colours come from the style sheet around it.

    With `hits`, unseen wide lines lie under those of rings, to be pointed at. With `store`, images
    are only referred to: the page has to hold its definitions once.
    """
    groups = [shape for shape in picture.shapes if isinstance(shape, Group)]
    unseen = "".join(_hit(group) for group in groups) if hits else ""
    held = store or Store()
    shapes = "".join(_shape(shape, held) for shape in picture.shapes)
    return (
        f'<svg class="picture" xmlns="http://www.w3.org/2000/svg" role="img" '
        f'viewBox="0 0 {_n(picture.width)} {_n(picture.height)}" '
        f'aria-label="{_words(picture.label)}">'
        f"{'' if store else held.definitions()}{unseen}{shapes}</svg>"
    )


def svg_file(picture: Picture) -> str:
    """The picture as an SVG file of its own, on white ground."""
    head, body = svg(picture).split(">", 1)
    size = f' width="{_n(picture.width)}" height="{_n(picture.height)}"'
    style = f"svg{{{palette_css(LIGHT)}background:{LIGHT.ground}}}\n{picture_css()}"
    ground = f'<rect width="100%" height="100%" fill="{LIGHT.ground}"/>'
    return (
        f'<?xml version="1.0" encoding="UTF-8"?>\n{head}{size}>'
        f"<style>{style}</style>{ground}{body}\n"
    )


def _shape(shape: Shape, store: Store) -> str:
    if isinstance(shape, Group):
        inner = "".join(_part(part) for part in shape.shapes)
        key = f' data-key="{_words(shape.key)}"' if shape.key else ""
        return f'<g class="mark"{key}><title>{_words(shape.title)}</title>{inner}</g>'
    if isinstance(shape, Shade):
        return _shade(shape, store)
    return _part(shape)


def _part(shape: Line | Arc | Text) -> str:
    if isinstance(shape, Line):
        points = " ".join(f"{_n(x)},{_n(y)}" for x, y in shape.points)
        if shape.filled:
            return f'<polygon class="{shape.role}" points="{points}"/>'
        return f'<polyline class="{shape.role}" points="{points}"{_stroke(shape)}/>'
    if isinstance(shape, Arc):
        return f'<path class="{shape.role}" d="{_arc_path(shape)}"{_stroke(shape)}/>'
    return _text(shape)


def _hit(group: Group) -> str:
    """Where a group is touched, else its first line, wide and unseen."""
    first = next((part for part in group.shapes if isinstance(part, Line | Arc)), None)
    line = group.touched or first
    if not group.key or line is None or (isinstance(line, Line) and line.filled):
        return ""
    wide = _part(replace(line, role="hit", width=HIT_WIDTH))
    return wide.replace(" ", f' data-key="{_words(group.key)}" ', 1)


def _shade_png(shade: Shade) -> bytes:
    """The ink of an image as PNG: one colour, more or less opaque, in a palette of few entries."""
    from PIL import Image

    levels = np.unique(shade.ink)
    entries = np.searchsorted(levels, shade.ink).astype(np.uint8)
    image = Image.frombytes("P", entries.shape[::-1], entries.tobytes())
    ink = tuple(int(LIGHT.ink[k : k + 2], 16) for k in (1, 3, 5))
    image.putpalette(ink * len(levels))
    stream = io.BytesIO()
    image.save(stream, "PNG", optimize=True, transparency=bytes(levels.tolist()))
    return stream.getvalue()


def _shade(shade: Shade, store: Store) -> str:
    """An image cut to its circle."""
    cut = store.cut()
    centre = f'cx="{_n(shade.centre_x)}" cy="{_n(shade.centre_y)}" r="{_n(shade.radius)}"'
    place = f"translate({_n(shade.x)} {_n(shade.y)}) scale({shade.width:.4f})"
    return (
        f'<clipPath id="{cut}"><circle {centre}/></clipPath><g clip-path="url(#{cut})">'
        f'<use class="image" href="#{store.image(shade)}" transform="{place}"/></g>'
    )


def _text(text: Text) -> str:
    anchor = "" if text.anchor == "start" else f' text-anchor="{text.anchor}"'
    role = f"{text.role} bold" if text.bold else text.role
    return (
        f'<text class="{role}" x="{_n(text.x)}" y="{_n(text.y)}" '
        f'font-size="{_n(text.size)}"{anchor}>{_words(text.words)}</text>'
    )


def _stroke(shape: Line | Arc) -> str:
    dash = " ".join(_n(length) for length in dashes(shape.role))
    dashed = f' stroke-dasharray="{dash}"' if dash else ""
    return f' stroke-width="{_n(shape.width)}"{dashed}'


def _arc_path(arc: Arc) -> str:
    (x1, y1), (x2, y2) = (arc_points(arc)[k] for k in (0, -1))
    large = int(abs(arc.end_deg - arc.start_deg) > 180)
    sweep = int(arc.end_deg < arc.start_deg)
    radius = _n(arc.radius)
    return f"M{_n(x1)} {_n(y1)}A{radius} {radius} 0 {large} {sweep} {_n(x2)} {_n(y2)}"


def _words(text: str) -> str:
    return escape(safe(text))


def _n(value: float) -> str:
    """A coordinate to 0.1, without needless digits."""
    if not math.isfinite(value):
        raise ValueError(f"a shape stands at {value}")
    return f"{value:.1f}".rstrip("0").rstrip(".") if "." in f"{value:.1f}" else f"{value:.1f}"
