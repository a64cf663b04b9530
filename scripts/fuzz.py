"""Damaged input for every entrance, as long as you like; what breaks something is kept in a file.

The targets are those of tests/fuzz. With --guided, and the package atheris installed, new branches
of phaseid's own code steer what is tried; without, damage is random. A file that breaks something
goes, under a name that says what it shows, into a test beside the code that was mended.
"""

from __future__ import annotations

import argparse
import hashlib
import random
import signal
import subprocess
import sys
import time
import traceback
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT))
SLOW_S = 10.0


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--seconds", type=float, default=60, help="in all, shared by the targets")
    parser.add_argument("--seed", type=int, default=None, help="to repeat a run")
    parser.add_argument("--into", type=Path, default=Path("fuzz-found"), help="folder of the files")
    parser.add_argument("--guided", action="store_true", help="steer by coverage (atheris)")
    parser.add_argument("targets", nargs="*", metavar="TARGET")
    given = parser.parse_args()

    if given.guided and len(given.targets) == 1:
        return guided(given.targets[0], given.seconds, given.into)
    from tests.fuzz.targets import TARGETS

    names = given.targets or list(TARGETS)
    unknown = [name for name in names if name not in TARGETS]
    if unknown:
        parser.error(f"no target is called {unknown[0]}; there are: {', '.join(TARGETS)}")
    each = given.seconds / len(names)
    if given.guided:
        command = [sys.executable, __file__, "--guided", "--into", str(given.into)]
        more = ["--seconds", str(each)]
        return max(
            subprocess.run([*command, *more, name], check=False).returncode for name in names
        )
    seed = random.randrange(2**32) if given.seed is None else given.seed
    print(f"seed {seed}")
    return max(at_random(name, each, given.into, random.Random(seed)) for name in names)


def at_random(name: str, seconds: float, into: Path, chance: random.Random) -> int:
    """Damage the seeds of one target; returns 1 where something broke."""
    from tests.fuzz.targets import TARGETS

    target = TARGETS[name]
    seen: set[str] = set()
    tried, longest, end = 0, 0.0, time.monotonic() + seconds
    while time.monotonic() < end:
        data = damaged(target.seeds, chance)
        begun = time.process_time()
        where = broken(name, data)
        took = time.process_time() - begun
        longest = max(longest, took)
        if where and where not in seen:
            seen.add(where)
            print(f"{name}: {where}: {keep(name, data, into)}")
        tried += 1
    print(f"{name}: {tried} tried, {len(seen)} broke something, the longest took {longest:.1f} s")
    return int(bool(seen))


def damaged(seeds: Sequence[bytes], chance: random.Random) -> bytes:
    from tests.fuzz.targets import GRAFTS

    data = bytearray(chance.choice(seeds))
    for _ in range(chance.choice((1, 1, 2, 3, 6))):
        at = chance.randrange(len(data) + 1)
        size = chance.choice((1, 2, 4, 8, 30, 200))
        kind = chance.randrange(7)
        if kind == 0:
            del data[at : at + size]
        elif kind == 1:
            data[at : at + chance.choice((0, 1, 4, 8))] = chance.choice(GRAFTS)
        elif kind == 2 and at < len(data):
            data[at] ^= 1 << chance.randrange(8)
        elif kind == 3:
            data[at:at] = data[at : at + size] * chance.choice((1, 2, 50))
        elif kind == 4:
            other = chance.choice(seeds)
            start = chance.randrange(len(other) + 1)
            data[at : at + size] = other[start : start + size]
        elif kind == 5:
            data[at : at + size] = chance.randbytes(size)
        else:
            lines = data.split(b"\n")
            one, two = chance.randrange(len(lines)), chance.randrange(len(lines))
            lines[one], lines[two] = lines[two], lines[one]
            data = bytearray(b"\n".join(lines))
    return bytes(data[: 1 << 20])


def broken(name: str, data: bytes) -> str:
    """Return where and how a target broke, "" where it answered or refused in words."""
    from phaseid.errors import PhaseidError
    from tests.fuzz.targets import TARGETS

    try:
        with warnings.catch_warnings(), at_most(SLOW_S):
            warnings.simplefilter("error")
            TARGETS[name].take(data)
    except PhaseidError:
        pass
    except (Exception, TooSlow) as error:
        ours = [f for f in traceback.extract_tb(error.__traceback__) if "phaseid" in f.filename]
        last = ours[-1] if ours else traceback.extract_tb(error.__traceback__)[-1]
        return f"{type(error).__name__} at {Path(last.filename).name}:{last.lineno} ({error})"[:200]
    return ""


@contextmanager
def at_most(seconds: float) -> Iterator[None]:
    """Raise TooSlow after so much CPU time, wherever the program then is."""

    def stop(*_: object) -> None:
        raise TooSlow(f"more than {seconds:g} s")

    signal.signal(signal.SIGPROF, stop)
    signal.setitimer(signal.ITIMER_PROF, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_PROF, 0)


class TooSlow(BaseException):
    """No handler of errors on the way keeps this one."""


def keep(name: str, data: bytes, into: Path) -> Path:
    into.mkdir(parents=True, exist_ok=True)
    path = into / f"{name}-{hashlib.sha256(data).hexdigest()[:12]}"
    path.write_bytes(data)
    return path


def guided(name: str, seconds: float, into: Path) -> int:
    """Let coverage steer one target; ends the process."""
    try:
        import atheris
    except ImportError:
        print("--guided needs the package atheris: pip install atheris", file=sys.stderr)
        return 2
    with atheris.instrument_imports(include=["phaseid"]):
        from tests.fuzz.targets import TARGETS

        for seed in TARGETS[name].seeds:  # loads what the target loads by itself
            broken(name, seed)
    corpus = into / f"corpus-{name}"
    corpus.mkdir(parents=True, exist_ok=True)
    for seed in TARGETS[name].seeds:
        (corpus / hashlib.sha256(seed).hexdigest()[:12]).write_bytes(seed)
    seen: set[str] = set()

    def one(data: bytes) -> None:
        where = broken(name, data)
        if where and where not in seen:
            seen.add(where)
            print(f"{name}: {where}: {keep(name, data, into)}", flush=True)

    options = [f"-max_total_time={int(seconds)}", "-max_len=4000", "-verbosity=0", str(corpus)]
    atheris.Setup([sys.argv[0], *options], one)
    atheris.Fuzz()
    return int(bool(seen))


if __name__ == "__main__":
    sys.exit(main())
