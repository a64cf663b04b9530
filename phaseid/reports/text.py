"""An identification as text: the answer first, then why, then what speaks against it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

from phaseid.matching.identification import Hypothesis, Identification, PhaseAnswer
from phaseid.reports.headline import doubts, headline, next_steps
from phaseid.reports.plain import (
    Column,
    cell_text,
    hkl_text,
    marked_text,
    phase_text,
    probability_text,
    safe,
    signed_text,
    source_text,
    table,
    wrap,
)
from phaseid.reports.strip import strip
from phaseid.rings.ringlist import RingList

STANDING = (
    "A ring match is evidence, not a certified determination. For decisions on health, safety or "
    "law use an accredited laboratory and the local codes."
)
SHOWN_ALIKE, SHOWN_CAUTIONED, SHOWN_AGAINST = 8, 3, 12
VERDICTS = {
    "identified": "identified (one answer holds at least 0.9 of the probability)",
    "ambiguous": "ambiguous (no answer reaches a probability of 0.9)",
    "no-match": "no match (all of this library together holds less than 0.5)",
}
TYPES_FIT = "Structure types that would fit"
RING_COLUMNS = (
    Column("ring"),
    Column("d meas.\nÅ"),
    Column("d calc.\nÅ"),
    Column("hkl"),
    Column("phase", "left", flexible=True),
    Column("off by\nsigma"),
    Column("I\nmeas."),
    Column("I\ncalc."),
)


def as_text(answer: Identification, *, width: int = 80, bold: bool = False) -> str:
    """Return the identification as text of at most `width` (≥ 60) characters a line.

    `bold` marks headings with the terminal's bold face; nothing is said by it alone.
    """
    page = _Page(max(width, 60), bold)
    page.paragraph(headline(answer))
    page.paragraph(f"Verdict: {VERDICTS[answer.verdict]}.")
    for doubt in doubts(answer):
        page.paragraph(doubt)
    page.items("What to do next", next_steps(answer))
    if answer.verdict == "no-match":
        page.items(TYPES_FIT, types_that_fit(answer))
    _alternatives(page, answer)
    best = answer.hypotheses[0] if answer.hypotheses else None
    if best is not None and (best.assignments or answer.verdict != "no-match"):
        for number in range(len(answer.patterns)):
            _rings(page, answer, best, number)
            page.drawing(strip(answer, number, page.width))
        page.items("What speaks against it", against(answer, best))
        for part in best.phases:
            _phase(page, part, alone=len(best.phases) == 1)
    if answer.verdict != "no-match":
        page.items(TYPES_FIT, types_that_fit(answer))
    page.items("Remarks", remarks(answer))
    page.items("Safety", cautions(answer))
    page.blank()
    library = answer.library
    page.paragraph(
        f"Library: {library.phases} phases, digest {library.digest[:12]}, {Path(library.path).name}"
    )
    page.paragraph(STANDING)
    return page.text()


class _Page:
    """Lines of text under headings, no wider than asked."""

    def __init__(self, width: int, bold: bool) -> None:
        self.width = width
        self._bold = bold
        self._lines: list[str] = []

    def blank(self) -> None:
        if self._lines and self._lines[-1]:
            self._lines.append("")

    def paragraph(self, text: str) -> None:
        self._lines += wrap(text, self.width, indent="")

    def heading(self, text: str) -> None:
        self.blank()
        lines = wrap(text, self.width, indent="")
        self._lines += [f"\033[1m{line}\033[0m" for line in lines] if self._bold else lines

    def item(self, text: str, *, indent: str = "  ") -> None:
        self._lines += wrap(text, self.width, first=indent, indent=indent + "  ")

    def items(self, heading: str, texts: Sequence[str]) -> None:
        if texts:
            self.heading(heading)
            for text in texts:
                self.item(text)

    def line(self, text: str) -> None:
        self._lines.append(text)

    def row(self, rank: str, probability: float, rings: str, text: str) -> None:
        first = f"{rank:>6}  {probability_text(probability):>5}  {rings:>6}  "
        self._lines += wrap(text, self.width, first=first, indent=" " * (len(first) + 2))

    def drawing(self, lines: Sequence[str]) -> None:
        if lines:
            self._lines += ["", *lines]

    def table(self, columns: tuple[Column, ...], rows: list[list[str]]) -> None:
        self._lines += table(columns, rows, self.width)

    def text(self) -> str:
        return "\n".join(self._lines).rstrip() + "\n"


def _alternatives(page: _Page, answer: Identification) -> None:
    page.heading("Alternatives")
    rings = sum(len(pattern) for pattern in answer.patterns)
    page.line(f"{'rank':>6}  {'prob.':>5}  {'rings':>6}  phases")
    for h in answer.hypotheses:
        explained = len({(a.pattern, a.ring) for a in h.assignments})
        groups = sum(len(part.indistinguishable) for part in h.phases)
        names = " + ".join(marked_text(part.phase) for part in h.phases)
        alike = f" (with {groups} alike)" if groups else ""
        page.row(str(h.rank), h.probability, f"{explained}/{rings}", names + alike)
    rest = 1 - sum(h.probability for h in answer.hypotheses) - answer.unlisted_probability
    if rest >= 0.005:
        page.row("", rest, "", "other answers from this library, not listed")
    page.row("", answer.unlisted_probability, "", "something not in this library")


def _rings(page: _Page, answer: Identification, best: Hypothesis, number: int) -> None:
    pattern = answer.patterns[number]
    many = len(answer.patterns) > 1
    title = safe(pattern.title) or safe(pattern.source) or "typed rings"
    page.heading(
        f"Why: ring by ring{f', pattern {number + 1}' if many else ''} "
        f"({title}, {safe(pattern.probe.label)})"
    )
    rows: list[list[str]] = []
    for ring in range(len(pattern)):
        found = [a for a in best.assignments if (a.pattern, a.ring) == (number, ring)]
        measured = [str(ring + 1), f"{pattern.d_A[ring]:.4f}"]
        intensity = measured_intensity(pattern, ring)
        if not found:
            rows.append([*measured, "", "", "unexplained", "", intensity, ""])
        for order, a in enumerate(found):
            rows.append(
                [
                    *(measured if order == 0 else ["", ""]),
                    f"{a.d_calc_A:.4f}",
                    hkl_text(a.hkl),
                    best.phases[a.phase].phase.formula,
                    signed_text(a.residual_sigma),
                    intensity if order == 0 else "",
                    f"{a.relative_intensity:.0f}",
                ]
            )
    page.table(RING_COLUMNS, rows)
    for scale in best.scale:
        if scale.pattern == number:
            told = f"{scale.factor:.4f} ± {scale.sigma:.4f}"
            page.item(
                f"Fitted scale, measured d / calculated d: {told}; deviations are taken after it. "
                "I calc.: strongest line of each phase = 100"
                if number == 0
                else f"Fitted scale: {told}"
            )


def measured_intensity(pattern: RingList, ring: int) -> str:
    """Write a ring's measured intensity: its grade, its number, or nothing."""
    if pattern.grades[ring]:
        return pattern.grades[ring]
    value = float(pattern.intensity[ring])
    return "" if math.isnan(value) else f"{value:.0f}"


def against(answer: Identification, best: Hypothesis) -> list[str]:
    """Return what speaks against an answer: rings left, lines missing, the worst deviation."""
    many = len(answer.patterns) > 1
    items = []
    for u in best.unexplained[:SHOWN_AGAINST]:
        d_A = answer.patterns[u.pattern].d_A[u.ring]
        where = f" of pattern {u.pattern + 1}" if many else ""
        hint = f": {u.hint}" if u.hint else ""
        items.append(f"Ring {u.ring + 1}{where} at {d_A:.4f} Å is unexplained{hint}")
    if (more := len(best.unexplained) - SHOWN_AGAINST) > 0:
        items.append(f"and {more} more rings are unexplained")
    for m in best.missing[:SHOWN_AGAINST]:
        where = f" in pattern {m.pattern + 1}" if many else ""
        formula = safe(best.phases[m.phase].phase.formula)
        items.append(
            f"{formula} should also show {hkl_text(m.hkl)} at "
            f"{m.d_calc_A:.4f} Å (calculated intensity {m.relative_intensity:.0f} of 100){where}"
        )
    if (more := len(best.missing) - SHOWN_AGAINST) > 0:
        items.append(f"and {more} more lines should be there")
    worst = max(best.assignments, key=lambda a: abs(a.residual_sigma), default=None)
    if worst is not None and abs(worst.residual_sigma) > 3:
        where = f" of pattern {worst.pattern + 1}" if many else ""
        off = signed_text(worst.residual_sigma)
        items.append(f"Ring {worst.ring + 1}{where} lies {off} sigma from its line")
    if not items:
        items.append("Nothing: every ring is explained and no strong line is missing")
    return items


def _phase(page: _Page, part: PhaseAnswer, *, alone: bool) -> None:
    phase = part.phase
    page.heading(phase_text(phase))
    page.item(
        f"{safe(phase.space_group_symbol)} (no. {phase.space_group_number}), "
        f"{cell_text(phase.cell)}; id {safe(phase.phase_id)}"
    )
    page.item(f"Source: {source_text(phase)}")
    if phase.source.reference:
        page.item(f"Reference: {phase.source.reference}")
    if part.share is not None and not alone:
        error = "" if part.share_sigma is None else f" ± {100 * part.share_sigma:.0f}"
        page.item(f"Share by weight: {100 * part.share:.0f}{error} %")
    if part.cell is not None:
        page.item(f"Refined cell: {cell_text(part.cell, part.cell_sigma)}")
    if part.fibre_axis is not None:
        page.item(f"Textured film: fibre axis [{hkl_text(part.fibre_axis)}] along the beam")
    for finding in phase.findings:
        page.item(f"About the entry: {finding.message}")
    if part.entries:
        page.item(
            f"{len(part.entries) + 1} entries of this phase in the library; this one stands for "
            "them, --json lists the others"
        )
    for k, (named, tell) in enumerate(alike(part)):
        if k == 0:
            page.item("These rings cannot tell it from:")
        page.item(named, indent="    ")
        if tell:
            page.item(f"To tell them apart: {tell}", indent="      ")
    more = len(part.indistinguishable) - SHOWN_ALIKE
    if more > 0:
        page.item(f"and {more} more; --json lists them all", indent="    ")


def alike(part: PhaseAnswer) -> list[tuple[str, str]]:
    """Return the first phases that the rings cannot tell from it, each with what would."""
    tells = {separator.other.phase_id: separator.text for separator in part.separators}
    return [
        (
            f"{marked_text(other)}, {cell_text(other.cell)}; {source_text(other)}",
            tells.get(other.phase_id, ""),
        )
        for other in part.indistinguishable[:SHOWN_ALIKE]
    ]


def types_that_fit(answer: Identification) -> list[str]:
    """Return structure types with another cell that would explain the rings."""
    return [
        f"{match.type_name} (as in {phase_text(match.like)}) with a = {match.a_A:.4f} "
        f"± {match.a_sigma_A:.4f} Å, probability {probability_text(match.probability)}"
        for match in answer.type_matches
    ]


def remarks(answer: Identification) -> list[str]:
    """Return remarks on the whole, then on each pattern, each once; slips stand at the top."""
    many = len(answer.patterns) > 1
    own = [
        (f"Pattern {number}: {remark}" if many else remark, remark)
        for number, pattern in enumerate(answer.patterns, start=1)
        for remark in pattern.remarks
    ]
    slips = {slip for pattern in answer.patterns for slip in pattern.slips}
    common = [remark for remark in answer.remarks if remark not in {plain for _, plain in own}]
    return list(dict.fromkeys([*common, *(told for told, plain in own if plain not in slips)]))


def cautions(answer: Identification, answers: int | None = None) -> list[str]:
    """Return cautions on the phases that this text names, each with the phases it is about.

    Those of the first `answers` alone, where that is given.
    """
    told_of = answer.hypotheses[:answers]
    named = [part.phase for hypothesis in told_of for part in hypothesis.phases]
    for part in answer.hypotheses[0].phases if answer.hypotheses else ():
        named += part.indistinguishable[:SHOWN_ALIKE]
    told = []
    for caution in dict.fromkeys(caution for phase in named for caution in phase.cautions):
        names = dict.fromkeys(phase_text(phase) for phase in named if caution in phase.cautions)
        more = f" and {len(names) - SHOWN_CAUTIONED} more" if len(names) > SHOWN_CAUTIONED else ""
        told.append(f"{', '.join([*names][:SHOWN_CAUTIONED])}{more}: {caution}")
    return told
