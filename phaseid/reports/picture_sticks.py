"""Sticks: measured lines up, calculated lines down, deviations in sigma below."""

from __future__ import annotations

from dataclasses import dataclass

from phaseid.reports.picture import (
    Group,
    Line,
    Picture,
    Room,
    Shape,
    Text,
    rectangle,
    tick_text,
    ticks,
)
from phaseid.reports.picture_axis import Axis, is_on
from phaseid.reports.picture_scene import CalculatedLine, MeasuredRing, Scene
from phaseid.reports.picture_style import phase_letter, phase_role
from phaseid.reports.plain import signed_text

WIDTH, HEIGHT = 720.0, 420.0
LEFT, RIGHT = 58.0, 704.0
UP_TOP, BASE, DOWN_END = 46.0, 160.0, 252.0
RESIDUAL_TOP, RESIDUAL_END = 286.0, 370.0
RULER_Y = RESIDUAL_END
FARTHEST_SIGMA = 4.0
LABEL_SIZE = 11.0
SMALLEST_STICK, SMALLEST_LEFTOVER, SMALLEST_WEAK = 3.0, 9.0, 1.5
STICK, STICK_ON_CURVE = 3.0, 1.2
CURVE_STEP = 0.75


@dataclass(frozen=True, slots=True)
class _Span:
    """The stretch of the axis shown."""

    axis: Axis
    low: float
    high: float

    def x(self, d_A: float) -> float:
        share = (self.axis.value(d_A) - self.low) / (self.high - self.low)
        return LEFT + 8 + share * (RIGHT - LEFT - 16)

    def at(self, value: float) -> float:
        return LEFT + 8 + (value - self.low) / (self.high - self.low) * (RIGHT - LEFT - 16)


def sticks(scene: Scene, axis: Axis) -> Picture:
    """The pattern as sticks against the answer's lines, on `axis`, after the fitted scale."""
    measured = [ring for ring in scene.measured if is_on(axis, ring.true_d_A)]
    calculated = [line for line in scene.calculated if is_on(axis, line.d_A)]
    span = _span(axis, [r.true_d_A for r in measured] + [c.d_A for c in calculated])
    room = Room([])
    order = {"weak": 0, "missing": 1, "found": 2}
    lines = sorted(calculated, key=lambda line: (order[line.kind], -line.height))
    rings = sorted(measured, key=lambda ring: (bool(ring.phases), -ring.height))
    wide = STICK if scene.curve is None else STICK_ON_CURVE
    shapes: list[Shape] = [
        *_curve(span, scene),
        *_frame(span, scene),
        *(_down(line, span, room) for line in lines),
        *(_up(ring, span, room, wide) for ring in rings),
        *(_residual(ring, span, room) for ring in measured if ring.phases),
    ]
    label = (
        f"Sticks on an axis of {axis.title}: {len(measured)} measured lines up, "
        f"{len(calculated)} calculated lines down, deviations in sigma below; {scene.scale_text}. "
        "Every line stands in the table."
    )
    return Picture(WIDTH, HEIGHT, label, tuple(shapes))


def _span(axis: Axis, spacings: list[float]) -> _Span:
    values = [axis.value(d_A) for d_A in spacings] or [0.0, 1.0]
    low, high = min(values), max(values)
    margin = 0.03 * (high - low) or 0.05 * high
    return _Span(axis, max(low - margin, 0.0), high + margin)


def _frame(span: _Span, scene: Scene) -> list[Shape]:
    middle = (RESIDUAL_TOP + RESIDUAL_END) / 2
    shapes: list[Shape] = [
        rectangle(LEFT, _sigma_y(1.0), RIGHT - LEFT, _sigma_y(-1.0) - _sigma_y(1.0), "faint"),
        Line(((LEFT, BASE), (RIGHT, BASE)), "ink", 1.0),
        Line(((LEFT, middle), (RIGHT, middle)), "soft", 1.0),
        Line(((LEFT, RULER_Y), (RIGHT, RULER_Y)), "soft", 1.0),
        Text(LEFT - 8, UP_TOP + 44, "meas.", "soft", 12.0, "end"),
        Text(LEFT - 8, BASE + 52, "calc.", "soft", 12.0, "end"),
        Text(16.0, RESIDUAL_TOP - 8, "deviation in sigma, ring's own; band: ± 1", "soft", 11.0),
        Text(RIGHT, 16, scene.scale_text, "ink", 12.0, "end"),
        Text((LEFT + RIGHT) / 2, HEIGHT - 8, span.axis.title, "ink", 12.0, "middle"),
    ]
    if not scene.has_intensity:
        shapes.append(Text(16.0, 16, "no intensities given: sticks of one height", "soft", 11.0))
    elif scene.curve is not None:
        words = "sticks: areas; behind them the measured curve less its background"
        shapes.append(Text(16.0, 16, words, "soft", 11.0))
    for level in (-3.0, 0.0, 3.0):
        words = "0" if level == 0 else f"{level:+.0f}"
        shapes.append(Text(LEFT - 8, _sigma_y(level) + 4, words, "soft", 11.0, "end"))
        if level:
            y = _sigma_y(level)
            shapes.append(Line(((LEFT, y), (RIGHT, y)), "faint", 1.0))
    values = ticks(span.low, span.high, 8)
    for value in values:
        x = span.at(value)
        shapes.append(Line(((x, RULER_Y), (x, RULER_Y + 5)), "soft", 1.0))
        shapes.append(Text(x, RULER_Y + 18, tick_text(value, values), "soft", 11.0, "middle"))
    return shapes


def _curve(span: _Span, scene: Scene) -> list[Shape]:
    """The measured curve behind the sticks: in every step across the highest point of it."""
    if scene.curve is None:
        return []
    highest: dict[int, float] = {}
    for d_A, height in scene.curve.tolist():
        x = span.x(d_A) if is_on(span.axis, d_A) else -1.0
        if LEFT <= x <= RIGHT:
            step = round(x / CURVE_STEP)
            highest[step] = max(highest.get(step, 0.0), min(height, 100.0))
    if len(highest) < 2:
        return []
    points = tuple(
        (step * CURVE_STEP, BASE - height / 100.0 * (BASE - UP_TOP))
        for step, height in sorted(highest.items())
    )
    under = ((points[-1][0], BASE), (points[0][0], BASE))
    return [Line((*points, *under), "faint", filled=True), Line(points, "soft", 0.8)]


def _sigma_y(sigma: float) -> float:
    middle = (RESIDUAL_TOP + RESIDUAL_END) / 2
    return middle - sigma / FARTHEST_SIGMA * (RESIDUAL_END - RESIDUAL_TOP) / 2


def _up(ring: MeasuredRing, span: _Span, room: Room, wide: float) -> Group:
    x = span.x(ring.true_d_A)
    smallest = SMALLEST_STICK if ring.phases else SMALLEST_LEFTOVER
    top = BASE - max(ring.height / 100.0 * (BASE - UP_TOP), smallest)
    shapes: list[Line | Text]
    if ring.phases:
        step = (BASE - top) / len(ring.phases)
        shapes = [
            Line(((x, BASE - k * step), (x, BASE - (k + 1) * step)), phase_role(phase), wide)
            for k, phase in enumerate(ring.phases)
        ]
        words = "".join(phase_letter(phase) for phase in ring.phases)
        role = phase_role(ring.phases[0])
    else:
        shapes = [
            Line(((x, BASE), (x, top)), "leftover ink", 6.0),
            Line(((x, BASE - 1), (x, top + 1.5)), "hollow ground", 3.0),
        ]
        words, role = f"{ring.ring + 1} ?", "ink"
    places = [
        Text(x, top - 5 - lift, words, role, LABEL_SIZE, "middle", bold=not ring.phases)
        for lift in ((0, 12) if ring.phases else (0, 12, 24, 36))
    ]
    if label := room.first_free(places):
        shapes.append(label)
    return Group(tuple(shapes), ring.key, ring.title)


def _down(line: CalculatedLine, span: _Span, room: Room) -> Group:
    x, role = span.x(line.d_A), phase_role(line.phase)
    smallest = SMALLEST_WEAK if line.kind == "weak" else SMALLEST_STICK
    end = BASE + max(line.height / 100.0 * (DOWN_END - BASE - 14), smallest)
    letter = phase_letter(line.phase)
    if line.kind == "weak":
        stick = Line(((x, BASE), (x, end)), f"weak {role}", 2.0)
        return Group((stick,), line.key, line.title)
    missing = line.kind == "missing"
    shapes: list[Line | Text] = [
        Line(((x, BASE), (x, end)), f"missing {role}" if missing else role, 3.0)
    ]
    places = [
        Text(
            x,
            end + 12 + drop,
            f"{letter} ×" if missing else letter,
            role,
            LABEL_SIZE,
            "middle",
            bold=missing,
        )
        for drop in ((0, 12, 24) if missing else (0, 12))
    ]
    if label := room.first_free(places):
        shapes.append(label)
    return Group(tuple(shapes), line.key, line.title)


def _residual(ring: MeasuredRing, span: _Span, room: Room) -> Group:
    x = span.x(ring.true_d_A)
    shapes: list[Line | Text] = []
    for phase, value in ring.matches:
        shown = max(-FARTHEST_SIGMA, min(FARTHEST_SIGMA, value))
        shapes.append(_marker(x, _sigma_y(shown), phase))
        if shown != value:
            places = [
                Text(
                    x, _sigma_y(shown) + drop, signed_text(value), "ink", 11.0, "middle", bold=True
                )
                for drop in ((-8, -20) if shown < 0 else (16, 28))
            ]
            if label := room.first_free(places):
                shapes.append(label)
    return Group(tuple(shapes), ring.key, ring.title)


def _marker(x: float, y: float, phase: int) -> Line:
    """Square, lozenge, triangle up, triangle down, for the phases in turn."""
    size = 4.0
    corners: tuple[tuple[tuple[float, float], ...], ...] = (
        ((-1, -1), (1, -1), (1, 1), (-1, 1)),
        ((0, -1.45), (1.45, 0), (0, 1.45), (-1.45, 0)),
        ((0, -1.3), (1.3, 1), (-1.3, 1)),
        ((0, 1.3), (1.3, -1), (-1.3, -1)),
    )
    points = tuple((x + size * a, y + size * b) for a, b in corners[phase % len(corners)])
    return Line(points, phase_role(phase), filled=True)
