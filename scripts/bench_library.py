"""What a library costs: adding, opening, loading lines, lines at another energy, and cold commands.

    scripts/bench library [--library FILE] [CIF FILES, FOLDERS, ZIPS]

Structures added come from the paths, without any from the open structures beside the checkout
(../shared/data/open_structures.zip), else from the starter structures. Times are wall clock, best
of several; commands start a fresh Python each.
"""

from __future__ import annotations

import argparse
import math
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from pathlib import Path

from phaseid.library import Library, build_starter
from phaseid.resources import data_path

OPEN_STRUCTURES = Path(__file__).parents[2] / "shared" / "data" / "open_structures.zip"
MOLYBDENUM_KA1_EV = 17479.4
DEMO = ("foil_electrons.csv", "foil_xrays.csv")


def wall_seconds(work: Callable[[], object], repeats: int = 5) -> float:
    best = math.inf
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        best = min(best, time.perf_counter() - start)
    return best


def command_seconds(words: Sequence[str], library: Path) -> float:
    environment = {**os.environ, "PHASEID_LIBRARY": str(library)}
    command = [sys.executable, "-m", "phaseid", *words]

    def once() -> None:
        subprocess.run(command, env=environment, check=True, capture_output=True)

    return wall_seconds(once, 3)


def show_adding(folder: Path, paths: Sequence[Path]) -> None:
    with Library.create(folder / "added.sqlite") as library:
        start = time.perf_counter()
        tally = library.add(paths)
        first = time.perf_counter() - start
        again = wall_seconds(lambda: library.add(paths), 2)
        size = library.path.stat().st_size
        print(
            f"adding {', '.join(path.name for path in paths)}: {tally.added} structures, "
            f"{tally.added / first:.0f} per second; the same again {again:.2f} s; "
            f"{size / max(1, len(library)) / 1024:.1f} kB a structure"
        )


def show_library(path: Path) -> None:
    with Library.open(path) as library:
        phases = library.phases()
        print(f"library of {len(phases)} phases, {path.stat().st_size / 2**20:.1f} MB")
        opening = wall_seconds(lambda: Library.open(path).close())
        print(f"  opening                {1e3 * opening:.2f} ms")
        print(f"  all phases             {1e3 * wall_seconds(library.phases):.1f} ms")
        table = wall_seconds(lambda: library.line_table("electron"))
        print(f"  all lines of one probe {1e3 * table:.1f} ms")
        looked_up = [
            wall_seconds(lambda text=text: library.find(text), 3)  # type: ignore[misc]
            for text in ("corundum", "Al2O3", phases[0].phase_id)
        ]
        print(f"  a look-up              {1e3 * statistics.mean(looked_up):.2f} ms")
        some = [phase.phase_id for phase in phases[:: max(1, len(phases) // 50)]]
        anew = wall_seconds(lambda: [library.lines_at(p, MOLYBDENUM_KA1_EV) for p in some], 3)
        print(f"  lines at Mo Kα1        {1e3 * anew / len(some):.2f} ms a phase")


def show_commands(path: Path) -> None:
    demo = [str(data_path("demo", name)) for name in DEMO]
    print("commands, each in a fresh Python:")
    for words in (
        ["--version"],
        ["lines", "corundum"],
        ["library", "find", "Al2O3"],
        ["identify", *demo, "--json"],
    ):
        shown = " ".join(Path(word).name for word in words)
        print(f"  phaseid {shown:<55} {command_seconds(words, path):.2f} s")


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("paths", nargs="*", type=Path)
    parser.add_argument("--library", type=Path, help="default: the starter library, made anew")
    options = parser.parse_args()
    paths = options.paths
    if not paths:
        paths = [OPEN_STRUCTURES if OPEN_STRUCTURES.exists() else data_path("starter")]
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        show_adding(folder, paths)
        path = options.library
        if path is None:
            path = folder / "starter.sqlite"
            start = time.perf_counter()
            build_starter(path)
            print(f"starter library built in {time.perf_counter() - start:.1f} s")
        show_library(path)
        show_commands(path)
    return 0


if __name__ == "__main__":
    sys.exit(main())
