"""Damaged and random bytes at every entrance: an answer or a PhaseidError, nothing else.

The same examples every time; `scripts/fuzz` goes on from here with new ones.
"""

from __future__ import annotations

from contextlib import suppress

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from phaseid.errors import PhaseidError
from tests.fuzz.targets import GRAFTS, TARGETS

EDITS = st.lists(
    st.tuples(
        st.floats(0, 1),
        st.integers(0, 40),
        st.one_of(st.sampled_from(GRAFTS), st.binary(max_size=8)),
    ),
    max_size=4,
)


def damaged(seed: bytes, edits: list[tuple[float, int, bytes]]) -> bytes:
    """Cut a piece out at each place (a part of the length) and put another in."""
    for place, cut, graft in edits:
        at = int(place * len(seed))
        seed = seed[:at] + graft + seed[at + cut :]
    return seed


@pytest.mark.parametrize("name", TARGETS)
def test_nothing_but_our_own_errors(name: str) -> None:
    target = TARGETS[name]

    @settings(
        max_examples=target.examples,
        deadline=None,
        derandomize=True,
        database=None,
        suppress_health_check=list(HealthCheck),
    )
    @given(
        st.one_of(st.builds(damaged, st.sampled_from(target.seeds), EDITS), st.binary(max_size=200))
    )
    def run(data: bytes) -> None:
        with suppress(PhaseidError):
            target.take(data)

    run()


@pytest.mark.parametrize("name", TARGETS)
def test_the_seeds_go_in(name: str) -> None:
    """At least one seed of each target is taken: the fuzzing goes past the front door."""
    taken = 0
    for seed in TARGETS[name].seeds:
        with suppress(PhaseidError):
            TARGETS[name].take(seed)
            taken += 1
    assert taken
