"""`python -m phaseid` is `phaseid`."""

from phaseid.cli.main import run

if __name__ == "__main__":
    run()
