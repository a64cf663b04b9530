"""Structure types by ring ratios: arithmetic on hkl, held against tabulated ratios."""

from __future__ import annotations

import json
import math
from pathlib import Path

import pytest

from phaseid.errors import InputError
from phaseid.matching.ratio import TYPES, as_radii, match_types, ratios_of

RULES = {
    row["rule"]: row["value"]
    for row in json.loads(
        (Path(__file__).parent.parent / "reference" / "rules_of_the_trade.json").read_text("utf-8")
    )["rows"]
}
TABULATED = {
    "face-centred cubic": "fcc ring radii ratio",
    "body-centred cubic": "bcc ring radii ratio",
    "diamond": "diamond ring radii ratio",
    "primitive cubic": "simple cubic ring radii ratio (no N=7)",
    "hexagonal close-packed": "hcp, ideal c/a=1.63299, R/R(100) for "
    "100,002,101,102,110,103,200,112,201",
}
BY_NAME = {kind.name: kind for kind in TYPES}


@pytest.mark.parametrize("name", TABULATED)
def test_ratios_of_a_type_are_the_tabulated_ones(name: str) -> None:
    expected = RULES[TABULATED[name]]
    found = ratios_of(BY_NAME[name])
    assert [r / found[0][0] for r, _ in found[: len(expected)]] == pytest.approx(expected, abs=1e-4)


@pytest.mark.parametrize("name", TABULATED)
def test_the_tabulated_ratios_name_their_type_first(name: str) -> None:
    best = match_types(RULES[TABULATED[name]])[0]
    assert best.type.name == name
    assert best.skipped == ()
    assert best.worst < 2e-3


def test_six_rings_do_not_tell_primitive_from_body_centred_and_the_seventh_does() -> None:
    radii = [math.sqrt(n) for n in (1, 2, 3, 4, 5, 6)]
    assert {m.type.name for m in match_types(radii)[:2]} == {
        "body-centred cubic",
        "primitive cubic",
    }
    assert match_types([*radii, math.sqrt(7)])[0].type.name == "body-centred cubic"
    assert match_types([*radii, math.sqrt(8)])[0].type.name == "primitive cubic"


@pytest.mark.parametrize(
    ("name", "planes"),
    [  # from memory: the rings of tungsten beta (A15) and of magnetite, in order
        ("A15", [(1, 1, 0), (2, 0, 0), (2, 1, 0), (2, 1, 1), (2, 2, 0), (3, 1, 0), (2, 2, 2)]),
        ("spinel", [(1, 1, 1), (2, 2, 0), (3, 1, 1), (2, 2, 2), (4, 0, 0), (3, 3, 1), (4, 2, 2)]),
    ],
)
def test_more_types_by_their_planes(name: str, planes: list[tuple[int, int, int]]) -> None:
    radii = [math.sqrt(sum(i * i for i in hkl)) for hkl in planes]
    best = match_types(radii)[0]
    assert best.type.name == name
    assert [ring.hkl for ring in best.rings] == planes


def test_the_axial_ratio_of_zinc_is_found() -> None:
    """Zn: a = 2.665, c = 4.947 Å, c/a = 1.856 (King, from memory)."""
    radii = [r for r, _ in ratios_of(BY_NAME["hexagonal close-packed"], 1.856)[:7]]
    best = match_types(radii, tolerance=0.005)[0]
    assert best.type.name == "hexagonal close-packed"
    assert best.axial_ratio == pytest.approx(1.856, abs=0.006)


def test_a_missing_ring_is_named() -> None:
    best = match_types([1.0, 1.633, 1.915, 2.0, 2.309, 2.582])[0]  # fcc without 200 and 331
    assert best.type.name == "face-centred cubic"
    assert [hkl for hkl, _ in best.skipped] == [(2, 0, 0), (3, 3, 1)]


def test_falling_numbers_are_spacings_and_give_the_edge() -> None:
    radii, spacings = as_radii([2.338, 2.0248, 1.4317, 1.2210], None)  # aluminium
    assert spacings
    best = match_types(radii, spacings=True)[0]
    assert best.edge_A == pytest.approx(4.0496, abs=0.001)  # King, from memory
    assert as_radii([1.0, 2.0], None) == ([1.0, 2.0], False)
    assert as_radii([2.0, 1.0], False) == ([1.0, 2.0], False)


def test_layers_and_nets() -> None:
    assert match_types([1.0, 2.0, 3.0])[0].type.name == "layers"
    assert match_types([1.0, math.sqrt(3), 2.0, math.sqrt(7)])[0].type.name == "hexagonal net"


def test_ratios_of_nothing_match_nothing() -> None:
    assert match_types([1.0, 1.07, 1.11, 1.23, 1.31, 1.42]) == []


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ([1.0], "one ring"),
        ([1.0, -1.2], "no ring"),
        ([1.0, 0.0], "no ring"),
        ([1.0, math.nan], "no ring"),
        ([1.0, 1.0, 1.6], "twice"),
    ],
)
def test_what_is_no_ratio_is_refused(values: list[float], message: str) -> None:
    with pytest.raises(InputError, match=message):
        as_radii(values, None)


def test_a_tolerance_out_of_range_is_refused() -> None:
    with pytest.raises(InputError, match="tolerance"):
        match_types([1.0, 1.155], tolerance=0.5)
