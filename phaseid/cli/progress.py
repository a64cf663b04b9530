"""Progress on standard error: a bar where a person looks, now and then a line elsewhere."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from phaseid.cli.options import say

Advance = Callable[[int, int | None], None]

LINE_EVERY_S = 30.0


@contextmanager
def progress_bar(label: str) -> Iterator[Advance]:
    """Yield a function (done, total or None) that tells how far things are."""
    if not sys.stderr.isatty():
        yield _lines(label)
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        Progress,
        TextColumn,
        TimeRemainingColumn,
    )

    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("{task.fields[rate]}"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(label, total=None, rate="")

        def advance(done: int, total: int | None) -> None:
            elapsed = bar.tasks[0].elapsed or 0.0
            rate = f"{done / elapsed:.0f}/s" if elapsed > 0 else ""
            bar.update(task, completed=done, total=total, rate=rate)

        yield advance


def _lines(label: str) -> Advance:
    """Return a function that says a line twice a minute, for logs of long runs."""
    begun = told = time.monotonic()

    def advance(done: int, total: int | None) -> None:
        nonlocal told
        now = time.monotonic()
        if now - told < LINE_EVERY_S:
            return
        told = now
        rate = done / (now - begun)
        of = "" if total is None else f" of {total}"
        left = "" if total is None else f", {_span((total - done) / rate)} left"
        say(f"{label}: {done}{of}, {rate:.0f} a second{left}")

    return advance


def _span(seconds: float) -> str:
    minutes = round(seconds / 60)
    if minutes < 2:
        return f"{seconds:.0f} s"
    return f"{minutes} min" if minutes < 120 else f"{minutes / 60:.0f} h"
