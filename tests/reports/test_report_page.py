"""The page: whole in one file, everything in words too, nothing from outside ever run."""

from __future__ import annotations

import base64
import hashlib
import json
import re
from dataclasses import replace
from html.parser import HTMLParser
from itertools import pairwise
from pathlib import Path

import jsonschema
import numpy as np

import phaseid
from phaseid.crystal.crystal import Finding
from phaseid.matching.identification import Identification, PhaseAnswer, Unexplained
from phaseid.reports.json import dumps, identification_dict
from phaseid.reports.page import LARGEST_BYTES, Provenance, page
from phaseid.reports.page_compare import differences
from phaseid.reports.page_html import prose
from phaseid.reports.text import STANDING

PROVENANCE = Provenance(
    "phaseid report -o a.html -- foil.csv", "2026-01-02", (("must hold", "Al"),)
)
EVIL = '</script><script>alert("x")</script><img src=x onerror=alert(1)>&lt;b\u2028'
VOID = {"meta", "input", "img", "br", "hr", "link"}


class _Reader(HTMLParser):
    """Elements with their attributes, and the words of the page; unclosed elements are refused."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.scripts: list[str] = []
        self.styles: list[str] = []
        self._open: list[str] = []
        self.feed(text)
        self.close()
        assert self._open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self._open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self._open.pop() == tag

    def handle_data(self, data: str) -> None:
        into = {"script": self.scripts, "style": self.styles}
        inner = self._open[-1] if self._open else ""
        into.get(inner, self.words).append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


def _with_name(answer: Identification, name: str) -> Identification:
    best = answer.hypotheses[0]
    part = replace(best.phases[0], phase=replace(best.phases[0].phase, name=name, formula=name))
    pattern = replace(answer.patterns[0], title=name, source=name)
    best = replace(best, phases=(part, *best.phases[1:]))
    left = tuple(replace(u, hint=name) for u in best.unexplained)
    best = replace(best, unexplained=left)
    return replace(
        answer,
        hypotheses=(best, *answer.hypotheses[1:]),
        patterns=(pattern,),
        remarks=(name,),
    )


def test_the_page_says_what_the_text_says(answer: Identification) -> None:
    text = _Reader(page(answer, PROVENANCE)).text
    for said in (
        "Aluminium (Al) or silver (Ag) (the rings cannot tell which) and periclase (MgO)",
        "Verdict: identified",
        "something not in this library",
        "Ring 5 at 1.9000 Å is unexplained: close to the 110 ring of ice",
        "Al should also show 3 1 1 at 1.2210 Å",
        "a = 4.0501 ± 0.0020 Å",
        "80 ± 5 % by weight",
        "calibrate the camera constant to 0.4 %",
        "1.0031 ± 0.0007",
        "Fine powders: avoid dust",
        "Only phases of Al, Mg, O and Ag were considered.",
        STANDING,
    ):
        assert said in text


def test_each_ring_has_a_row_and_a_mark(answer: Identification) -> None:
    reader = _Reader(page(answer, PROVENANCE))
    rows = [a["data-key"] for tag, a in reader.elements if tag == "tr" and "data-key" in a]
    marks = {a["data-key"] for tag, a in reader.elements if tag == "g"}
    assert rows[:6] == ["p1r1", "p1r2", "p1r3", "p1r4", "p1r5", "p1m1"]
    assert set(rows) == marks


def test_the_answer_for_machines_is_inside(answer: Identification) -> None:
    odd = _with_name(answer, EVIL)
    reader = _Reader(page(odd, PROVENANCE))
    inside = json.loads(reader.scripts[0])
    assert inside == json.loads(dumps(identification_dict(odd)))
    schema = Path(phaseid.__file__).parent / "schemas" / "identification-1.json"
    jsonschema.Draft202012Validator(json.loads(schema.read_text("utf-8"))).validate(inside)
    assert inside["hypotheses"][0]["phases"][0]["name"] == EVIL


def test_markup_in_names_is_text(answer: Identification) -> None:
    tags = [tag for tag, _ in _Reader(page(answer, PROVENANCE)).elements]
    odd = Provenance(EVIL, EVIL, ((EVIL, EVIL),))
    reader = _Reader(page(_with_name(answer, EVIL), odd))
    assert [tag for tag, _ in reader.elements] == tags
    assert 'alert("x")' in reader.text
    assert not [a for _, a in reader.elements if any(name.startswith("on") for name in a)]


def test_nothing_comes_from_elsewhere_and_only_our_script_may_run(answer: Identification) -> None:
    # Content Security Policy Level 3 (W3C): a hash names the one script and the one style allowed
    reader = _Reader(page(answer, PROVENANCE))
    for tag, attributes in reader.elements:
        assert not {"src", "href", "action", "style"} & set(attributes), tag
    assert not re.search(r"url\(|@import", "".join(reader.styles))
    policy = next(
        a["content"] for _, a in reader.elements if a.get("http-equiv") == "Content-Security-Policy"
    )
    assert policy is not None
    assert "default-src 'none'" in policy
    for kind, text in (("script", reader.scripts[1]), ("style", reader.styles[0])):
        digest = base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
        assert f"{kind}-src 'sha256-{digest}'" in policy
    assert len(reader.scripts) == 2
    assert len(reader.styles) == 1


def test_where_it_comes_from_is_told(answer: Identification) -> None:
    text = _Reader(page(answer, PROVENANCE)).text
    assert "phaseid report -o a.html -- foil.csv" in text
    assert answer.library.digest in text
    assert phaseid.__version__ in text
    assert "must hold Al" in text
    assert "/data/" not in text  # of the library's path only the name


def test_pictures_and_tables_have_words_for_those_who_do_not_see_them(
    answer: Identification,
) -> None:
    # WCAG 2.1 (W3C): text alternatives (1.1.1), language (3.1.1), labels (1.3.1), keyboard (2.1.1)
    elements = _Reader(page(answer, PROVENANCE)).elements
    assert ("html", {"lang": "en"}) in elements
    assert all(a.get("aria-label") or a.get("aria-hidden") for tag, a in elements if tag == "svg")
    assert all(a.get("scope") for tag, a in elements if tag == "th")
    labels = {a["for"] for tag, a in elements if tag == "label"}
    assert labels == {a["id"] for tag, a in elements if tag == "input"}
    assert all(a.get("tabindex") == "0" for tag, a in elements if tag == "tr" and "data-key" in a)
    identifiers = [a["id"] for _, a in elements if "id" in a]
    assert len(identifiers) == len(set(identifiers))
    headings = [int(tag[1]) for tag, _ in elements if re.fullmatch(r"h\d", tag)]
    assert headings[0] == 1
    assert all(after <= before + 1 for before, after in pairwise(headings))


def test_what_is_dangerous_is_told_at_the_top_and_once(answer: Identification) -> None:
    text = _Reader(page(answer, PROVENANCE)).text
    assert text.count("Fine powders: avoid dust") == 1
    assert text.index("Safety periclase (MgO): Fine powders") < text.index("The answers; the bar")
    silver = replace(answer.hypotheses[1].phases[0].phase, cautions=("Stains the skin.",))
    other = replace(answer.hypotheses[1], phases=(PhaseAnswer(silver, 1.0, None),))
    text = _Reader(page(replace(answer, hypotheses=(answer.hypotheses[0], other)), PROVENANCE)).text
    assert text.index("Stains the skin.") > text.index("Remarks")
    text = _Reader(page(replace(answer, verdict="no-match"), PROVENANCE)).text
    assert text.index("Fine powders: avoid dust") > text.index("Remarks")


def test_a_symbol_and_a_value_stay_on_their_line() -> None:
    assert prose("fluorite Fm-3m, x") == 'fluorite <span class="whole">Fm-3m,</span> x'
    assert prose("Al a = 4.05 ± 0.01 Å, c") == 'Al <span class="whole">a = 4.05 ± 0.01 Å,</span> c'
    assert prose("scale 1.00 ± 0.01") == 'scale <span class="whole">1.00 ± 0.01</span>'
    assert prose("12 rings of 13, 0.1 mm") == "12 rings of 13, 0.1 mm"
    assert prose("<b> well-known-7 ") == "&lt;b&gt; well-known-7"


def test_rings_of_several_patterns_are_told_pattern_by_pattern(answer: Identification) -> None:
    two = replace(answer, patterns=answer.patterns * 2)
    best, other = answer.hypotheses
    more = tuple(replace(a, pattern=1) for a in best.assignments)
    best = replace(best, assignments=(*best.assignments, *more))
    assert differences(two, best, other)[0] == (
        "Answer 1 explains rings 1 (2.1119 Å), 3 (2.0308 Å), 4 (1.4360 Å) of pattern 1; "
        "1 (2.1119 Å), 2 (2.3450 Å), 3 (2.0308 Å) of pattern 2 and 1 more, answer 2 does not."
    )


def test_no_answer_gives_a_page_too(answer: Identification) -> None:
    none = replace(answer, verdict="no-match", hypotheses=(), unlisted_probability=1.0)
    text = _Reader(page(none, PROVENANCE)).text
    assert "No phase in this library explains these rings" in text
    assert "What to do next" in text
    assert text.count("? unexplained") == len(answer.patterns[0])


def test_a_long_list_of_answers_stays_below_a_megabyte(answer: Identification) -> None:
    best = answer.hypotheses[0]
    many = tuple(replace(best, rank=rank, probability=0.94 / 200) for rank in range(1, 201))
    text = page(replace(answer, hypotheses=many), PROVENANCE)
    reader = _Reader(text)
    drawn = sum(tag == "section" for tag, _ in reader.elements)
    assert 1 < drawn < 200
    assert f"The last {200 - drawn} are not drawn" in reader.text
    held = len(json.loads(reader.scripts[0])["hypotheses"])
    assert 1 < held < 200
    assert f"The first {held} of 200 answers for machines" in reader.text
    assert len(text.encode()) < LARGEST_BYTES + 100_000
    assert text.count('class="choose"') == min(drawn, 50)
    assert "other answers from this library, 150 of them asked for" in reader.text


def test_a_list_of_a_thousand_rings_stays_below_a_megabyte(answer: Identification) -> None:
    pattern, best = answer.patterns[0], answer.hypotheses[0]
    many = 2000
    d_A = np.linspace(6.0, 1.0, many)
    rings = replace(
        pattern,
        position=d_A,
        position_sigma=0.001 * d_A,
        d_A=d_A,
        sigma_A=0.001 * d_A,
        intensity=np.linspace(1.0, 100.0, many),
        intensity_range=np.zeros((many, 2)),
        grades=("",) * many,
        notes=("",) * many,
    )
    left = tuple(Unexplained(0, ring) for ring in range(4, many))
    odd = replace(answer, patterns=(rings,), hypotheses=(replace(best, unexplained=left),))
    text = page(odd, PROVENANCE)
    assert len(text.encode()) < 1_000_000
    reader = _Reader(text)
    assert "Of 2000 rings the 200 strongest are shown." in reader.text
    keys = [a["data-key"] for tag, a in reader.elements if tag == "tr" and "data-key" in a]
    assert f"p1r{many}" in keys
    assert "p1r5" not in keys
    two = replace(odd, patterns=(rings, rings))
    far = replace(
        odd.hypotheses[0],
        unexplained=(*left, *(Unexplained(1, ring) for ring in range(many))),
    )
    text = page(replace(two, hypotheses=(far,)), PROVENANCE)
    assert len(text.encode()) < 1_000_000
    assert "too long to be kept in a page" in _Reader(text).text


def _with_entries(answer: Identification, count: int) -> Identification:
    best = answer.hypotheses[0]
    aluminium = best.phases[0]
    computed = replace(
        aluminium.phase,
        phase_id="Al-zzzz",
        cell=(4.07, 4.07, 4.07, 90.0, 90.0, 90.0),
        findings=(Finding("theoretical", "A computed cell, not a measured one."),),
    )
    part = replace(aluminium, entries=(computed,) * count, indistinguishable=(computed,))
    return replace(answer, hypotheses=(replace(best, phases=(part, best.phases[1])),))


def test_entries_and_what_they_are_is_told(answer: Identification) -> None:
    reader = _Reader(page(_with_entries(answer, 1), PROVENANCE))
    assert "1 other entry of this phase in the library" in reader.text
    row = "COD 0000001, al.cif computed a = 4.0700 Å Made up for a test aluminium Al-zzzz"
    assert row in reader.text
    assert "aluminium (Al) Fm-3m [computed]" in reader.text
    folded = [attributes for tag, attributes in reader.elements if tag == "details"]
    assert folded == [{}]


def test_many_entries_are_cut_short(answer: Identification) -> None:
    text = _Reader(page(_with_entries(answer, 25), PROVENANCE)).text
    assert "25 other entries of this phase" in text
    assert "and 5 more; the JSON inside this page lists them all" in text
    held = identification_dict(_with_entries(answer, 25))
    entries = held["hypotheses"][0]["phases"][0]["entries"]
    assert [entry["marks"] for entry in entries] == [["computed"]] * 25


def test_what_separates_two_answers_is_told(answer: Identification) -> None:
    best, other = answer.hypotheses
    told = differences(answer, best, other)
    assert told[0].startswith("Answer 1 explains rings 1 (2.1119 Å), 3 (2.0308 Å), 4 (1.4360 Å)")
    assert any("asks for Al 3 1 1 (1.2210 Å), not measured" in text for text in told)
    alike = differences(answer, best, replace(best, rank=2))
    assert alike == [
        "Answers 1 and 2 explain the same rings; they differ by how well spacings and intensities "
        "fit."
    ]


def test_an_answer_that_explains_nothing_has_its_page(answer: Identification) -> None:
    idle = replace(
        answer.hypotheses[1],
        rank=1,
        assignments=(),
        unexplained=tuple(Unexplained(0, ring) for ring in range(len(answer.patterns[0]))),
    )
    text = _Reader(page(replace(answer, hypotheses=(idle,)), PROVENANCE)).text
    assert "rings explained" not in text
    assert text.count("? unexplained") == len(answer.patterns[0])
