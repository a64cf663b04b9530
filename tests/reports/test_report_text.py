"""The terminal answer: the answer first, everything a reader needs, nothing wider than asked."""

from __future__ import annotations

from dataclasses import replace

import pytest

from phaseid.matching.identification import Identification, TypeMatch, Unexplained
from phaseid.reports.plain import (
    Column,
    cell_text,
    display_width,
    probability_text,
    safe,
    short_phase_text,
    shorten,
    signed_text,
    table,
    wrap,
)
from phaseid.reports.text import STANDING, as_text


def _with_name(answer: Identification, name: str) -> Identification:
    best = answer.hypotheses[0]
    part = replace(best.phases[0], phase=replace(best.phases[0].phase, name=name))
    best = replace(best, phases=(part, *best.phases[1:]))
    return replace(answer, hypotheses=(best, *answer.hypotheses[1:]))


def _plain(text: str) -> str:
    return " ".join(text.split())


def test_the_answer_comes_first_in_one_sentence(answer: Identification) -> None:
    assert _plain(as_text(answer)).startswith(
        "Aluminium (Al) or silver (Ag) (the rings cannot tell which) and periclase (MgO), "
        "probability 0.94 together."
    )


def test_the_parts_come_in_order(answer: Identification) -> None:
    text = as_text(answer)
    parts = [
        "Verdict: identified",
        "Alternatives",
        "something not in this library",
        "Why: ring by ring",
        "What speaks against it",
        "These rings cannot tell it from:",
        "silver (Ag) Fm-3m, a = 4.0862 Å; COD 0000001, ag.cif",
        "To tell them apart: calibrate the camera constant to 0.4 %",
        "Remarks",
        "Safety",
        "A ring match is evidence",
    ]
    places = [text.index(part) for part in parts]
    assert places == sorted(places)


def test_each_ring_has_its_row(answer: Identification) -> None:
    rows = [line.split() for line in as_text(answer).splitlines()]
    assert ["2", "2.3450", "2.3380", "1", "1", "1", "Al", "-0.3", "vs", "100"] in rows
    assert ["5", "1.9000", "unexplained"] in rows


def test_what_speaks_against_it_is_named(answer: Identification) -> None:
    text = " ".join(as_text(answer).split())
    assert "Ring 5 at 1.9000 Å is unexplained: close to the 110 ring of ice" in text
    assert "Al should also show 3 1 1 at 1.2210 Å" in text


def test_scale_share_cell_and_defaults_are_told(answer: Identification) -> None:
    text = " ".join(as_text(answer).split())
    assert "1.0031 ± 0.0007" in text
    assert "Share by weight: 80 ± 5 %" in text
    assert "Refined cell: a = 4.0501 ± 0.0020 Å" in text
    assert "fibre axis [1 1 1]" in text
    assert "0.5 % of each spacing is assumed" in text
    assert STANDING in text


@pytest.mark.parametrize("width", [60, 72, 80, 100])
def test_no_line_is_wider_than_asked(answer: Identification, width: int) -> None:
    long = _with_name(answer, "a mineral with quite a long name that goes on and on for ever")
    assert max(len(line) for line in as_text(long, width=width).splitlines()) <= width


def test_names_from_files_cannot_steer_the_terminal(answer: Identification) -> None:
    text = as_text(_with_name(answer, "evil\x1b[2J\x07\u202egold\nVerdict: none"))
    assert not {"\x1b", "\x07", "\u202e"} & set(text)
    assert "\nVerdict: none" not in text


def test_bold_adds_no_words(answer: Identification) -> None:
    bold = as_text(answer, bold=True)
    assert "\033[1mAlternatives\033[0m" in bold
    assert bold.replace("\033[1m", "").replace("\033[0m", "") == as_text(answer)


def test_ambiguous_is_said_first(answer: Identification) -> None:
    text = as_text(replace(answer, verdict="ambiguous"))
    assert text.startswith("Undecided; the likeliest is aluminium (Al) or silver (Ag)")


def test_no_match_names_the_unlisted_first(answer: Identification) -> None:
    best = replace(answer.hypotheses[0], probability=0.1)
    none = replace(answer, verdict="no-match", hypotheses=(best,), unlisted_probability=0.85)
    text = as_text(none)
    assert text.startswith("Probably something not in this library, probability 0.85. The nearest")
    assert "What to do next" in text
    assert "phaseid near 2.112 2.345 2.031" in " ".join(text.split())


def test_an_answer_that_explains_no_ring_is_not_told_ring_by_ring(answer: Identification) -> None:
    rings = range(len(answer.patterns[0]))
    idle = replace(
        answer.hypotheses[1],
        assignments=(),
        unexplained=tuple(Unexplained(0, ring) for ring in rings),
        missing=(),
    )
    text = as_text(replace(answer, verdict="no-match", hypotheses=(idle,)))
    assert "nearest answer" not in text
    assert "Why: ring by ring" not in text
    assert "0/5" in text


def test_rings_left_over_are_told_at_once(answer: Identification) -> None:
    best = answer.hypotheses[0]
    assert "probability 0.94 together. 1 of 5 rings remains unexplained." in _plain(as_text(answer))
    few = replace(
        best,
        assignments=best.assignments[:2],
        unexplained=tuple(Unexplained(0, ring) for ring in (2, 3, 4)),
    )
    text = _plain(as_text(replace(answer, hypotheses=(few,))))
    assert "But 3 of 5 rings remain unexplained: most of this is something else." in text
    clean = replace(best, unexplained=(), assignments=best.assignments * 2)
    assert "unexplained" not in _plain(as_text(replace(answer, hypotheses=(clean,))))[:200]


def test_a_slip_is_told_before_the_alternatives_and_once(answer: Identification) -> None:
    slip = "All spacings are below 0.5 Å: were they in nm? Then name the column d_nm."
    pattern = answer.patterns[0]
    doubtful = replace(pattern, remarks=(*pattern.remarks, slip), slips=(slip,))
    text = _plain(as_text(replace(answer, patterns=(doubtful,))))
    assert f"Check first: {slip} Alternatives" in text
    assert text.count("were they in nm") == 1


def test_a_share_of_all_is_not_told(answer: Identification) -> None:
    best = answer.hypotheses[0]
    alone = replace(best, phases=best.phases[:1], assignments=best.assignments[1:])
    alone = replace(alone, assignments=tuple(replace(a, phase=0) for a in alone.assignments))
    assert "Share by weight" not in as_text(replace(answer, hypotheses=(alone,)))


def test_an_empty_answer_still_answers(answer: Identification) -> None:
    text = as_text(replace(answer, verdict="no-match", hypotheses=(), unlisted_probability=1.0))
    assert text.startswith("No phase in this library explains these rings")
    assert STANDING in " ".join(text.split())


def test_a_structure_type_is_offered(answer: Identification) -> None:
    like = answer.hypotheses[0].phases[0].phase
    found = replace(answer, type_matches=(TypeMatch("rock salt", like, 4.44, 0.01, 0.3),))
    assert "rock salt (as in aluminium (Al)) with a = 4.4400 ± 0.0100 Å" in as_text(found)


def test_without_a_match_the_structure_type_comes_before_the_answers(
    answer: Identification,
) -> None:
    like = answer.hypotheses[0].phases[0].phase
    found = replace(answer, type_matches=(TypeMatch("rock salt", like, 4.44, 0.01, 0.9),))
    none = as_text(replace(found, verdict="no-match"))
    assert none.index("Structure types that would fit") < none.index("Alternatives")
    some = as_text(found)
    assert some.index("Structure types that would fit") > some.index("Alternatives")


def test_a_caution_says_whom_it_is_about(answer: Identification) -> None:
    assert "\n  periclase (MgO): Fine powders: avoid dust" in as_text(answer)


def test_a_caution_on_a_phase_that_is_not_named_is_left_out(answer: Identification) -> None:
    best = answer.hypotheses[0]
    part = best.phases[0]
    silver = part.indistinguishable[0]
    toxic = replace(silver, name="hidden", cautions=("Toxic.",))
    for others, told in (((toxic,), True), ((silver,) * 8 + (toxic,), False)):
        longer = replace(part, indistinguishable=others)
        text = as_text(
            replace(answer, hypotheses=(replace(best, phases=(longer, *best.phases[1:])),))
        )
        assert ("hidden (Ag): Toxic." in text) == told


def test_remarks_are_told_once(answer: Identification) -> None:
    own = answer.patterns[0].remarks
    text = as_text(replace(answer, remarks=answer.remarks + own))
    assert text.count("No sigma column") == 1
    best = replace(
        answer.hypotheses[0],
        assignments=(),
        unexplained=tuple(Unexplained(p, r) for p in (0, 1) for r in range(5)),
    )
    both = replace(answer, patterns=answer.patterns * 2, remarks=own, hypotheses=(best,))
    assert as_text(both).count("No sigma column") == 2
    assert "Pattern 2: No sigma column" in as_text(both)


def test_a_long_group_is_cut_short(answer: Identification) -> None:
    best = answer.hypotheses[0]
    part = replace(best.phases[0], indistinguishable=best.phases[0].indistinguishable * 50)
    best = replace(best, phases=(part, *best.phases[1:]))
    text = as_text(replace(answer, hypotheses=(best,)))
    assert "one of 50 others that these rings allow as well, such as silver (Ag)" in _plain(text)
    assert "and 42 more; --json lists them all" in text
    assert text.count("silver (Ag) Fm-3m") == 8
    best = replace(best, phases=(replace(part, separators=part.separators * 50),))
    best = replace(best, assignments=best.assignments[1:2], missing=(), unexplained=())
    left = tuple(Unexplained(0, ring) for ring in (0, 2, 3, 4))
    text = as_text(replace(answer, hypotheses=(replace(best, unexplained=left),)))
    assert text.count("calibrate the camera constant to 0.4 %") == 8


def test_a_long_list_of_rings_left_is_cut_short(answer: Identification) -> None:
    best = answer.hypotheses[0]
    many = replace(best, unexplained=best.unexplained * 20, missing=best.missing * 20)
    text = as_text(replace(answer, hypotheses=(many,)))
    assert text.count("Ring 5 at 1.9000 Å is unexplained") == 12
    assert "and 8 more rings are unexplained" in text
    assert "and 8 more lines should be there" in text


def test_several_patterns_are_told_apart(answer: Identification) -> None:
    best = answer.hypotheses[0]
    both = replace(
        best,
        assignments=best.assignments + tuple(replace(a, pattern=1) for a in best.assignments),
        unexplained=best.unexplained + tuple(replace(u, pattern=1) for u in best.unexplained),
    )
    text = as_text(replace(answer, patterns=answer.patterns * 2, hypotheses=(both,)))
    assert "ring by ring, pattern 1 (Foil A" in text
    assert "ring by ring, pattern 2 (Foil A" in text
    assert "Ring 5 of pattern 2 at 1.9000 Å is unexplained" in text
    assert "8/10" in text


@pytest.mark.parametrize(
    ("value", "text"), [(0.93, "0.93"), (0.9999, ">0.99"), (1.0, ">0.99"), (0.001, "<0.01")]
)
def test_no_probability_reads_as_certainty(value: float, text: str) -> None:
    assert probability_text(value) == text


@pytest.mark.parametrize(
    ("cell", "text"),
    [
        ((4.05, 4.05, 4.05, 90, 90, 90), "a = 4.0500 Å"),
        ((4.758, 4.758, 12.99, 90, 90, 120), "a = 4.7580, c = 12.9900 Å, γ = 120°"),
        ((5.0, 6.0, 7.0, 90, 99.5, 90), "a = 5.0000, b = 6.0000, c = 7.0000 Å, β = 99.5°"),
    ],
)
def test_a_cell_is_written_without_repetition(cell: tuple[float, ...], text: str) -> None:
    assert cell_text(cell) == text


@pytest.mark.parametrize(
    ("value", "text"), [(-0.01, "0.0"), (0.0, "0.0"), (0.26, "+0.3"), (-3.0, "-3.0")]
)
def test_a_deviation_has_a_sign_unless_it_is_none(value: float, text: str) -> None:
    assert signed_text(value) == text


def test_white_space_and_controls_become_harmless() -> None:
    assert safe("a\tb\r\n c\x00\u2028\x9b") == "a b c? ?"


def test_a_long_name_keeps_its_formula(answer: Identification) -> None:
    phase = answer.hypotheses[0].phases[0].phase
    long = replace(phase, name="a name that is much longer than there is room for", formula="Al2O3")
    assert short_phase_text(long, 30) == "a name that is much l… (Al2O3)"
    assert short_phase_text(phase, 30) == "aluminium (Al)"
    heavy = replace(long, formula="Na55.057Al56.081Si135.977O384.115")
    assert len(short_phase_text(heavy, 30)) == 30


def test_a_table_shrinks_its_flexible_column_first() -> None:
    columns = (Column("n"), Column("name", "left", flexible=True))
    lines = table(columns, [["1", "x" * 80]], 40)
    assert all(len(line) <= 40 for line in lines)
    assert lines[1].endswith("…")


def test_wrapping_keeps_the_indent() -> None:
    assert wrap("one two three", 9, first="- ", indent="  ") == ["- one two", "  three"]


# Unicode Standard Annex #11: ideographs are two columns wide, combining marks none
def test_wide_letters_keep_columns_straight() -> None:
    rows = [["水晶", "1"], ["e\u0301ta", "2"], ["quartz", "3"]]
    lines = table([Column("name", "left"), Column("no.")], rows, 40)
    assert [display_width(line) for line in lines] == [13] * 4
    assert display_width(shorten("水晶 quartz", 5)) <= 5
