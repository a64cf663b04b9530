"""The answers to choose from: a bar of their probabilities, and a row each."""

from __future__ import annotations

from phaseid.matching.identification import Hypothesis, Identification
from phaseid.reports.page_html import prose, scrolling, words
from phaseid.reports.picture import Picture
from phaseid.reports.picture_sheet import (
    BAR_HEIGHT,
    OTHERS,
    UNLISTED,
    bar_shapes,
    probability_parts,
)
from phaseid.reports.picture_svg import svg
from phaseid.reports.plain import marked_text, probability_text

LISTED = 50


def choice(answer: Identification, drawn: int) -> str:
    """The probability as a bar, and the answers to choose from."""
    width = 1000.0
    label = "; ".join(f"{name} {probability_text(p)}" for name, p in probability_parts(answer))
    bar = svg(Picture(width, BAR_HEIGHT, f"Probability: {label}", tuple(bar_shapes(answer, width))))
    bar = bar.replace('class="picture"', 'class="picture bar" preserveAspectRatio="none"', 1)
    rings = sum(map(len, answer.patterns))
    listed = answer.hypotheses[:LISTED]
    rows = [_row(h, rings, drawn) for h in listed]
    rest = 1 - sum(h.probability for h in listed) - answer.unlisted_probability
    if rest >= 0.005 or len(listed) < len(answer.hypotheses):
        beyond = len(answer.hypotheses) - len(listed)
        rows.append(_share(rest, f"{OTHERS}{f', {beyond} of them asked for' if beyond else ''}"))
    rows.append(_share(answer.unlisted_probability, f"hatched: {UNLISTED}"))
    heads = "".join(
        f'<th scope="col"{" class=n" if number else ""}>{name}</th>'
        for name, number in (("rank", 1), ("probability", 1), ("rings", 1), ("phases", 0))
    )
    table = (
        "<table><caption>The answers; the bar shows them in this order</caption>"
        f"<thead><tr>{heads}</tr></thead><tbody>{''.join(rows)}</tbody></table>"
    )
    undrawn = len(answer.hypotheses) - drawn
    more = (
        f'<p class="quiet">The last {undrawn} are not drawn, to keep the page small; '
        "<code>phaseid identify --json</code> tells all of them.</p>"
        if undrawn > 0
        else ""
    )
    return f"{bar}{scrolling(table, 'Answers, scrolls sideways')}{more}"


def _row(h: Hypothesis, rings: int, drawn: int) -> str:
    names = prose(" + ".join(marked_text(part.phase) for part in h.phases))
    groups = sum(len(part.indistinguishable) for part in h.phases)
    alike = f" (with {groups} alike)" if groups else ""
    explained = len({(a.pattern, a.ring) for a in h.assignments})
    radio = ""
    if h.rank <= drawn:
        checked = " checked" if h.rank == 1 else ""
        radio = (
            f'<input class="choose" type="radio" name="answer" value="{h.rank}" '
            f'id="choose-{h.rank}"{checked}>'
        )
        names = f'<label for="choose-{h.rank}">{names}</label>'
    cells = (str(h.rank), probability_text(h.probability), f"{explained}/{rings}")
    numbers = "".join(f'<td class="n">{cell}</td>' for cell in cells)
    return f'<tr>{numbers}<td class="wide">{radio}{names}{alike}</td></tr>'


def _share(probability: float, name: str) -> str:
    return (
        f'<tr><td></td><td class="n">{words(probability_text(probability))}</td><td></td>'
        f'<td class="wide">{name}</td></tr>'
    )
