"""Screening: what is foreign, what may have made it, and limits checked by simulation."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from phaseid.crystal.crystal import Crystal
from phaseid.errors import InputError
from phaseid.library import Library, Phase
from phaseid.matching.screen import Screening, screen
from phaseid.matching.watch import Watched, watch_lists
from phaseid.resources import data_path
from phaseid.rings import RingList, read_rings
from tests.matching.mixtures import simulated

DEMO = data_path("demo")
Find = Callable[[str], tuple[Phase, Crystal]]


@pytest.fixture
def find(starter_library: Library) -> Find:
    def found(text: str) -> tuple[Phase, Crystal]:
        phase = starter_library.choose(text)
        return phase, starter_library.crystal(phase.phase_id)

    return found


@pytest.fixture
def screened(starter_library: Library, find: Find):
    def held(
        rings: RingList,
        *expected: str,
        also: tuple[RingList, ...] = (),
        watch: list[Watched] | None = None,
    ) -> Screening:
        listed = watch_lists() if watch is None else watch
        return screen([rings, *also], starter_library, [find(e) for e in expected], listed, find)

    return held


def test_what_is_expected_is_clean(screened) -> None:
    result = screened(read_rings(DEMO / "foil_xrays.csv"), "Al", "MgO")
    assert result.verdict == "clean"
    assert result.foreign == ()
    assert all(part.seen for part in result.expected)
    rings = sorted(ring.ring for part in result.expected for ring in part.rings)
    assert rings == list(range(13))
    assert len(result.limits) > 60
    assert all(
        0 < limit.share_even < limit.share <= 1 for limit in result.limits if not limit.hidden
    )


def test_a_contaminant_of_the_watch_list_is_named(screened) -> None:
    result = screened(read_rings(DEMO / "foil_xrays.csv"), "Al")
    assert result.verdict == "foreign-rings"
    assert [ring.ring for ring in result.foreign] == [0, 2, 4, 7, 10]  # those of MgO
    for ring in result.foreign:
        assert ring.candidates[0].phase.formula == "MgO"
        assert ring.candidates[0].probability > 0.9
        assert ring.candidates[0].lists
        assert sum(c.probability for c in ring.candidates) < 1.0 + 1e-6
    assert [c.phase.formula for c in result.found] == ["MgO"]
    assert all(limit.phase.formula != "MgO" for limit in result.limits)


def test_two_contaminants_are_both_named(screened) -> None:
    result = screened(read_rings(DEMO / "foil_xrays.csv"), "corundum")
    assert {c.phase.formula for c in result.found} == {"Al", "MgO"}
    assert not result.expected[0].seen  # and what was expected is not there
    assert result.expected[0].rings == ()


def test_a_contaminant_outside_the_watch_list_comes_from_the_library(screened) -> None:
    result = screened(read_rings(DEMO / "foil_xrays.csv"), "Al", watch=[])
    assert result.foreign[0].candidates[0].phase.formula == "MgO"
    assert result.foreign[0].candidates[0].lists == ()
    assert result.limits == ()


def test_a_phase_beside_the_library_can_be_expected(
    find: Find, tmp_path: Path, starter_library: Library
) -> None:
    """An empty library, everything given as structures: the same verdict."""
    rings = read_rings(DEMO / "foil_xrays.csv")
    with Library.create(tmp_path / "empty.sqlite") as empty:
        result = screen([rings], empty, [find("Al"), find("MgO")], watch_lists(), find)
    assert result.verdict == "clean"
    assert len(result.limits) > 60


def test_nothing_or_too_much_expected_is_refused(screened) -> None:
    rings = read_rings(DEMO / "foil_xrays.csv")
    with pytest.raises(InputError, match="--expect"):
        screened(rings)
    with pytest.raises(InputError, match="--expect"):
        screened(rings, *["Al"] * 9)


def test_patterns_of_one_specimen_are_screened_together(screened) -> None:
    electrons, xrays = (read_rings(DEMO / f"foil_{kind}.csv") for kind in ("electrons", "xrays"))
    result = screened(electrons, "Al", "MgO", also=(xrays,))
    assert [(ring.pattern, ring.ring) for ring in result.foreign] == [(0, 0)]
    assert {ring.pattern for part in result.expected for ring in part.rings} == {0, 1}
    assert len(result.scales) == len(result.weakest_percent) == 2
    # two looks find no less than either alone
    single = [screened(rings, "Al", "MgO") for rings in (electrons, xrays)]
    for limit in result.limits:
        alone = [
            other.share
            for one in single
            for other in one.limits
            if other.phase.phase_id == limit.phase.phase_id
        ]
        assert limit.share <= min(alone) * 1.02 + 1e-6


def test_one_pattern_twice_as_sure_as_once_only_in_what_scatters(screened) -> None:
    """Two looks of even chance see together what one sees in three of four cases."""
    rings = read_rings(DEMO / "foil_xrays.csv")
    (once,) = screened(rings, "Al", "MgO", watch=[Watched("NaCl", False, ("m",), ())]).limits
    (twice,) = screened(
        rings, "Al", "MgO", also=(rings,), watch=[Watched("NaCl", False, ("m",), ())]
    ).limits
    assert once.share_even / 2 < twice.share_even < once.share_even
    assert once.share / 2 < twice.share < once.share


@pytest.mark.parametrize(
    ("probe", "host", "guest", "limit"),
    [("x-ray Cu Ka", "corundum", "Si", 0.02), ("electron 200 kV", "Al", "NaCl", 0.03)],
)
def test_limits_hold_in_simulation(
    probe: str, host: str, guest: str, limit: float, find: Find, tmp_path: Path
) -> None:
    """A guest at its limits is found in about half, nearly all, and (at twice) all of the cases."""
    watch = [Watched(guest, False, ("mine",), ())]

    small = Library.create(tmp_path / "small.sqlite")  # as good as a large one, and faster
    small.add_crystals(find(name)[1] for name in (host, guest, "Au", "quartz"))

    def held(share: float, seed: int) -> Screening:
        parts = [(*find(host), 1 - share), (*find(guest), share)]
        rings = simulated(parts[: 2 if share else 1], probe, limit, seed)
        return screen([rings], small, [find(host)], watch, find, weakest=limit)

    pure = [held(0.0, seed) for seed in range(3)]
    assert [result.verdict for result in pure] == ["clean"] * 3
    sure = float(np.median([result.limits[0].share for result in pure]))
    even = float(np.median([result.limits[0].share_even for result in pure]))

    def found(share: float) -> float:
        return float(
            np.mean([held(share, 100 + seed).verdict == "foreign-rings" for seed in range(14)])
        )

    # binomial: 14 draws at 0.5 lie within 0.14 and 0.86 in 99 % of cases, at 0.95 above 0.71
    assert 0.14 <= found(even) <= 0.86
    assert found(sure) > 0.71
    assert found(2 * sure) >= 0.85
    small.close()


def test_every_phase_of_the_watch_list_comes_with_phaseid() -> None:
    listed = watch_lists()
    assert len(listed) > 60
    names = {path.stem for path in data_path("starter").rglob("*.cif")}
    assert {watched.name for watched in listed} <= names
    assert all(watched.why and watched.lists for watched in listed)
    about = {name for watched in listed for name in watched.lists}
    assert len(about) == 7


def test_lists_of_your_own(tmp_path: Path) -> None:
    plain = tmp_path / "furnace.txt"
    plain.write_text("# what our furnace sheds\nMgO  # lining\n\nSiC-6H\n", encoding="utf-8")
    toml = tmp_path / "more.toml"
    toml.write_text(
        'about = "more"\n[[phase]]\nphase = "halite"\nwhy = "hands"\n', encoding="utf-8"
    )
    listed = watch_lists([plain, toml], shipped=False)
    assert [(w.name, w.lists, w.why) for w in listed] == [
        ("MgO", ("furnace",), ("lining",)),
        ("SiC-6H", ("furnace",), ()),
        ("halite", ("more",), ("hands",)),
    ]
    assert len(watch_lists([plain])) == len(watch_lists()) + 2


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("a.txt", "# nothing\n"),
        ("a.toml", "phase = [1]\n"),
        ("a.toml", "[[phase]]\nwhy = 'x'\n"),
        ("a.toml", "[[phase"),
        ("a.toml", ""),
    ],
)
def test_a_list_that_is_none_is_told(name: str, text: str, tmp_path: Path) -> None:
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match="a\\.t"):
        watch_lists([path])
