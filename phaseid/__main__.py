"""`python -m phaseid` is `phaseid`."""

import gc
import sys

_RARELY = 50_000
"""Objects made between collections of garbage: loading makes many and drops few."""


def start() -> None:
    """Run the command line; Ctrl-C is a quiet end from the first moment on."""
    gc.set_threshold(_RARELY)
    try:
        from phaseid.cli.main import run
    except KeyboardInterrupt:
        sys.exit(130)
    run()


if __name__ == "__main__":
    start()
