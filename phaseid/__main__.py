"""`python -m phaseid` is `phaseid`."""

import sys


def start() -> None:
    """Run the command line; Ctrl-C is a quiet end from the first moment on."""
    try:
        from phaseid.cli.main import run
    except KeyboardInterrupt:
        sys.exit(130)
    run()


if __name__ == "__main__":
    start()
