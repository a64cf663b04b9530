"""The first sentences of an identification, and what to do when they are no answer."""

from __future__ import annotations

from phaseid.matching.identification import Hypothesis, Identification, PhaseAnswer
from phaseid.reports.plain import phase_text, probability_text

ASKED = 3  # rings named in the example of `phaseid near`


def headline(answer: Identification) -> str:
    """Return the answer in a sentence or two: phases, probability, rings left over."""
    unlisted = probability_text(answer.unlisted_probability)
    nothing = f"something not in this library, probability {unlisted}"
    if not answer.hypotheses:
        return f"No phase in this library explains these rings: {nothing}."
    best = answer.hypotheses[0]
    grouped = any(part.indistinguishable for part in best.phases)
    together = " together" if grouped else ""
    chance = f"probability {probability_text(best.probability)}{together}"
    named = _joined([_or_its_like(part) for part in best.phases])
    if answer.verdict == "no-match":
        if not best.assignments:
            return f"Probably {nothing}."
        return f"Probably {nothing}. The nearest answer is {named}, {chance}."
    if answer.verdict == "ambiguous":
        return f"Undecided; the likeliest is {named}, {chance}.{_left_over(answer, best)}"
    return f"{named[0].upper()}{named[1:]}, {chance}.{_left_over(answer, best)}"


def doubts(answer: Identification) -> list[str]:
    """Return what makes a pattern itself doubtful, to be read before the answer is believed."""
    many = len(answer.patterns) > 1
    return [
        f"Check first{f', pattern {number}' if many else ''}: {slip}"
        for number, pattern in enumerate(answer.patterns, start=1)
        for slip in pattern.slips
    ]


def next_steps(answer: Identification) -> list[str]:
    """Return what to do where the library explains nothing, else nothing."""
    if answer.verdict != "no-match":
        return []
    pattern = answer.patterns[0]
    intensity = [float(value) for value in pattern.intensity]
    strongest = sorted(range(len(pattern)), key=lambda ring: -_strength(intensity[ring]))
    spacings = " ".join(f"{pattern.d_A[ring]:.4g}" for ring in sorted(strongest[:ASKED]))
    return [
        "Check the unit, the probe and the scale: one wrong factor moves every ring. "
        "A standard on the same instrument tells.",
        "Where --must, --only or --not were given, ask once without: an element excluded by "
        "mistake hides the right phase.",
        f"See what has strong lines there: phaseid near {spacings}",
        "Add structures of your field as CIF files: phaseid library add FILES",
    ]


def _strength(intensity: float) -> float:
    return intensity if intensity == intensity else -1.0  # not a number: never judged


def _joined(names: list[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def _or_its_like(part: PhaseAnswer) -> str:
    named, others = phase_text(part.phase), part.indistinguishable
    if not others:
        return named
    first = phase_text(others[0])
    if len(others) == 1:
        return f"{named} or {first} (the rings cannot tell which)"
    return f"{named} or one of {len(others)} others that these rings allow as well, such as {first}"


def _left_over(answer: Identification, best: Hypothesis) -> str:
    left, rings = len(best.unexplained), sum(map(len, answer.patterns))
    if not left:
        return ""
    if 2 * left < rings:
        return f" {left} of {rings} rings remain{'s' * (left == 1)} unexplained."
    return f" But {left} of {rings} rings remain unexplained: most of this is something else."
