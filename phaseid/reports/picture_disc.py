"""The disc: one half as measured, the other as calculated; rings of the truth meet on the diameter.

For two probes of one specimen each has a half. The radius is 1/d for every probe, measured spacings
after the fitted scale. The line's weight shows the intensity.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import replace
from typing import Literal

from phaseid.reports.picture import (
    Arc,
    Group,
    Line,
    Picture,
    Room,
    Shape,
    Text,
    tick_text,
    ticks,
)
from phaseid.reports.picture_plate import half_plate
from phaseid.reports.picture_scene import CalculatedLine, MeasuredRing, Scene
from phaseid.reports.picture_style import phase_letter, phase_role
from phaseid.reports.plain import safe, shorten
from phaseid.units import A_PER_NM

Side = Literal["left", "right"]
WIDTH, RADIUS, TOP = 480.0, 212.0, 34.0
CENTRE_X, CENTRE_Y = WIDTH / 2, TOP + RADIUS
RULER_Y = TOP + 2 * RADIUS + 16
LEGEND_Y, LEGEND_STEP = RULER_Y + 58, 20.0
LABEL_SIZE = 11.0
UNCROWDED = 16
MARK_LENGTH, LEFTOVER_GAP = 26.0, 4.5
WEAK_WIDTH = 0.8
_LETTERS_WIDE = 56


def disc(scene: Scene) -> Picture:
    """Measured rings on the left half, the answer's lines on the right."""
    reach = _reach([scene])
    room = Room([])
    right = (
        _calculated_half(scene.calculated, reach, room)
        if scene.calculated
        else [Text(CENTRE_X + RADIUS / 2, CENTRE_Y, "no line matches", "soft", 13.0, "middle")]
    )
    shapes = [
        *_plate(scene, "left", reach),
        *_ground(reach),
        *right,
        *_measured_half(scene, "left", reach, room),
        *_heads("measured", "calculated"),
    ]
    left = sum(not ring.phases for ring in scene.measured)
    missing = sum(line.kind == "missing" for line in scene.calculated)
    image = "the image itself, " if scene.pattern.disc is not None else ""
    label = (
        f"Disc of rings, left half measured ({image}{len(scene.measured)} rings, {left} "
        f"unexplained), right half calculated ({missing} strong lines missing). Every ring stands "
        "in the table."
    )
    return _with_legend(shapes, [scene], label)


def disc_of_two(first: Scene, second: Scene) -> Picture:
    """The rings of two patterns of one specimen, one half each."""
    patterns = (first.pattern, second.pattern)
    heads = [shorten(pattern.probe.label, 24) for pattern in patterns]
    if heads[0] == heads[1]:
        heads = [shorten(safe(pattern.title) or heads[0], 24) for pattern in patterns]
    reach = _reach([first, second])
    room = Room([])
    shapes = [
        *_plate(first, "left", reach),
        *_plate(second, "right", reach),
        *_ground(reach),
        *_measured_half(first, "left", reach, room),
        *_measured_half(second, "right", reach, room),
        *_heads(*heads),
    ]
    label = f"Disc of rings, left half measured: {heads[0]}, right half: {heads[1]}."
    return _with_legend(shapes, [first, second], label)


def _reach(scenes: Iterable[Scene]) -> float:
    """Largest 1/d (1/Å) to be drawn."""
    spacings = [mark.true_d_A for scene in scenes for mark in scene.measured]
    spacings += [line.d_A for scene in scenes for line in scene.calculated]
    return 1.04 / min(spacings, default=1.0)


def _plate(scene: Scene, side: Side, reach: float) -> list[Shape]:
    plate = half_plate(
        scene.pattern,
        scene.factor,
        side,
        units_per_g=RADIUS / reach,
        centre=(CENTRE_X, CENTRE_Y),
        radius=RADIUS,
    )
    return [] if plate is None else [plate]


def _ground(reach: float) -> list[Shape]:
    """The ruler of 1/d, the diameter and the beam's spot."""
    marks: list[Shape] = [
        Line(((CENTRE_X, TOP - 4), (CENTRE_X, RULER_Y)), "soft", 1.0),
        Line(((CENTRE_X, RULER_Y), (CENTRE_X + RADIUS, RULER_Y)), "soft", 1.0),
    ]
    values = ticks(0.0, reach * A_PER_NM, 6)
    for value in values:
        x = CENTRE_X + RADIUS * value / (reach * A_PER_NM)
        marks.append(Line(((x, RULER_Y), (x, RULER_Y + 5)), "soft", 1.0))
        marks.append(Text(x, RULER_Y + 17, tick_text(value, values), "soft", 11.0, "middle"))
    marks.append(Text(CENTRE_X - 12, RULER_Y + 17, "1/d in 1/nm", "soft", 11.0, "end"))
    marks.append(Line(_spot(2.5), "ink", filled=True))
    return marks


def _spot(radius: float) -> tuple[tuple[float, float], ...]:
    turns = [math.tau * k / 16 for k in range(16)]
    return tuple((CENTRE_X + radius * math.cos(t), CENTRE_Y + radius * math.sin(t)) for t in turns)


def _heads(left: str, right: str) -> list[Shape]:
    return [
        Text(CENTRE_X - 10, 18, left, "ink", 14.0, "end", bold=True),
        Text(CENTRE_X + 10, 18, right, "ink", 14.0, "start", bold=True),
    ]


def line_weight(height: float, rings: int) -> float:
    """Width of a ring that shows a relative intensity (strongest = 100), finer among many."""
    fine = min(1.0, math.sqrt(UNCROWDED / max(rings, 1)))
    return fine * (1.0 + 4.0 * math.sqrt(max(height, 0.0) / 100.0))


def _measured_half(scene: Scene, side: Side, reach: float, room: Room) -> list[Shape]:
    """The rings, by weight; on an image only their ends, so that the image is seen."""
    marks: list[Shape] = []
    rings = scene.measured
    low = 90.0 if side == "left" else -90.0
    for ring in sorted(rings, key=lambda ring: (bool(ring.phases), -ring.height)):
        radius = RADIUS / ring.true_d_A / reach
        weight = line_weight(ring.height, len(rings))
        whole = _arc(radius, low, low + 180, "", weight)
        draw = _full_ring if scene.pattern.disc is None else _marked_ring
        shapes: list[Line | Arc | Text] = [*draw(ring, whole)]
        words = str(ring.ring + 1) if ring.phases else f"{ring.ring + 1} ?"
        role = phase_role(ring.phases[0]) if ring.phases else "ink"
        if label := _label(words, role, radius, side, room, bold=not ring.phases):
            shapes.append(label)
        marks.append(Group(tuple(shapes), ring.key, ring.title, touched=whole))
    return marks


def _full_ring(ring: MeasuredRing, whole: Arc) -> list[Arc]:
    if not ring.phases:
        return [
            replace(whole, role="leftover ink", width=whole.width + 3.0),
            replace(whole, role="hollow ground", width=whole.width + 0.4),
        ]
    step = (whole.end_deg - whole.start_deg) / len(ring.phases)
    return [
        replace(
            whole,
            start_deg=whole.start_deg + part * step,
            end_deg=whole.start_deg + (part + 1) * step,
            role=f"ring {phase_role(phase)}",
        )
        for part, phase in enumerate(ring.phases)
    ]


def _marked_ring(ring: MeasuredRing, whole: Arc) -> list[Arc]:
    if not ring.phases:
        return [
            replace(whole, role="leftover ink", radius=whole.radius + off, width=1.4)
            for off in (-LEFTOVER_GAP, LEFTOVER_GAP)
        ]
    turn = math.degrees(MARK_LENGTH / whole.radius)
    ends = (
        (whole.start_deg, whole.start_deg + turn, ring.phases[0]),
        (whole.end_deg - turn, whole.end_deg, ring.phases[-1]),
    )
    return [
        replace(whole, start_deg=start, end_deg=end, role=phase_role(phase))
        for start, end, phase in ends
    ]


def _calculated_half(lines: tuple[CalculatedLine, ...], reach: float, room: Room) -> list[Shape]:
    marks: list[Shape] = []
    strong = sum(line.kind != "weak" for line in lines)
    order = {"weak": 0, "missing": 1, "found": 2}
    for line in sorted(lines, key=lambda line: (order[line.kind], -line.height)):
        radius = RADIUS / line.d_A / reach
        role = phase_role(line.phase)
        if line.kind == "weak":
            arc = _arc(radius, -90, 90, f"weak {role}", WEAK_WIDTH)
            marks.append(Group((arc,), line.key, line.title))
            continue
        missing = line.kind == "missing"
        weight = line_weight(line.height, strong)
        kind = "missing" if missing else "ring"
        shapes: list[Line | Arc | Text] = [_arc(radius, -90, 90, f"{kind} {role}", weight)]
        words = f"{phase_letter(line.phase)} {_short_hkl(line.hkl)}" + (" ×" if missing else "")
        if label := _label(words, role, radius, "right", room, bold=missing):
            shapes.append(label)
        marks.append(Group(tuple(shapes), line.key, line.title))
    return marks


def _short_hkl(hkl: tuple[int, int, int]) -> str:
    """Indices in a row where each is one digit, else with blanks: 111, 1 0 10, 1 1 -2."""
    return "".join(map(str, hkl)) if all(0 <= k <= 9 for k in hkl) else " ".join(map(str, hkl))


def _arc(radius: float, start: float, end: float, role: str, width: float) -> Arc:
    return Arc(CENTRE_X, CENTRE_Y, radius, start, end, role, width)


def _label(
    words: str, role: str, radius: float, side: Side, room: Room, *, bold: bool
) -> Text | None:
    """Words on a ring, at the first free place along it; None where the half is full."""
    places = (12, -12, 30, -30, 48, -48, 64, -64, 21, -21, 39, -39, 56, -56, 72, -72, 2)
    turn = 180.0 if side == "left" else 0.0
    return room.first_free(
        Text(
            CENTRE_X + radius * math.cos(math.radians(turn + angle)),
            CENTRE_Y - radius * math.sin(math.radians(turn + angle)) + 0.35 * LABEL_SIZE,
            words,
            role,
            LABEL_SIZE,
            "middle",
            bold=bold,
        )
        for angle in places
    )


def _with_legend(shapes: list[Shape], scenes: list[Scene], label: str) -> Picture:
    y, x = LEGEND_Y, 16.0
    for k, name in enumerate(scenes[0].names(_LETTERS_WIDE)):
        shapes.append(Line(((x, y - 4), (x + 44, y - 4)), f"ring {phase_role(k)}", 3.0))
        shapes.append(Text(x + 54, y, name, phase_role(k), 12.0))
        y += LEGEND_STEP
    if any(not ring.phases for scene in scenes for ring in scene.measured):
        for role, weight in (("leftover ink", 6.0), ("hollow ground", 3.0)):
            shapes.append(Line(((x, y - 4), (x + 44, y - 4)), role, weight))
        shapes.append(Text(x + 54, y, "?  measured, unexplained", "ink", 12.0, bold=True))
        y += LEGEND_STEP
    if any(line.kind == "missing" for scene in scenes for line in scene.calculated):
        where = " (in the sticks)" if len(scenes) > 1 else ""
        words = f"×  calculated strong, not measured{where}"
        shapes.append(Line(((x, y - 4), (x + 44, y - 4)), "missing ink", 3.0))
        shapes.append(Text(x + 54, y, words, "ink", 12.0, bold=True))
        y += LEGEND_STEP
    if len(scenes) == 1 and any(line.kind == "weak" for line in scenes[0].calculated):
        shapes.append(Line(((x, y - 4), (x + 44, y - 4)), "weak ink", WEAK_WIDTH))
        shapes.append(Text(x + 54, y, "calculated, too weak to be seen here", "ink", 12.0))
        y += LEGEND_STEP
    for note in _notes(scenes):
        shapes.append(Text(x, y, note, "soft", 11.0))
        y += LEGEND_STEP - 3
    return Picture(WIDTH, y, label, tuple(shapes))


def _notes(scenes: list[Scene]) -> list[str]:
    halves = ("left: ", "right: ") if len(scenes) > 1 else ("",)
    notes = []
    for scene, half in zip(scenes, halves, strict=True):
        after = "" if scene.scale is None else "; radii after it"
        notes.append(f"{half}{scene.scale_text}{after}")
    for told, kind in (
        ("no intensities given: lines of one weight", [not s.has_intensity for s in scenes]),
        ("the measured image; on light ground a negative", [_has_image(s) for s in scenes]),
    ):
        if all(kind):
            notes.append(told)
        else:
            notes += [f"{half}{told}" for half, is_so in zip(halves, kind, strict=True) if is_so]
    return notes


def _has_image(scene: Scene) -> bool:
    return scene.pattern.disc is not None
