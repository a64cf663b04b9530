"""Many machines: the workers of a Dask scheduler as an executor for adding."""

from __future__ import annotations

import re
from collections.abc import Iterator
from concurrent.futures import Executor
from contextlib import contextmanager
from importlib import import_module

from phaseid.errors import InputError

_CONNECT_S = 20
_ADDRESS = re.compile(r"([a-z]+://)?[\w.:\[\]-]+:\d{1,5}", re.IGNORECASE | re.ASCII)


@contextmanager
def cluster(address: str) -> Iterator[tuple[Executor, int]]:
    """Yield an executor on the scheduler at `address` (tcp://HOST:PORT), and its workers' threads.

    Files travel to the workers as bytes: they need no common file system, only the same phaseid. A
    worker that is lost on the way has its files read by another. Raises InputError where the extra
    is not installed, nobody answers, or no worker is there.
    """
    if _ADDRESS.fullmatch(address) is None:
        raise InputError(
            f"'{address}' is no address of a scheduler", remedy="Write it as tcp://HOST:8786."
        )
    try:
        distributed = import_module("distributed")
    except ImportError:
        raise InputError(
            "a scheduler needs the package distributed", remedy="pip install 'phaseid[cluster]'"
        ) from None
    try:
        client = distributed.Client(address, timeout=_CONNECT_S, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        reason = str(error).split("\n")[0] or type(error).__name__
        raise InputError(
            f"no scheduler answers at {address} ({reason})",
            remedy="Start one with `dask scheduler`, and `dask worker ADDRESS` on each machine.",
        ) from error
    with client:
        threads = sum(client.nthreads().values())
        if threads == 0:
            raise InputError(
                f"the scheduler at {address} has no workers",
                remedy=f"Start some: dask worker {address}",
            )
        yield client.get_executor(pure=False), threads
