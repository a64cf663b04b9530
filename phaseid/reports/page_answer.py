"""One answer on the page: pictures, rings in a table, what speaks against it, its phases."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from phaseid.matching.identification import Hypothesis, Identification
from phaseid.reports.page_html import items, scrolling, tag, words
from phaseid.reports.page_phase import phase_part
from phaseid.reports.picture import Picture
from phaseid.reports.picture_axis import AxisName, axis_for
from phaseid.reports.picture_disc import disc, disc_of_two
from phaseid.reports.picture_scene import Scene, missing_key, ring_key, scene
from phaseid.reports.picture_sticks import sticks
from phaseid.reports.picture_svg import Store, svg
from phaseid.reports.plain import (
    hkl_text,
    phase_text,
    probability_text,
    safe,
    signed_text,
)
from phaseid.reports.text import against, measured_intensity

if TYPE_CHECKING:
    from phaseid.library import Library

HEADS = (
    ("ring", True),
    ("d measured, Å", True),
    ("phase", False),
    ("hkl", True),
    ("off by, sigma", True),
    ("d calculated, Å", True),
    ("I measured", True),
    ("I calculated", True),
    ("sigma of d, Å", True),
)


@dataclass(frozen=True, slots=True)
class Drawing:
    """How pictures are drawn: the axis of the sticks, where weak lines are, where images go.

    Of each pattern the `rings` strongest rings are shown.
    """

    axis: AxisName | None
    library: Library | None
    store: Store
    rings: int


def answer_section(answer: Identification, hypothesis: Hypothesis | None, drawing: Drawing) -> str:
    """Everything about one answer; with None the pattern alone, which nothing explains."""
    rank = "" if hypothesis is None else str(hypothesis.rank)
    scenes = [
        scene(answer, hypothesis, number, drawing.library).strongest(drawing.rings)
        for number in range(len(answer.patterns))
    ]
    parts = [f'<section class="answer" data-rank="{rank}" aria-labelledby="answer-{rank}">']
    parts.append(f'<h2 id="answer-{rank}">{words(_title(hypothesis))}</h2>')
    doubts = ""
    if hypothesis is not None:
        doubts = items("What speaks against it", against(answer, hypothesis), level=3)
    if len(scenes) == 2:
        caption = "Two patterns, one half each; the radius is 1/d after each fitted scale."
        parts.append(
            f'<div class="pattern"><figure>{_drawn(disc_of_two(*scenes), drawing)}'
            f"<figcaption>{caption}</figcaption></figure><div>{doubts}</div></div>"
        )
    beside = doubts if len(scenes) == 1 else ""
    captions = [_caption(one) for one in scenes]
    for k, one in enumerate(scenes):
        caption = "" if captions[k] in captions[:k] else captions[k]
        parts.append(_pattern(answer, one, drawing, beside, caption))
    if hypothesis is not None:
        parts.append(doubts if len(scenes) > 2 else "")
        alone = len(hypothesis.phases) == 1
        parts += [phase_part(part, k, alone=alone) for k, part in enumerate(hypothesis.phases)]
    parts.append("</section>")
    return "".join(parts)


def _title(hypothesis: Hypothesis | None) -> str:
    if hypothesis is None:
        return "The rings as measured"
    names = " + ".join(phase_text(part.phase) for part in hypothesis.phases)
    groups = sum(len(part.indistinguishable) for part in hypothesis.phases)
    alike = f" (with {groups} alike)" if groups else ""
    chance = probability_text(hypothesis.probability)
    return f"Answer {hypothesis.rank}: {names}{alike}, probability {chance}"


def _drawn(picture: Picture, drawing: Drawing) -> str:
    return svg(picture, hits=True, store=drawing.store)


def _pattern(
    answer: Identification, one: Scene, drawing: Drawing, beside: str, caption: str
) -> str:
    many = len(answer.patterns) > 1
    title = pattern_title(answer, one.number)
    heading = f"Pattern {one.number + 1}: {title}" if many else title
    told = f"<figcaption>{caption}</figcaption>" if caption else ""
    figures = f'<figure class="disc">{_drawn(disc(one), drawing)}{told}</figure>'
    stick_picture = _drawn(sticks(one, axis_for(one.pattern, drawing.axis)), drawing)
    figures += (
        f'<div><figure class="sticks">{scrolling(stick_picture, "Sticks, scrolls sideways")}'
        f"</figure>{beside}</div>"
    )
    table = scrolling(_table(one), f"Rings of {title}, scrolls sideways")
    note = f"Measured d / calculated d: {one.scale_text}"
    note += "." if one.scale is None else "; deviations are taken after it."
    note += " Calculated intensity: strongest line of each phase = 100."
    if len(one.measured) < len(one.pattern):
        note = f"Of {len(one.pattern)} rings the {len(one.measured)} strongest are shown. {note}"
    return (
        f'<div class="pattern"><h3>{words(heading)}</h3>{figures}</div>{table}'
        f'<p class="quiet">{words(note)}</p>'
    )


def _caption(one: Scene) -> str:
    left = "Left half measured"
    if one.pattern.disc is not None:
        left += ": the image itself, straightened, its rings marked where the halves meet"
    right = "right half calculated: lines that explain a ring, strong ones that are missing"
    if any(line.kind == "weak" for line in one.calculated):
        right += ", faintly those too weak to be seen"
    return (
        f"{left}; {right}. The line’s weight is its intensity, calculated ones laid on the "
        "measured phase by phase."
    )


def pattern_title(answer: Identification, number: int) -> str:
    """Title, file and probe of a pattern."""
    pattern = answer.patterns[number]
    title = safe(pattern.title) or safe(Path(pattern.source).name) or "typed rings"
    return f"{title}, {safe(pattern.probe.label)}"


def _table(one: Scene) -> str:
    heads = "".join(
        f'<th scope="col"{" class=n" if number else ""}>{name}</th>' for name, number in HEADS
    )
    rows = "".join(_ring_rows(one, ring.ring) for ring in one.measured)
    rows += _missing_rows(one)
    return (
        f"<table><caption>Ring by ring</caption><thead><tr>{heads}</tr></thead>"
        f"<tbody>{rows}</tbody></table>"
    )


def _ring_rows(one: Scene, ring: int) -> str:
    pattern, hypothesis = one.pattern, one.hypothesis
    measured = [str(ring + 1), f"{pattern.d_A[ring]:.4f}"]
    sigma = _two_digits(float(pattern.sigma_A[ring]))
    intensity = measured_intensity(pattern, ring)
    key = ring_key(one.number, ring)
    found = [
        a
        for a in (() if hypothesis is None else hypothesis.assignments)
        if (a.pattern, a.ring) == (one.number, ring)
    ]
    if not found or hypothesis is None:
        hint = _hint(one, ring)
        cells = [*measured, "", "", "", "", intensity, "", sigma]
        return _row(cells, f"? unexplained{': ' + words(hint) if hint else ''}", key, strong=True)
    rows = []
    for order, a in enumerate(found):
        formula = words(hypothesis.phases[a.phase].phase.formula)
        cells = [
            *(measured if order == 0 else ["", ""]),
            "",
            hkl_text(a.hkl),
            signed_text(a.residual_sigma),
            f"{a.d_calc_A:.4f}",
            intensity if order == 0 else "",
            f"{a.relative_intensity:.0f}",
            sigma if order == 0 else "",
        ]
        rows.append(_row(cells, tag(a.phase) + formula, key))
    return "".join(rows)


def _two_digits(value: float) -> str:
    """A small number to two digits, without an exponent: 0.0010."""
    decimals = 1 - int(f"{value:e}".partition("e")[2])
    return f"{value:.{max(decimals, 0)}f}"


def _hint(one: Scene, ring: int) -> str:
    if one.hypothesis is None:
        return ""
    return next(
        (u.hint for u in one.hypothesis.unexplained if (u.pattern, u.ring) == (one.number, ring)),
        "",
    )


def _missing_rows(one: Scene) -> str:
    if one.hypothesis is None:
        return ""
    own = [m for m in one.hypothesis.missing if m.pattern == one.number]
    drawn = {line.key for line in one.calculated}
    rows = []
    for order, m in enumerate(own):
        if missing_key(one.number, order) not in drawn:
            continue
        formula = words(one.hypothesis.phases[m.phase].phase.formula)
        spacing, intensity = f"{m.d_calc_A:.4f}", f"{m.relative_intensity:.0f}"
        cells = ["", "", "", hkl_text(m.hkl), "", spacing, "", intensity, ""]
        key = missing_key(one.number, order)
        rows.append(_row(cells, f"{tag(m.phase)}{formula} × missing", key, strong=True))
    return "".join(rows)


def _row(cells: list[str], phase_html: str, key: str, *, strong: bool = False) -> str:
    """A row of the table; the phase's cell comes as HTML, the others as words."""
    shown = "".join(
        f'<td class="{"n" if number else "wide"}">'
        f"{words(cell) if name != 'phase' else phase_html}</td>"
        for cell, (name, number) in zip(cells, HEADS, strict=True)
    )
    return f'<tr data-key="{key}" tabindex="0"{" class=left" if strong else ""}>{shown}</tr>'
