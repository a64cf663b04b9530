"""The whole picture of an identification, for a file: the answer in words, disc, sticks, origin."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import TYPE_CHECKING

from phaseid import __version__
from phaseid.matching.identification import Hypothesis, Identification, PhaseAnswer
from phaseid.reports.headline import headline
from phaseid.reports.picture import Line, Picture, Shape, Text, placed, rectangle
from phaseid.reports.picture_axis import AxisName, axis_for, common_axis
from phaseid.reports.picture_disc import disc, disc_of_two
from phaseid.reports.picture_scene import scene
from phaseid.reports.picture_sticks import sticks
from phaseid.reports.picture_style import phase_letter, phase_role
from phaseid.reports.plain import (
    cell_text,
    display_width,
    hkl_text,
    probability_text,
    safe,
    short_phase_text,
    shorten,
)

if TYPE_CHECKING:
    from phaseid.library import Library

MARGIN, GAP = 24.0, 28.0
BAR_HEIGHT = 16.0
NAMED = 8  # answers that the bar of probability shows one by one
LETTERS = 66  # of the phases of an answer beside the bar
_LINE = 22.0


def sheet(
    answer: Identification, *, axis: AxisName | None = None, library: Library | None = None
) -> Picture:
    """Draw the best answer: two patterns share one disc, otherwise each pattern has its own.

    With the answer's `library`, its lines that are too weak to be seen are drawn faintly.
    """
    best = answer.hypotheses[0] if answer.hypotheses else None
    scenes = [scene(answer, best, number, library) for number in range(len(answer.patterns))]
    common = common_axis(answer.patterns, axis)
    stick_pictures = [sticks(s, axis_for(s.pattern, common)) for s in scenes]
    discs = [disc_of_two(*scenes)] if len(scenes) == 2 else [disc(s) for s in scenes]
    column = MARGIN + discs[0].width + GAP
    width = column + stick_pictures[0].width + MARGIN
    shapes, y = _heading(answer, width)
    right_y = left_y = y
    for number, one in enumerate(stick_pictures):
        if len(discs) == len(scenes):
            left_y = right_y = max(left_y, right_y)
            shapes += placed(discs[number], MARGIN, left_y)
            left_y += discs[number].height + GAP
        title = shorten(_pattern_title(answer, number), 80)
        shapes.append(Text(column + 16, right_y + 12, title, "ink", 13.0, bold=True))
        shapes += placed(one, column, right_y + 20)
        right_y += one.height + 20 + GAP
    if len(discs) < len(scenes):
        shapes += placed(discs[0], MARGIN, left_y)
        left_y += discs[0].height + GAP
    if best is not None:
        beside = right_y < left_y
        x, y, wide = (column + 16, right_y, 100) if beside else (MARGIN + 16, left_y, 66)
        told, y = _told(best, x, y, wide)
        shapes += told
        left_y, right_y = (left_y, y) if beside else (y, right_y)
    y = max(left_y, right_y)
    shapes.append(Text(MARGIN, y, origin_text(answer), "soft", 11.0))
    return Picture(width, y + 18, headline(answer), tuple(shapes))


def _told(best: Hypothesis, x: float, y: float, letters: int) -> tuple[list[Shape], float]:
    """What is known of each phase, in words; and where these end."""
    shapes: list[Shape] = []
    for k, part in enumerate(best.phases):
        symbol = safe(part.phase.space_group_symbol)
        name = short_phase_text(part.phase, letters - len(symbol) - 5)
        name = f"{phase_letter(k)}  {name}, {symbol}"
        shapes.append(Text(x, y, name, phase_role(k), 12.0, bold=True))
        y += 17
        for line in textwrap.wrap(
            "; ".join(phase_facts(part, alone=len(best.phases) == 1)), letters
        ):
            shapes.append(Text(x + 14, y, line, "ink", 12.0))
            y += 16
        y += 8
    return shapes, y + GAP - 8


def phase_facts(part: PhaseAnswer, *, alone: bool) -> list[str]:
    """What the picture says of a phase beside its name: cell, share, texture, those alike."""
    facts = []
    if part.cell is not None:
        facts.append(f"refined cell {cell_text(part.cell, part.cell_sigma)}")
    if part.share is not None and not alone:
        error = "" if part.share_sigma is None else f" ± {100 * part.share_sigma:.0f}"
        facts.append(f"{100 * part.share:.0f}{error} % by weight")
    if part.fibre_axis is not None:
        facts.append(f"film with fibre axis [{hkl_text(part.fibre_axis)}] along the beam")
    if alike := len(part.indistinguishable):
        others = "another phase" if alike == 1 else f"{alike} other phases"
        facts.append(f"these rings cannot tell it from {others}")
    return facts


def origin_text(answer: Identification) -> str:
    """Which program and library drew this."""
    library = answer.library
    return (
        f"phaseid {__version__}; library of {library.phases} phases, digest "
        f"{library.digest[:12]}. A ring match is evidence, not a certified determination."
    )


def _pattern_title(answer: Identification, number: int) -> str:
    pattern = answer.patterns[number]
    title = safe(pattern.title) or safe(Path(pattern.source).name) or "typed rings"
    return f"{title} · {safe(pattern.probe.label)}"


def _heading(answer: Identification, width: float) -> tuple[list[Shape], float]:
    shapes: list[Shape] = []
    y = MARGIN + 14.0
    letters = int((width - 2 * MARGIN) / 10.5)
    for line in textwrap.wrap(safe(headline(answer)), letters, max_lines=3, placeholder=" …"):
        shapes.append(Text(MARGIN, y, line, "ink", 17.0, bold=True))
        y += _LINE
    bar = probability_bar(answer, width - 2 * MARGIN)
    shapes += placed(bar, MARGIN, y - 6)
    return shapes, y + bar.height + GAP


def probability_bar(answer: Identification, width: float) -> Picture:
    """How the probability is shared: the answers by rank, what is not listed, not in the library.

    The last is hatched, so that it is seen without colour.
    """
    parts = probability_parts(answer)
    shapes = bar_shapes(answer, width)
    x, y = 0.0, BAR_HEIGHT + 17
    for rank, (name, share) in enumerate(parts):
        if share < 0.005 and name != UNLISTED and rank:
            continue
        sign = f"{rank + 1}  " if name not in (UNLISTED, OTHERS) else ""
        words = f"{sign}{name} {probability_text(share)}"
        if name == UNLISTED:
            words = f"/// {words}"
        long = 6.6 * display_width(words) + 26
        if x and x + long > width:
            x, y = 0.0, y + 17
        shapes.append(Text(x, y, words, "ink", 12.0))
        x += long
    label = "; ".join(f"{name}: {probability_text(share)}" for name, share in parts)
    return Picture(width, y + 6, f"Probability. {label}", tuple(shapes))


def bar_shapes(answer: Identification, width: float) -> list[Shape]:
    """The bar alone, without words."""
    shapes: list[Shape] = [rectangle(0, 0, width, BAR_HEIGHT, "faint")]
    x = 0.0
    for rank, (name, share) in enumerate(probability_parts(answer)):
        wide = width * max(share, 0.0)
        if name == UNLISTED:
            shapes += _hatched(x, wide)
        elif wide > 0.2:
            role = "phase1" if rank == 0 and name != OTHERS else "soft"
            shapes.append(rectangle(x, 0, max(wide - 1.5, 0.2), BAR_HEIGHT, role))
        x += wide
    return shapes


UNLISTED = "something not in this library"
OTHERS = "other answers from this library"


def probability_parts(answer: Identification) -> list[tuple[str, float]]:
    """(Name, probability) of the first answers, of the rest, of what is in no library."""
    parts = [(_names(h), h.probability) for h in answer.hypotheses[:NAMED]]
    rest = 1 - sum(share for _, share in parts) - answer.unlisted_probability
    if rest >= 0.005:
        parts.append((OTHERS, rest))
    parts.append((UNLISTED, answer.unlisted_probability))
    return parts


def _names(hypothesis: Hypothesis) -> str:
    each = (LETTERS - 3 * (len(hypothesis.phases) - 1)) // len(hypothesis.phases)
    return " + ".join(short_phase_text(part.phase, each) for part in hypothesis.phases)


def _hatched(x: float, wide: float) -> list[Shape]:
    end = x + wide
    shapes: list[Shape] = [rectangle(x, 0, wide, BAR_HEIGHT, "ground")]
    start = x - BAR_HEIGHT
    while start < end:
        left, right = max(start, x), min(start + BAR_HEIGHT, end)
        if right > left:
            ends = ((left, BAR_HEIGHT - (left - start)), (right, BAR_HEIGHT - (right - start)))
            shapes.append(Line(ends, "ink", 1.2))
        start += 6.0
    outline = ((x, 0.0), (end, 0.0), (end, BAR_HEIGHT), (x, BAR_HEIGHT), (x, 0.0))
    shapes.append(Line(outline, "ink", 1.0))
    return shapes
