"""A series drawn: the probability of each phase, and its share, along the patterns."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from phaseid.matching.series_answer import Series
from phaseid.reports.picture import Line, Picture, Room, Shape, Text, rectangle, tick_text, ticks
from phaseid.reports.picture_file import check_picture_path, drawn, write_whole
from phaseid.reports.picture_style import phase_letter, phase_role
from phaseid.reports.plain import phase_text, shorten

WIDTH, LEFT, RIGHT = 760.0, 64.0, 736.0
PANEL, GAP, TOP = 190.0, 48.0, 64.0
MARK = 3.0
Values = Sequence[float | None]


@dataclass(frozen=True, slots=True)
class _Panel:
    """One diagram: `low` to `high` along the series, 0 to 1 upward from `bottom`."""

    low: float
    high: float
    bottom: float

    def x(self, value: float) -> float:
        return LEFT + 12 + (value - self.low) / (self.high - self.low) * (RIGHT - LEFT - 24)

    def y(self, share: float) -> float:
        return self.bottom - 8 - share * (PANEL - 16)


def write_series_picture(series: Series, path: Path) -> None:
    """Draw the series into a file (.svg, .png, .pdf); raises InputError like `write_picture`."""
    check_picture_path(path)
    write_whole(path, drawn(series_picture(series), path.suffix.lower()))


def series_picture(series: Series) -> Picture:
    """Draw the probability of every phase along the series, shares below where there are any."""
    axis = series.axis.values
    low, high = min(axis), max(axis)
    if high - low < 1e-9:
        low, high = low - 1.0, high + 1.0
    shapes: list[Shape] = [Text(LEFT, 30, _title(series), "ink", 15.0, bold=True)]
    curves: list[tuple[str, list[Values]]] = [
        ("probability", [[float(p) for p in phase.probability] for phase in series.phases])
    ]
    shares: list[Values] = [
        [None if part is None else part.share for part in phase.answers] for phase in series.phases
    ]
    if len(shares) > 1 and any(value is not None for row in shares for value in row):
        curves.append(("share by weight", shares))
    bottom = TOP
    for name, rows in curves:
        bottom += PANEL
        panel = _Panel(low, high, bottom)
        heading = Text(LEFT, bottom - PANEL - 10, name, "soft", 12.0)
        room = Room([])
        room.claim(heading)
        shapes += [heading, *_frame(panel)]
        for k, row in enumerate(rows):
            shapes += _curve(panel, axis, row, k, room)
        bottom += GAP
    shapes += _ruler(_Panel(low, high, bottom - GAP), series.axis.title)
    y = bottom + 14
    for k, phase in enumerate(series.phases):
        role = phase_role(k)
        shapes.append(Line(((LEFT, y - 4), (LEFT + 40, y - 4)), f"{role} ring", 2.0))
        words = f"{phase_letter(k)}  {phase_text(phase.phase)}, {phase.phase.space_group_symbol}"
        if phase.indistinguishable:
            words += f" (or {len(phase.indistinguishable)} these rings cannot tell from it)"
        shapes.append(Text(LEFT + 50, y, shorten(words, 90), "ink", 12.0))
        y += 19
    return Picture(WIDTH, y + 8, _title(series), tuple(shapes))


def _title(series: Series) -> str:
    return f"Phases of {len(series.patterns)} patterns by {series.axis.name}"


def _frame(panel: _Panel) -> list[Shape]:
    shapes: list[Shape] = [Line(((LEFT, panel.bottom), (RIGHT, panel.bottom)), "soft")]
    for value in (0.0, 0.5, 1.0):
        y = panel.y(value)
        shapes.append(Line(((LEFT, y), (RIGHT, y)), "faint"))
        shapes.append(Text(LEFT - 8, y + 4, f"{value:g}", "soft", 11.0, "end"))
    return shapes


def _curve(
    panel: _Panel, axis: tuple[float, ...], values: Values, k: int, room: Room
) -> list[Shape]:
    """A line through the known values in the order of the patterns, a mark at each, a letter."""
    role = phase_role(k)
    runs: list[list[tuple[float, float]]] = [[]]
    for at, value in zip(axis, values, strict=True):
        if value is None:
            runs.append([])
        else:
            runs[-1].append((panel.x(at), panel.y(value)))
    points = [point for run in runs for point in run]
    shapes: list[Shape] = [Line(tuple(run), f"{role} ring", 1.8) for run in runs if len(run) > 1]
    shapes += [rectangle(x - MARK, y - MARK, 2 * MARK, 2 * MARK, role, line=0.0) for x, y in points]
    places = [
        Text(x, y - 8, phase_letter(k), role, 12.0, "middle", bold=True)
        for x, y in sorted(points, key=lambda point: (point[1], point[0]))
    ]
    label = room.first_free(places)
    return shapes if label is None else [*shapes, label]


def _ruler(panel: _Panel, title: str) -> list[Shape]:
    marks = ticks(panel.low, panel.high, 8)
    shapes: list[Shape] = []
    for value in marks:
        x = panel.x(value)
        shapes.append(Line(((x, panel.bottom), (x, panel.bottom + 5)), "soft"))
        words = tick_text(value, marks)
        shapes.append(Text(x, panel.bottom + 19, words, "soft", 11.0, "middle"))
    shapes.append(Text((LEFT + RIGHT) / 2, panel.bottom + 36, title, "ink", 12.0, "middle"))
    return shapes
