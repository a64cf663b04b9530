"""A picture as a short list of shapes, drawn once; SVG, PNG and PDF each show the same list.

Coordinates are picture units (a CSS pixel, 1/100 inch on paper), x to the right, y downward. A
shape carries words for what it is ("phase1", "leftover"), never a colour: `picture_style` gives
those.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal, overload

from phaseid.reports.plain import display_width

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

Anchor = Literal["start", "middle", "end"]
LETTER_WIDTH = 0.6  # of the size, for a sans-serif face; generous


@dataclass(frozen=True, slots=True)
class Line:
    """A polyline through `points`; closed and filled where `filled`."""

    points: tuple[tuple[float, float], ...]
    role: str
    width: float = 1.0
    filled: bool = False


@dataclass(frozen=True, slots=True)
class Arc:
    """Part of a circle, angles in degrees counter-clockwise from the right."""

    x: float
    y: float
    radius: float
    start_deg: float
    end_deg: float
    role: str
    width: float = 1.0


@dataclass(frozen=True, slots=True)
class Text:
    """Words whose baseline begins, centres or ends at (x, y)."""

    x: float
    y: float
    words: str
    role: str = "ink"
    size: float = 12.0
    anchor: Anchor = "start"
    bold: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Shade:
    """A photograph or half of one: `ink` (rows, columns) uint8, 0 the bare ground, 255 full ink.

    It fills the box at (x, y), of which only what lies within `radius` of (centre_x, centre_y) is
    shown.
    """

    ink: NDArray[np.uint8]
    x: float
    y: float
    width: float
    height: float
    centre_x: float
    centre_y: float
    radius: float


@dataclass(frozen=True, slots=True)
class Group:
    """Shapes that belong to one ring or line: `title` tells of them, `key` links them to a row of
    the table; "" for what has none. `touched` is where they are pointed at, else the first line."""

    shapes: tuple[Line | Arc | Text, ...]
    key: str
    title: str
    touched: Line | Arc | None = None


Shape = Line | Arc | Text | Shade | Group


@dataclass(frozen=True, slots=True)
class Picture:
    """Shapes on a sheet of `width` × `height`; `label` says in words what is to be seen."""

    width: float
    height: float
    label: str
    shapes: tuple[Shape, ...]


def moved(shape: Shape, dx: float, dy: float) -> Shape:
    """The same shape elsewhere."""
    if isinstance(shape, Group):
        parts = tuple(_moved_part(part, dx, dy) for part in shape.shapes)
        touched = None if shape.touched is None else _moved_part(shape.touched, dx, dy)
        return replace(shape, shapes=parts, touched=touched)
    if isinstance(shape, Shade):
        x, y = shape.centre_x + dx, shape.centre_y + dy
        return replace(shape, x=shape.x + dx, y=shape.y + dy, centre_x=x, centre_y=y)
    return _moved_part(shape, dx, dy)


@overload
def _moved_part(part: Line | Arc, dx: float, dy: float) -> Line | Arc: ...
@overload
def _moved_part(part: Line | Arc | Text, dx: float, dy: float) -> Line | Arc | Text: ...
def _moved_part(part: Line | Arc | Text, dx: float, dy: float) -> Line | Arc | Text:
    if isinstance(part, Line):
        return replace(part, points=tuple((x + dx, y + dy) for x, y in part.points))
    return replace(part, x=part.x + dx, y=part.y + dy)


def placed(picture: Picture, x: float, y: float) -> tuple[Shape, ...]:
    """The shapes of a picture whose corner is to stand at (x, y) of a larger one."""
    return tuple(moved(shape, x, y) for shape in picture.shapes)


def strokes(picture: Picture) -> Iterator[Line | Arc | Shade]:
    """All that is no words, in the order it is drawn."""
    for shape in picture.shapes:
        for part in shape.shapes if isinstance(shape, Group) else (shape,):
            if not isinstance(part, Text):
                yield part


def words_on_lines(picture: Picture) -> list[Text]:
    """Words that belong to rings and lines: the ground around them is to be cleared."""
    groups = (shape for shape in picture.shapes if isinstance(shape, Group))
    return [part for group in groups for part in group.shapes if isinstance(part, Text)]


def words_beside(picture: Picture) -> list[Text]:
    """All other words."""
    return [shape for shape in picture.shapes if isinstance(shape, Text)]


def rectangle(
    x: float, y: float, width: float, height: float, role: str, line: float = 1.0
) -> Line:
    """A filled rectangle with its corner at (x, y)."""
    corners = ((x, y), (x + width, y), (x + width, y + height), (x, y + height))
    return Line(corners, role, line, filled=True)


def arc_points(arc: Arc) -> list[tuple[float, float]]:
    """Points along an arc, close enough that it looks round."""
    turn = abs(arc.end_deg - arc.start_deg)
    steps = max(2, math.ceil(turn / 2.0))
    angles = [
        math.radians(arc.start_deg + (arc.end_deg - arc.start_deg) * k / steps)
        for k in range(steps + 1)
    ]
    return [(arc.x + arc.radius * math.cos(t), arc.y - arc.radius * math.sin(t)) for t in angles]


def text_width(words: str, size: float) -> float:
    """About how wide words are."""
    return LETTER_WIDTH * size * display_width(words)


@dataclass(slots=True)
class Room:
    """Boxes already taken by words, so that new ones can keep clear of them."""

    taken: list[tuple[float, float, float, float]]

    def claim(self, text: Text, margin: float = 2.0) -> bool:
        """Take the box of `text` if it is free; False if something stands there."""
        wide, high = text_width(text.words, text.size), text.size
        left = text.x - {"start": 0.0, "middle": wide / 2, "end": wide}[text.anchor]
        box = (left - margin, text.y - high, left + wide + margin, text.y + 0.25 * high)
        for other in self.taken:
            if box[0] < other[2] and other[0] < box[2] and box[1] < other[3] and other[1] < box[3]:
                return False
        self.taken.append(box)
        return True

    def first_free(self, texts: Iterable[Text]) -> Text | None:
        """The first of several places that is free, taken; None where none is."""
        return next((text for text in texts if self.claim(text)), None)


def ticks(low: float, high: float, about: int) -> list[float]:
    """Round numbers from `low` to `high`, some `about` of them: steps of 1, 2 or 5 × 10ⁿ."""
    span = max(high - low, 1e-9)
    power = 10.0 ** math.floor(math.log10(span / about))
    step = next(k * power for k in (1, 2, 5, 10) if span / (k * power) <= about)
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    return [k * step for k in range(first, last + 1)]


def tick_text(value: float, all_ticks: Sequence[float]) -> str:
    """A tick's number with the decimals its step needs."""
    step = all_ticks[1] - all_ticks[0] if len(all_ticks) > 1 else 1.0
    return f"{value:.{max(0, -math.floor(math.log10(step) + 1e-9))}f}"
