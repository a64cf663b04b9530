"""A progress bar on standard error, only where a person looks at it."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager


@contextmanager
def progress_bar(label: str) -> Iterator[Callable[[int, int | None], None] | None]:
    """Yield a function (done, total or None) that moves the bar; None without a terminal."""
    if not sys.stderr.isatty():
        yield None
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
