"""Progress where no terminal is: a line now and then, on standard error alone."""

from __future__ import annotations

import itertools

import pytest

from phaseid.cli import progress


def test_a_log_gets_a_line_twice_a_minute(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    clock = itertools.count(0.0, 1.0)  # a file a second
    monkeypatch.setattr("phaseid.cli.progress.time.monotonic", lambda: next(clock))
    with progress.progress_bar("adding") as advance:
        for done in range(1, 101):
            advance(done, 1000)
    out, err = capsys.readouterr()
    assert out == ""
    assert err.splitlines() == [
        "adding: 30 of 1000, 1 a second, 16 min left",
        "adding: 60 of 1000, 1 a second, 16 min left",
        "adding: 90 of 1000, 1 a second, 15 min left",
    ]


def test_where_the_end_is_not_known_no_time_is_told(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    clock = itertools.count(0.0, 31.0)
    monkeypatch.setattr("phaseid.cli.progress.time.monotonic", lambda: next(clock))
    with progress.progress_bar("adding") as advance:
        advance(3100, None)
    assert capsys.readouterr().err == "adding: 3100, 100 a second\n"


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(5, "5 s"), (89, "89 s"), (150, "2 min"), (7000, "117 min"), (1e5, "28 h")],
)
def test_times_are_told_in_whole_units(seconds: float, words: str) -> None:
    assert progress._span(seconds) == words
