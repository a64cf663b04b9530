"""The starter library: its files are what the facts give, and they agree with other sources."""

from __future__ import annotations

import csv
import gzip
import json
import sys
import tomllib
from collections import Counter
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "scripts"))

import build_starter  # noqa: E402
from starter_checks import problems  # noqa: E402
from starter_facts import MARKS, FactError, PhaseFact, atoms, read_phase, read_tables  # noqa: E402
from starter_sources import Standard, aflow  # noqa: E402

from phaseid.crystal.cif import read_cif_file  # noqa: E402
from phaseid.crystal.crystal import Crystal  # noqa: E402

STARTER = ROOT / "data" / "starter"
SHARED = ROOT.parent / "shared"
ALUMINIUM: dict[str, Any] = {
    "name": "aluminium",
    "formula": "Al",
    "group": "F m -3 m",
    "cell": [4.0496],
    "sites": ["Al 0 0 0"],
    "source": "a test",
}


@pytest.fixture(scope="module")
def facts() -> list[PhaseFact]:
    phases, wrong = read_tables(ROOT / "scripts" / "starter")
    assert not wrong, "\n".join(wrong)
    return phases


@pytest.fixture(scope="module")
def checks() -> list[dict[str, str]]:
    with (STARTER / "checks.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture(scope="module")
def crystals(facts: list[PhaseFact]) -> dict[str, Crystal]:
    found = {}
    for phase in facts:
        reading = read_cif_file(STARTER / phase.path)
        assert not reading.rejects, (phase.path, reading.rejects)
        (found[phase.path],) = reading.crystals
    return found


@pytest.fixture(scope="module")
def review() -> list[dict[str, Any]]:
    text = (STARTER / "aflow_review.toml").read_text(encoding="utf-8")
    return list(tomllib.loads(text)["entry"])


@pytest.fixture(scope="module")
def prototypes() -> list[Standard]:
    pytest.importorskip("pymatgen.analysis.prototypes")
    return list(aflow())


def test_the_files_are_what_the_facts_give_and_every_fact_holds_together() -> None:
    files, wrong = build_starter.build()
    assert not wrong, "\n".join(wrong)
    written = {
        p.relative_to(STARTER).as_posix(): p.read_text(encoding="utf-8")
        for p in STARTER.glob("*/*.cif")
    }
    assert written == files


def test_the_library_is_broad(facts: list[PhaseFact]) -> None:
    kinds = Counter(p.kind for p in facts)
    assert sum(kinds.values()) >= 600
    wanted = {"elements": 80, "intermetallics": 90, "silicides": 30, "nitrides": 30, "carbides": 20}
    assert {k for k, n in wanted.items() if kinds[k] < n} == set()


def test_read_cif_finds_the_formula_and_the_cell_of_the_facts(
    facts: list[PhaseFact], crystals: dict[str, Crystal]
) -> None:
    for phase in facts:
        crystal = crystals[phase.path]
        assert crystal.cell == pytest.approx(phase.cell, abs=1e-9), phase.path
        assert crystal.space_group_number == phase.group.number, phase.path
        assert crystal.name in (phase.name, phase.options.get("mineral")), phase.path


def test_every_phase_was_compared_or_has_no_second_source(
    facts: list[PhaseFact], checks: list[dict[str, str]]
) -> None:
    assert {r["phase"] for r in checks} == {p.path for p in facts}
    for path in {r["phase"] for r in checks}:
        rows = [r for r in checks if r["phase"] == path]
        measured = [
            r
            for r in rows
            if r["result"] == "agrees" and not r["compared_with"].startswith("computed")
        ]
        alone = [r for r in rows if r["result"] == "no second source"]
        assert bool(measured) != bool(alone), path


def test_compared_phases_agree_within_half_a_percent(checks: list[dict[str, str]]) -> None:
    for row in checks:
        if row["result"] == "agrees" and not row["compared_with"].startswith("computed"):
            assert float(row["cell_deviation_percent"]) <= 0.5, row


def test_no_measured_source_disagrees_without_a_reason(checks: list[dict[str, str]]) -> None:
    unexplained = [
        (r["phase"], r["compared_with"], r["result"])
        for r in checks
        if "differ" in r["result"]
        and not r["result"].startswith("set aside: ")
        and not r["compared_with"].startswith("computed")
    ]
    assert unexplained == []


@pytest.mark.parametrize(
    ("path", "file"),
    [
        ("elements/Al-aluminium.cif", "Al_sg225.ncmat"),
        ("elements/Zn-zinc.cif", "Zn_sg194.ncmat"),
        ("elements/Sn-tin-beta-white.cif", "Sn_sg141.ncmat"),
        ("nitrides/AlN-aluminium-nitride.cif", "AlN_sg186_AluminumNitride.ncmat"),
        ("carbides/Al4C3-aluminium-carbide.cif", "Al4C3_sg166_AluminiumCarbide.ncmat"),
        ("hydrides/MgH2-magnesium-hydride-beta.cif", "MgH2_sg136_MagnesiumHydride.ncmat"),
    ],
)
def test_cells_agree_with_ncrystal(crystals: dict[str, Crystal], path: str, file: str) -> None:
    ncrystal = pytest.importorskip("NCrystal")
    info = ncrystal.createInfo(f"{file};dcutoff=0.9")
    theirs = [info.structure_info[k] for k in ("a", "b", "c")]
    assert crystals[path].cell[:3] == pytest.approx(theirs, rel=0.005)


def test_cells_of_standards_agree_with_the_handbook(crystals: dict[str, Crystal]) -> None:
    source = SHARED / "checks" / "published_checks.json"
    if not source.is_file():
        pytest.skip("the published checks are not beside this checkout")
    rows = json.loads(source.read_text(encoding="utf-8"))["handbook_lattice_parameters"]
    compared = 0
    for row in rows:  # handbook cells (King; Wyckoff), 25 C
        for crystal in crystals.values():
            same = crystal.formula == row["material"] and crystal.space_group_number == row["sg"]
            if same and row.get("handbook_A") and "delta" not in crystal.name:
                assert crystal.cell[0] == pytest.approx(row["handbook_A"], rel=5e-4), crystal.name
                compared += 1
    assert compared >= 10


@pytest.mark.parametrize(
    ("change", "complaint"),
    [
        ({"formula": "AlX9"}, "no element at 'X9'"),
        ({"formula": "Al(OH"}, "parenthesis is not closed"),
        ({"group": "F m 9 m"}, "is unknown"),
        ({"group": "F d -3 m"}, "several settings"),
        ({"cell": [4.0496, 4.0496]}, "cubic and needs a"),
        ({"cell": [0.40496]}, "lengths are in Å"),
        ({"sites": ["Al 0 0"]}, "write 'element x y z"),
        ({"sites": ["Al 0 0 1/0"]}, "not a number or a fraction"),
        ({"sites": ["Al 0 0 0 occ=2"]}, "not in (0, 1]"),
        ({"sites": ["Al 0 0 0 occupancy=1"]}, "is not occ=, B= or label="),
        ({"mark": "odd"}, "not one of high_pressure"),
        ({"colour": "grey"}, "unknown key 'colour'"),
        ({"name": "Haägg"}, "plain ASCII"),
        ({"allow": ["short"]}, "needs a note"),
        ({"source": ""}, "needs 'source'"),
    ],
)
def test_a_fact_that_cannot_be_read_says_what_is_wrong(
    change: dict[str, Any], complaint: str
) -> None:
    with pytest.raises(FactError) as error:
        read_phase("elements", ALUMINIUM | change)
    assert complaint in str(error.value)


@pytest.mark.parametrize(
    ("change", "complaint"),
    [
        ({"formula": "AlNi", "sites": ["Al 0 0 0", "Ni 1/4 1/4 1/4"]}, "the formula AlNi wants"),
        ({"cell": [2.0]}, "not believable"),
        ({"sites": ["Al 0 0 0", "Al 0.1 0.1 0.1"]}, "too close"),
        ({"density": 3.1}, "3.1 stated"),
        ({"group": "F -4 3 m"}, "has the symmetry of number 225"),
    ],
)
def test_facts_that_do_not_hold_together_are_told(change: dict[str, Any], complaint: str) -> None:
    assert not problems(read_phase("elements", ALUMINIUM))
    assert complaint in "; ".join(problems(read_phase("elements", ALUMINIUM | change)))


def test_a_formula_with_parentheses_is_counted() -> None:
    assert atoms("Al2Si2O5(OH)4") == {"Al": 2, "Si": 2, "O": 9, "H": 4}


def test_the_review_has_every_prototype_once_and_in_order(review: list[dict[str, Any]]) -> None:
    prototypes = pytest.importorskip("pymatgen.analysis.prototypes")
    from pymatgen.core import Structure

    path = Path(prototypes.__file__).parent / "aflow_prototypes.json.gz"
    entries = json.loads(gzip.decompress(path.read_bytes()))
    assert len(review) == len(entries) == 288
    for index, (row, entry) in enumerate(zip(review, entries, strict=True)):
        assert row["index"] == index
        assert row["tag"] == entry["tags"]["aflow"]
        assert row["formula"] == Structure.from_dict(entry["snl"]).composition.reduced_formula


def test_the_review_gives_names_and_reasons(review: list[dict[str, Any]]) -> None:
    keys = {"index", "tag", "formula", "name", "use", "mark", "reason"}
    for row in review:
        assert set(row) <= keys, row
        assert row["name"].isascii(), row
        assert len(row["name"]) > 2, row
        assert row["use"] or row["reason"], row
        assert row.get("mark", MARKS[0]) in MARKS, row
        assert not (row["use"] and row.get("mark") == "hypothetical"), row
    assert sum(row["use"] for row in review) >= 200


@pytest.mark.parametrize(
    ("index", "measured_a_A"),
    [
        (240, 4.123),  # CsCl, Wyckoff, Crystal Structures 1 (1963) 85, COD 9008789
        (45, 8.204),  # CoAs3, Kjekshus & Rakke, Acta Chem. Scand. A 28 (1974) 99, from memory
        (202, 5.082),  # CaCu5, Haucke 1940, from memory
        (207, 6.636),  # Si BC8, Kasper & Richards, Acta Cryst. 17 (1964) 752, from memory
        (287, 3.253),  # In, King's handbook table, from memory
    ],
)
def test_prototypes_with_wrong_cells_are_not_used(
    review: list[dict[str, Any]], prototypes: list[Standard], index: int, measured_a_A: float
) -> None:
    assert abs(prototypes[index].cell[0] / measured_a_A - 1) > 0.01
    assert review[index]["use"] is False
