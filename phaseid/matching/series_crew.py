"""Workers that each have the library open: the same task for many patterns, results in order."""

from __future__ import annotations

import signal
from collections.abc import Callable, Generator, Iterable, Sequence
from concurrent.futures import BrokenExecutor, ProcessPoolExecutor
from contextlib import contextmanager
from multiprocessing import get_context
from pathlib import Path
from typing import Any, TypeVar

from phaseid.errors import InputError
from phaseid.library.library import Library

T = TypeVar("T")
Hands = Callable[[Callable[..., T], Sequence[tuple[Any, ...]], Callable[[], None]], list[T]]

_open: list[Library] = []


@contextmanager
def crew(library: Library, workers: int) -> Generator[Hands[Any], None, None]:
    """Yield `hands(task, items, step)`, which returns [task(library, *item) for item in items].

    With more than one of `workers` each is a process of its own that opens the same file; `task`
    has to be a function of a module. `step` is called as results come in. Raises InputError where a
    worker dies.
    """
    if workers <= 1:
        yield lambda task, items, step: _counted((task(library, *item) for item in items), step)
        return
    pool = ProcessPoolExecutor(
        workers, mp_context=get_context("spawn"), initializer=_begin, initargs=(library.path,)
    )
    try:
        with pool:
            yield lambda task, items, step: _counted(
                pool.map(_with_library, [(task, item) for item in items]), step
            )
    except BrokenExecutor:
        raise InputError(
            "a worker process died, perhaps for want of memory",
            remedy="Repeat with --workers 1; nothing stored is touched.",
        ) from None


def _counted(results: Iterable[T], step: Callable[[], None]) -> list[T]:
    found = []
    for result in results:
        found.append(result)
        step()
    return found


def _begin(path: Path) -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the parent is interrupted, and ends us
    _open.append(Library.open(path))


def _with_library(work: tuple[Callable[..., Any], tuple[Any, ...]]) -> Any:
    task, item = work
    return task(_open[0], *item)
