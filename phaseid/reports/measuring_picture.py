"""A picture of what was measured: the plate, its curve and background, the rings found."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from phaseid.reports.picture import (
    Arc,
    Group,
    Line,
    Picture,
    Room,
    Shade,
    Shape,
    Text,
    placed,
    tick_text,
    ticks,
)
from phaseid.reports.picture_file import check_picture_path, drawn, write_whole
from phaseid.reports.picture_plate import whole_ink
from phaseid.reports.plain import safe
from phaseid.rings.measuring import Disc, MeasuredRing, Measurement

WIDTH, MARGIN = 760.0, 24.0
DISC_RADIUS, DISC_X = 235.0, WIDTH / 2
MARKED_DEG = 60.0  # how far from the horizontal the rings found are drawn on the plate
LEFT, RIGHT, TOP, BASE = 74.0, WIDTH - MARGIN, 40.0, 300.0
CURVE_HEIGHT = BASE + 52.0
RING, MEAN, MEDIAN, BACKGROUND = "phase2", "ink", "phase1", "phase2"
AXES = {"radius_px": "radius in px", "two_theta_deg": "2θ in degrees"}
NUMBER_SIZE = 11.0
STEPS = 800
"""Parts of the curve's axis that are told apart."""

Scale = Callable[[float], float]


def draw_measurement(found: Measurement, path: Path) -> None:
    """Write the picture; raises InputError where its format is unknown or it cannot be written."""
    check_picture_path(path)
    write_whole(path, drawn(measurement_picture(found), path.suffix.lower()))


def measurement_picture(found: Measurement) -> Picture:
    """The plate, where there is one, above the curve; every ring has its number in both."""
    name = safe(Path(found.source).name)
    shapes: list[Shape] = [Text(MARGIN, MARGIN + 12, name, "ink", 15.0, bold=True)]
    y = MARGIN + 30
    for part in (None if found.disc is None else _plate(found, found.disc), _curve(found)):
        if part is not None:
            shapes += placed(part, 0.0, y)
            y += part.height
    label = f"{len(found.rings)} rings measured in {name}"
    return Picture(WIDTH, y + MARGIN - 12, label, tuple(shapes))


def _plate(found: Measurement, disc: Disc) -> Picture:
    """The image about its centre, ellipse corrected, with the rings found on its right half."""
    unit = DISC_RADIUS / disc.reach_px
    y = DISC_RADIUS + 6
    half = len(disc.grey) / 2 * disc.px_per_pixel * unit
    ink = whole_ink(disc.grey)
    shapes: list[Shape] = [
        Shade(ink, DISC_X - half, y - half, 2 * half, 2 * half, DISC_X, y, DISC_RADIUS),
        Arc(DISC_X, y, DISC_RADIUS, 0.0, 180.0, "soft", 0.8),
        Arc(DISC_X, y, DISC_RADIUS, 180.0, 360.0, "soft", 0.8),
    ]
    room = Room([])
    shapes += [
        _marked(k, ring, ring.position * unit, y, room)
        for k, ring in enumerate(found.rings, start=1)
        if ring.position * unit <= DISC_RADIUS + 0.5
    ]
    for turn in (0.0, 90.0):
        dx, dy = 6 * math.cos(math.radians(turn)), 6 * math.sin(math.radians(turn))
        shapes.append(Line(((DISC_X - dx, y - dy), (DISC_X + dx, y + dy)), RING, 1.2))
    ruler = y + DISC_RADIUS + 12
    shapes += _ruler(
        ticks(0.0, disc.reach_px, 5),
        lambda px: DISC_X + px * unit,
        (DISC_X, DISC_X + DISC_RADIUS),
        ruler,
    )
    words = "px from the centre, ellipse corrected; a negative"
    shapes.append(Text(DISC_X - 12, ruler + 18, words, "soft", 11.0, "end"))
    return Picture(WIDTH, ruler + 40, "", tuple(shapes))


def _marked(number: int, ring: MeasuredRing, radius: float, y: float, room: Room) -> Group:
    """A ring's arc with its number where there is room along it."""
    arc = Arc(DISC_X, y, radius, -MARKED_DEG, MARKED_DEG, RING, 1.0)
    turns = [sign * turn for turn in range(0, int(MARKED_DEG), 6) for sign in (-1, 1)]
    label = room.first_free(
        Text(
            DISC_X + radius * math.cos(math.radians(turn)),
            y - radius * math.sin(math.radians(turn)) + 4,
            str(number),
            RING,
            NUMBER_SIZE,
            "middle",
        )
        for turn in turns
    )
    title = f"ring {number}: radius {ring.position:.2f} px"
    return Group((arc,) if label is None else (arc, label), "", title)


def _curve(found: Measurement) -> Picture:
    """Mean, median and background over the position, counts on a logarithmic axis."""
    curve = found.curve[np.isfinite(found.curve).all(axis=1)]
    position, mean, median, background = curve.T
    top = max(float(mean.max()), 1e-9)
    low = max(0.5 * float(background.min()), 1e-3 * top)
    decades = math.log(1.6 * top / low)
    first, last = float(position[0]), float(position[-1])

    def x(value: float) -> float:
        return LEFT + (value - first) / (last - first) * (RIGHT - LEFT)

    def y(counts: float) -> float:
        return BASE - math.log(max(counts, low) / low) / decades * (BASE - TOP)

    shapes: list[Shape] = []
    for value in _log_ticks(low, 1.6 * top):
        shapes.append(Line(((LEFT, y(value)), (RIGHT, y(value))), "faint", 1.0))
        shapes.append(Text(LEFT - 8, y(value) + 4, f"{value:g}", "soft", 11.0, "end"))
    shapes.append(Text(MARGIN, TOP - 14, "counts", "soft", 11.0))
    lines = [("background", background, BACKGROUND, 1.4)]
    if np.array_equal(mean, median):
        lines.insert(0, ("measured", mean, MEAN, 1.2))
    else:
        lines.insert(0, ("median along the ring", median, MEDIAN, 0.8))
        lines.insert(0, ("mean along the ring", mean, MEAN, 1.2))
    shapes += [_line(position, counts, x, y, role, width) for _, counts, role, width in lines]
    shapes += _legend([(name, role, width) for name, _, role, width in lines])
    shapes += _numbers(found, x, y)
    shapes += _ruler(ticks(first, last, 8), x, (LEFT, RIGHT), BASE)
    axis = AXES.get(found.column, found.column)
    shapes.append(Text((LEFT + RIGHT) / 2, BASE + 40, axis, "ink", 12.0, "middle"))
    return Picture(WIDTH, CURVE_HEIGHT, "", tuple(shapes))


def _line(
    position: NDArray[np.float64],
    counts: NDArray[np.float64],
    x: Scale,
    y: Scale,
    role: str,
    width: float,
) -> Line:
    """Of points closer than the paper shows the lowest and the highest."""
    steps = np.floor((position - position[0]) / (position[-1] - position[0]) * STEPS)
    starts = np.flatnonzero(np.diff(steps, prepend=-1.0))
    kept: list[int] = []
    for start, end in zip(starts, [*starts[1:], len(steps)], strict=True):
        part = counts[start:end]
        kept += sorted({int(start + part.argmin()), int(start + part.argmax())})
    return Line(tuple((x(float(position[k])), y(float(counts[k]))) for k in kept), role, width)


def _legend(told: list[tuple[str, str, float]]) -> list[Shape]:
    """What each line is, from the right above the curve."""
    shapes: list[Shape] = []
    end = RIGHT
    for name, role, width in reversed(told):
        shapes.append(Text(end, TOP - 14, name, "ink", 11.0, "end"))
        end -= 6.0 * len(name) + 8
        shapes.append(Line(((end - 24, TOP - 18), (end, TOP - 18)), role, 2 * width))
        end -= 40
    return shapes


def _numbers(found: Measurement, x: Scale, y: Scale) -> list[Shape]:
    """The rings' numbers above the curve, higher and with a leader where they stand close."""
    position, mean = found.curve[:, 0], found.curve[:, 1]
    room = Room([])
    shapes: list[Shape] = []
    for number, ring in enumerate(found.rings, start=1):
        at, level = x(ring.position), y(float(np.interp(ring.position, position, mean)))
        lifts = (0, 13, 26, 39, 52)
        places = (
            Text(at, level - 7 - lift, str(number), "ink", NUMBER_SIZE, "middle") for lift in lifts
        )
        label = room.first_free(places)
        leader = Line(((at, level - 1), (at, level - 5 if label is None else label.y + 2)), "soft")
        title = f"ring {number} at {ring.position:.3f}"
        shapes.append(Group((leader,) if label is None else (leader, label), "", title))
    return shapes


def _ruler(values: list[float], x: Scale, ends: tuple[float, float], y: float) -> list[Shape]:
    shapes: list[Shape] = [Line(((ends[0], y), (ends[1], y)), "soft", 1.0)]
    for value in values:
        shapes.append(Line(((x(value), y), (x(value), y + 5)), "soft", 1.0))
        shapes.append(Text(x(value), y + 18, tick_text(value, values), "soft", 11.0, "middle"))
    return shapes


def _log_ticks(low: float, high: float) -> list[float]:
    """1, 2 and 5 of every decade; the decades alone where there are many."""
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    steps = (1, 2, 5) if len(decades) < 5 else (1,)
    values = [step * 10.0**power for power in decades for step in steps]
    return [value for value in values if low <= value <= high]
