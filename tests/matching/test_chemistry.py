"""Element constraints: the periodic table is the only outside fact, checked against gemmi's."""

from __future__ import annotations

import gemmi
import numpy as np
import pytest

from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.matching.chemistry import Chemistry, parse_elements
from phaseid.matching.field import log_prior_of


@pytest.mark.parametrize("text", ["Al,O", "al, o", "O;AL", " Al  O ", "Al,,O,", "O,Al,O"])
def test_a_list_of_elements_may_be_written_in_any_usual_way(text: str) -> None:
    assert parse_elements(text, "--must") == {"Al", "O"}


def test_every_element_of_the_periodic_table_is_known() -> None:
    for z in range(1, 104):
        symbol = gemmi.Element(z).name
        assert parse_elements(symbol.lower(), "--only") == {symbol}


@pytest.mark.parametrize("text", ["D", "d", "T", "D,H"])
def test_isotopes_of_hydrogen_count_as_hydrogen(text: str) -> None:
    assert parse_elements(text, "--must") == {"H"}


def test_an_absent_option_names_no_element() -> None:
    assert parse_elements(None, "--must") == frozenset()


@pytest.mark.parametrize(("text", "word"), [("Al,Xx,O", "Xx"), ("Fe Qu", "Qu"), ("iron", "iron")])
def test_a_caret_stands_under_the_word_that_is_no_element(text: str, word: str) -> None:
    with pytest.raises(InputError) as caught:
        parse_elements(text, "--must")
    lines = str(caught.value).splitlines()
    quoted = next(i for i, line in enumerate(lines) if line.strip() == text)
    assert lines[quoted + 1].index("^") == lines[quoted].index(word)
    assert word in lines[0]
    assert "--must" in lines[0]


def test_close_symbols_are_offered() -> None:
    with pytest.raises(InputError, match=r"Close symbols:.*Al"):
        parse_elements("Alu", "--not")


@pytest.mark.parametrize("text", ["", "  ", ",;,"])
def test_an_empty_list_is_an_error(text: str) -> None:
    with pytest.raises(InputError, match="no element"):
        parse_elements(text, "--only")


@pytest.mark.parametrize(
    ("must", "only", "exclude", "words"),
    [
        ("Al,O", None, "O,H", "--must and --not both name O"),
        ("Al,O", "Al,Si", None, "--must names O, which --only does not allow"),
        (None, "Al,O", "O,Al", "--only and --not leave no element"),
        ("D", None, "H", "--must and --not both name H"),
        ("Al", "Al?,O", None, "--must requires Al, which --only puts in doubt"),
        ("Fe?", None, None, "--must: an element in doubt is neither required nor excluded"),
        (None, None, "Fe?", "--not: an element in doubt is neither required nor excluded"),
        (None, "Al,?", None, "no element given"),
    ],
)
def test_a_contradiction_is_told(
    must: str | None, only: str | None, exclude: str | None, words: str
) -> None:
    with pytest.raises(InputError, match=words):
        Chemistry.parse(must, only, exclude)


def test_an_element_in_doubt_is_allowed_and_told() -> None:
    chemistry = Chemistry.parse(None, "Al, O, fe?", None)
    assert chemistry.doubt == {"Fe"}
    assert chemistry.only == {"Al", "O", "Fe"}
    assert chemistry.admits(("Fe", "O"))
    assert chemistry.describe().endswith("in doubt Fe.")


def test_doubt_makes_a_phase_a_quarter_as_likely_a_priori(starter_library: Library) -> None:
    """Each element seen with doubt costs its phases a factor of four, those of no doubt nothing."""
    table = starter_library.line_table("x-ray")
    every = np.arange(len(table))
    plain = log_prior_of(table, every, Chemistry.parse(None, "Al,O,Fe,Mn", None))
    doubted = log_prior_of(table, every, Chemistry.parse(None, "Al,O,Fe?,Mn?", None))
    count = np.array([len({"Fe", "Mn"} & elements) for elements in table.elements])
    gain = doubted - plain
    assert set(count.tolist()) == {0, 1, 2}
    np.testing.assert_allclose(gain - gain[count == 0][0], -count * np.log(4.0), atol=1e-12)


def test_only_may_be_narrowed_by_not() -> None:
    chemistry = Chemistry.parse("Al", "Al,O,Si", "Si")
    assert chemistry.admits(("Al", "O"))
    assert not chemistry.admits(("Al", "O", "Si"))


@pytest.mark.parametrize(
    ("elements", "admitted"),
    [
        (("Al",), True),
        (("O",), True),
        (("Al", "O"), True),
        (("Al", "H", "O"), False),
        (("Al", "Mg", "O"), False),
        ((), True),
    ],
)
def test_only_admits_phases_made_of_nothing_else(elements: tuple[str, ...], admitted: bool) -> None:
    assert Chemistry.parse("Al", "Al,O", None).admits(elements) is admitted


def test_not_refuses_phases_that_contain_it() -> None:
    chemistry = Chemistry.parse(None, None, "O")
    assert chemistry.admits(("Al", "Si"))
    assert not chemistry.admits(("Al", "O"))


def test_must_asks_the_phases_of_an_answer_together_not_each_alone() -> None:
    chemistry = Chemistry.parse("Al,Zn", None, None)
    corundum, zincite, zinc = frozenset({"Al", "O"}), frozenset({"Zn", "O"}), frozenset({"Zn"})
    assert chemistry.admits(corundum)
    assert not chemistry.satisfied_by([corundum])
    assert chemistry.satisfied_by([corundum, zincite])
    assert not chemistry.satisfied_by([zincite, zinc])
    assert not chemistry.satisfied_by([])


def test_no_constraint_admits_everything_and_says_nothing() -> None:
    chemistry = Chemistry.parse(None, None, None)
    assert chemistry.admits(("Pu", "H"))
    assert chemistry.satisfied_by([frozenset({"Pu"})])
    assert chemistry.describe() == ""


def test_the_answer_tells_which_constraints_were_applied() -> None:
    text = Chemistry.parse("Al", "Al,O,Si", "Si").describe()
    assert text == ("Chemistry: required Al; no element other than Al, O, Si; excluded Si.")
