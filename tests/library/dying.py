"""Doing something in a process of its own that dies of it at a chosen moment."""

from __future__ import annotations

import os
import signal
import time
import traceback
import warnings
from collections.abc import Callable


def dies(action: Callable[[], object], *, after_s: float | None = None) -> bool:
    """Run `action` in a child process, killed after a time unless it kills itself or ends before.

    Returns whether it was killed; fails where `action` raises.
    """
    with warnings.catch_warnings():  # other threads of a test run do nothing here
        warnings.simplefilter("ignore", DeprecationWarning)
        child = os.fork()
    if child == 0:
        code = 1
        try:
            action()
            code = 0
        except BaseException:
            traceback.print_exc()
        finally:
            os._exit(code)
    if after_s is not None:
        time.sleep(after_s)
        os.kill(child, signal.SIGKILL)
    _, status = os.waitpid(child, 0)
    killed = os.WIFSIGNALED(status)
    assert killed or os.WEXITSTATUS(status) == 0
    return killed


def die() -> None:
    """Kill this very process, as the kernel does."""
    os.kill(os.getpid(), signal.SIGKILL)
