"""The strip of characters under the table of a wide terminal."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from phaseid.matching.identification import Identification
from phaseid.reports.strip import WIDE_ENOUGH, strip
from phaseid.reports.text import as_text


def _rows(answer: Identification, width: int = 100) -> dict[str, str]:
    lines = strip(answer, 0, width)
    return {line[:9].strip(): line[9:] for line in lines}


def test_rings_stand_over_their_lines(answer: Identification) -> None:
    # sorted by falling d: Al 111, MgO 200, Al 200, foreign ring, Al 220, Al 311 (missing)
    rows = _rows(answer)
    assert rows["meas."].split() == ["|", "|", "|", "?", "|"]
    assert rows["calc."].split() == ["A", "B", "A", "A", "x"]
    where = [k for k, sign in enumerate(rows["meas."]) if sign == "|"]
    assert where == [k for k, sign in enumerate(rows["calc."]) if sign in "AB"]


def test_distances_are_those_of_ln_d(answer: Identification) -> None:
    # 111, 220 and 311 of a cubic crystal: ln d differs by ln(8/3)/2 and ln(11/8)/2
    row = _rows(answer)["calc."]
    first, last, missing = row.index("A"), row.rindex("A"), row.index("x")
    ratio = math.log(8 / 3) / math.log(11 / 8)
    assert (last - first) / (missing - last) == pytest.approx(ratio, rel=0.1)


def test_strong_rings_stand_higher(answer: Identification) -> None:
    top = strip(answer, 0, 100)[0]
    assert top.split() == ["|", "|", "|", "|"]  # 100, 60, 45, 30 of 100; the fifth was not given


def test_several_in_one_place_are_told(answer: Identification) -> None:
    best = answer.hypotheses[0]
    doubled = replace(best.assignments[1], phase=1)
    both = replace(best, assignments=(*best.assignments, doubled))
    assert "*" in _rows(replace(answer, hypotheses=(both,)))["calc."]


@pytest.mark.parametrize("width", [WIDE_ENOUGH, 100])
def test_the_strip_is_part_of_a_wide_answer_only(answer: Identification, width: int) -> None:
    text = as_text(answer, width=width)
    assert "  d in Å " in text
    assert max(map(len, text.splitlines())) <= width
    assert "  d in Å " not in as_text(answer, width=WIDE_ENOUGH - 1)


def test_nothing_to_draw_draws_nothing(answer: Identification) -> None:
    assert strip(replace(answer, hypotheses=()), 0, 100) == []
