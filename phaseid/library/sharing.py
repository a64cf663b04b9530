"""Sharing the reading of structure files among workers: any executor, results in order.

A worker may die on the way: of a machine that goes down, or of a file that eats its memory. What it
was reading is then read again here, file by file in a process of its own, so that one bad file
costs nobody but itself.
"""

from __future__ import annotations

import os
import signal
import time
from collections import deque
from collections.abc import Callable, Generator, Iterable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor
from contextlib import suppress
from multiprocessing import get_context, parent_process
from threading import Thread, current_thread, main_thread
from typing import TypeVar

from phaseid import __version__
from phaseid.errors import InputError, PhaseidError
from phaseid.library.outcome import Outcome
from phaseid.library.sources import Found, StructureFile
from phaseid.library.tally import Rejected

T = TypeVar("T")
Read = Callable[[Found], Outcome]

CHUNK = 32  # files a message to a worker
CHUNK_BYTES = 4 << 20
_FEWEST_FLYING = 16  # chunks on their way to an executor of unknown size


def shared(
    read: Read, found: Iterable[Found], *, workers: int, executor: Executor | None = None
) -> Generator[Outcome, None, None]:
    """Yield what `read` makes of each file, in order, with a bounded number on their way.

    `workers` processes of our own do it, or `executor` where one is given; `workers` then says how
    many chunks it can work on at a time. `read` and what it returns must survive pickling. Raises
    InputError where no process can be started, where the executor takes no more work, and where its
    workers have another phaseid or none.
    """
    if executor is None and workers <= 1:
        yield from map(read, found)
        return
    crew = _Crew(workers) if executor is None else _Hired(executor)
    most = 2 * workers if executor is None else max(2 * workers, _FEWEST_FLYING)
    flying: deque[tuple[list[Found], Future[list[Outcome]] | None]] = deque()
    try:
        for chunk in bundles(found, CHUNK, CHUNK_BYTES, bytes_of):
            unread = [one for one in chunk if _is_work(one)]
            flying.append((chunk, crew.submit(read, unread) if unread else None))
            if len(flying) > most:
                yield from _landed(read, *flying.popleft())
        while flying:
            yield from _landed(read, *flying.popleft())
    finally:
        for _, future in flying:
            if future is not None:
                future.cancel()
        crew.close()


def bundles(
    items: Iterable[T],
    most: int,
    heaviest: int,
    weight: Callable[[T], int],
    longest_s: float = float("inf"),
) -> Iterator[list[T]]:
    """Yield the items in lists that end at a number, a weight in all, or a time since their first.

    A list holds one item at least, whatever that weighs.
    """
    bundle: list[T] = []
    weighed, started = 0, 0.0
    for item in items:
        if not bundle:
            weighed, started = 0, time.monotonic()
        bundle.append(item)
        weighed += weight(item)
        if len(bundle) >= most or weighed >= heaviest or time.monotonic() - started >= longest_s:
            yield bundle
            bundle = []
    if bundle:
        yield bundle


def bytes_of(found: Found) -> int:
    """Return how many bytes a file holds in memory."""
    return len(found.data) if isinstance(found, StructureFile) else 0


class _Crew:
    """Processes of our own; where they break down, new ones take over."""

    def __init__(self, workers: int) -> None:
        self._workers = workers
        self._pool = _pool(workers)

    def submit(self, read: Read, chunk: list[Found]) -> Future[list[Outcome]]:
        try:
            try:
                return _sent(self._pool, _read_chunk, read, chunk, __version__)
            except BrokenExecutor:
                self.close()
                self._pool = _pool(self._workers)
                return _sent(self._pool, _read_chunk, read, chunk, __version__)
        except OSError as error:
            raise _no_process(error) from error

    def close(self) -> None:
        _shut(self._pool)


class _Hired:
    """An executor of somebody else, who also closes it."""

    def __init__(self, executor: Executor) -> None:
        self._executor = executor

    def submit(self, read: Read, chunk: list[Found]) -> Future[list[Outcome]]:
        try:
            return self._executor.submit(_read_chunk, read, chunk, __version__)
        except Exception as error:
            raise InputError(
                f"the workers take no more files ({type(error).__name__}: {error})",
                remedy="What was added is kept. Start the workers again and repeat the command.",
            ) from error

    def close(self) -> None:
        pass


def _pool(workers: int) -> ProcessPoolExecutor:
    return ProcessPoolExecutor(workers, mp_context=get_context("spawn"), initializer=_start)


def _start() -> None:
    """Make a worker leave Ctrl-C to the process that writes, and end where that is killed."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    Thread(target=_end_with_parent, daemon=True).start()


def _end_with_parent() -> None:
    parent = parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def _sent(pool: ProcessPoolExecutor, task: Callable[..., T], *arguments: object) -> Future[T]:
    """Submit a task; a process that this starts has Ctrl-C blocked from its first moment on.

    Ctrl-C meanwhile counts afterwards: a process half started would complain of it.
    """
    before = signal.getsignal(signal.SIGINT)
    if (
        not hasattr(signal, "pthread_sigmask")
        or current_thread() is not main_thread()
        or not before
    ):
        return pool.submit(task, *arguments)
    caught: list[int] = []
    signal.signal(signal.SIGINT, lambda number, _: caught.append(number))
    mask = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        return pool.submit(task, *arguments)
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, mask)
        signal.signal(signal.SIGINT, before)
        if caught:
            signal.raise_signal(signal.SIGINT)


def _read_chunk(read: Read, chunk: list[Found], version: str) -> list[Outcome]:
    if version != __version__:
        raise InputError(
            f"a worker has phaseid {__version__}, this is phaseid {version}",
            remedy="Install the same version everywhere.",
        )
    return [read(found) for found in chunk]


def _is_work(found: Found) -> bool:
    """Whether a file has to be read; others need not travel."""
    return isinstance(found, StructureFile) and not found.known


def _landed(
    read: Read, chunk: list[Found], future: Future[list[Outcome]] | None
) -> Iterator[Outcome]:
    done: Iterator[Outcome] = iter(()) if future is None else _outcomes_of(read, chunk, future)
    for found in chunk:
        yield next(done) if _is_work(found) else read(found)
    next(done, None)  # let it close its process now, not when it is swept up


def _outcomes_of(
    read: Read, chunk: list[Found], future: Future[list[Outcome]]
) -> Iterator[Outcome]:
    try:
        outcomes = future.result()
    except PhaseidError:
        raise
    except ImportError as error:
        raise InputError(
            f"a worker cannot load phaseid ({error})",
            remedy="Install the same version of phaseid on every machine.",
        ) from error
    except Exception:  # whatever a dying worker leaves behind
        return _one_by_one(read, [found for found in chunk if _is_work(found)])
    return iter(outcomes)


def _one_by_one(read: Read, chunk: list[Found]) -> Iterator[Outcome]:
    """Read files in a process for as long as it lives, then in another.

    A file that ends two of them is refused; one alone may have been ended by somebody else.
    """
    pool = _living_pool()
    try:
        for found in chunk:
            for ended in range(2):
                try:
                    outcome = _sent(pool, read, found).result()
                    break
                except BrokenExecutor:
                    _shut(pool)
                    pool = _living_pool()
                    if ended:
                        outcome = Outcome(found.location, rejects=(_deadly(found),))
            yield outcome
    finally:
        _shut(pool)


def _shut(pool: ProcessPoolExecutor) -> None:
    with suppress(OSError):  # a pool that broke may have closed its pipes already
        pool.shutdown(cancel_futures=True)


def _living_pool() -> ProcessPoolExecutor:
    pool = _pool(1)
    try:
        _sent(pool, _alive).result()
    except (BrokenExecutor, OSError) as error:
        pool.shutdown()
        raise _no_process(error) from error
    return pool


def _no_process(error: Exception) -> InputError:
    return InputError(
        f"no worker process can be started ({error})",
        remedy="Use one worker (--jobs 1); in a script, call `add` under "
        'if __name__ == "__main__", for workers load the script anew.',
    )


def _alive() -> bool:
    return True


def _deadly(found: Found) -> Rejected:
    reason = "the process that read it was killed, for want of memory as a rule"
    return Rejected(found.location, found.file, "", "worker_killed", reason)
