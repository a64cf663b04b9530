"""A picture as SVG text: inside a page, or a file that stands alone."""

from __future__ import annotations

import math
from dataclasses import replace
from html import escape

from phaseid.reports.picture import Arc, Group, Line, Picture, Shape, Text, arc_points
from phaseid.reports.picture_style import LIGHT, dashes, palette_css, picture_css
from phaseid.reports.plain import safe

HIT_WIDTH = 9.0  # a line this wide can be hit with a finger or an unsteady mouse


def svg(picture: Picture, *, hits: bool = False) -> str:
    """The picture as an `<svg>` element; its colours come from the style sheet around it.

    With `hits`, unseen wide lines lie under those of rings, to be pointed at.
    """
    groups = [shape for shape in picture.shapes if isinstance(shape, Group)]
    unseen = "".join(_hit(group) for group in groups) if hits else ""
    return (
        f'<svg class="picture" xmlns="http://www.w3.org/2000/svg" role="img" '
        f'viewBox="0 0 {_n(picture.width)} {_n(picture.height)}" '
        f'aria-label="{_words(picture.label)}">'
        + unseen
        + "".join(_shape(shape) for shape in picture.shapes)
        + "</svg>"
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


def _shape(shape: Shape) -> str:
    if isinstance(shape, Group):
        inner = "".join(_shape(part) for part in shape.shapes)
        title = f"<title>{_words(shape.title)}</title>"
        return f'<g class="mark" data-key="{_words(shape.key)}">{title}{inner}</g>'
    if isinstance(shape, Line):
        points = " ".join(f"{_n(x)},{_n(y)}" for x, y in shape.points)
        if shape.filled:
            return f'<polygon class="{shape.role}" points="{points}"/>'
        return f'<polyline class="{shape.role}" points="{points}"{_stroke(shape)}/>'
    if isinstance(shape, Arc):
        return f'<path class="{shape.role}" d="{_arc_path(shape)}"{_stroke(shape)}/>'
    return _text(shape)


def _hit(group: Group) -> str:
    """The first line of a group, wide and unseen."""
    line = next((part for part in group.shapes if isinstance(part, Line | Arc)), None)
    if line is None or (isinstance(line, Line) and line.filled):
        return ""
    wide = _shape(replace(line, role="hit", width=HIT_WIDTH))
    return wide.replace(" ", f' data-key="{_words(group.key)}" ', 1)


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
