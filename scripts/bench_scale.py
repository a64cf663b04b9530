"""How phaseid fares with large libraries: adding, size, searching, looking up, memory.

    scripts/bench scale [--phases 100000] [--most 500000] [--keep FOLDER] [--brute-force 2]

The library is built from the structures of ../shared/data where they lie beside the checkout
(mp_structures.zip, then prototypes made by make_prototypes.py), else from the starter structures
with other cells. The largest library repeats stored rows of the smaller one with stretched cells,
which saves the time of computing lines; its structures keep the cells they had. `--keep` keeps the
libraries in a folder and takes those it finds there. One core; other work on the machine slows it.
"""

from __future__ import annotations

import argparse
import hashlib
import math
import os
import shutil
import sqlite3
import statistics
import struct
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterable, Iterator
from contextlib import closing
from dataclasses import replace
from itertools import count, islice
from pathlib import Path
from zipfile import ZipFile

import numpy as np
from simulated_patterns import ELECTRON, XRAY, Conditions, Simulator

from phaseid.crystal.crystal import Crystal
from phaseid.library import Library
from phaseid.library.packing import KINDS
from phaseid.library.starter import starter_crystals
from phaseid.library.strongest import BLOCK, CODE_STEP, PLACES, write_blocks
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.field import field_of
from phaseid.matching.identify import identify
from phaseid.rings.ringlist import RingList
from phaseid.rings.writing import rings_to_text

SHARED = Path(__file__).parents[2] / "shared" / "data"
ADDED = 1000
"""New structures added to each library to find the rate."""
REPEATS = 4
STARTER = 900
"""Patterns are of phases among the first so many: those of the starter library."""
COARSE = replace(ELECTRON, scale=0.015, grades=True)
CASES: tuple[tuple[str, tuple[Conditions, ...], tuple[float, ...]], ...] = (
    ("electrons", (ELECTRON,), (1.0,)),
    ("electrons, 1.5 %, grades", (COARSE,), (1.0,)),
    ("x-rays", (XRAY,), (1.0,)),
    ("two phases, x-rays", (XRAY,), (1.0, 0.5)),
    ("three phases, x-rays", (XRAY,), (1.0, 0.7, 0.4)),
    ("electrons and x-rays", (ELECTRON, XRAY), (1.0,)),
)


def say(text: str) -> None:
    print(text, flush=True)


def stretched(crystals: Iterable[Crystal]) -> Iterator[Crystal]:
    """The crystals again and again, each time with other cells and without a number."""
    held = list(crystals)
    random = np.random.default_rng(1)
    for _ in count():
        for crystal in held:
            by = math.exp(random.normal(0.0, 0.02))
            a, b, c, alpha, beta, gamma = crystal.cell
            cell = (by * a, by * b, by * c, alpha, beta, gamma)
            yield replace(crystal, cell=cell, source=replace(crystal.source, id=""))


def part_of(archive: Path, most: int, made: Path) -> Path:
    """The first CIF files of an archive, in one of its own."""
    with ZipFile(archive) as whole, ZipFile(made, "w") as part:
        for name in [n for n in whole.namelist() if n.endswith(".cif")][:most]:
            part.writestr(name, whole.read(name))
    return made


def fill(library: Library, wanted: int, folder: Path) -> None:
    """Add structures until the library holds `wanted` phases, or a few less."""
    held, start, wall = len(library), time.process_time(), time.perf_counter()
    if not held:
        library.add_crystals(islice(starter_crystals(), wanted))
    structures, maker = SHARED / "mp_structures.zip", SHARED / "make_prototypes.py"
    missing = wanted - len(library)
    if missing > 0 and structures.exists():
        library.add([part_of(structures, missing, folder / "part.zip")])
    missing = wanted - len(library)
    if missing > 0 and maker.exists():
        made = folder / "made.zip"
        command = [sys.executable, str(maker), "-n", str(missing), "-o", str(made), "--seed", "7"]
        subprocess.run(command, check=True, capture_output=True)
        library.add([made])
    elif missing > 0:
        library.add_crystals(islice(stretched(starter_crystals()), missing))
    added = len(library) - held
    cpu, wall = time.process_time() - start, time.perf_counter() - wall
    say(f"built from {held} to {len(library)}: {added / cpu:.0f} per CPU second, {wall:.0f} s")


def built(folder: Path, wanted: int, small: Path | None) -> Path:
    """The library of `wanted` phases in a folder, grown from a smaller one where it is missing."""
    path = folder / f"scale-{wanted}.sqlite"
    if not path.exists():
        making = folder / "making.sqlite"
        making.unlink(missing_ok=True)
        if small is None:
            Library.create(making).close()
        else:
            shutil.copy(small, making)
        with Library.open(making) as library:
            fill(library, wanted, folder)
        making.rename(path)
    return path


def show_adding(path: Path, folder: Path) -> float:
    """Add the same new structures to a copy of a library; returns structures per CPU second."""
    new = list(islice(stretched(starter_crystals()), ADDED))
    best, clock = math.inf, math.inf
    for _ in range(REPEATS):
        copy = folder / "copy.sqlite"
        shutil.copy(path, copy)
        with Library.open(copy) as library:
            library.add_crystals([])  # what is not grouped yet is grouped now
            held = len(library)
            start, wall = time.process_time(), time.perf_counter()
            added = library.add_crystals(new).added
            best = min(best, time.process_time() - start)
            clock = min(clock, time.perf_counter() - wall)
        copy.unlink()
    say(
        f"  adding {added} to {held}: {added / best:.0f} per CPU second,"
        f" {added / clock:.0f} by clock (best of {REPEATS})"
    )
    return added / best


def repeat_rows(small: Path, path: Path, wanted: int) -> None:
    """Make a library of `wanted` phases from the rows of a smaller one with stretched cells."""
    shutil.copy(small, path)
    with closing(sqlite3.connect(path, isolation_level=None)) as conn:
        for pragma in ("journal_mode = OFF", "synchronous = OFF", "cache_size = -400000"):
            conn.execute(f"PRAGMA {pragma}")
        conn.execute("PRAGMA user_version = 0")  # the seal is that of the smaller file
        columns = [row[1] for row in conn.execute("PRAGMA table_info(phase)")]
        blocks = {part: in_pieces(conn, part) for part in ("row", "elements", "quality", *KINDS)}
        old = [struct.unpack("<q", data)[0] for data in blocks.pop("row")]
        random = np.random.default_rng(2)
        changed: dict[int, dict[str, bytes]] = {}
        conn.execute("BEGIN")
        for number in range(wanted - len(old)):
            row, place = old[-1] + 1 + number, number % len(old)
            ln_by = float(random.normal(0.0, 0.02))
            repeat_row(conn, columns, row, old[place], math.exp(ln_by))
            parts = {part: pieces[place] for part, pieces in blocks.items()}
            changed[row] = parts | {kind: shifted(parts[kind], ln_by) for kind in KINDS}
            if len(changed) == BLOCK:
                write_blocks(conn, changed)
                changed = {}
        write_blocks(conn, changed)
        conn.execute("COMMIT")


def in_pieces(conn: sqlite3.Connection, part: str) -> list[bytes]:
    """What the blocks hold of each phase in one part."""
    size = {"row": 8, "elements": 16, "quality": 8}.get(part, 3 * PLACES)
    found = conn.execute("SELECT data FROM block WHERE part = ? ORDER BY number", (part,))
    return [data[i : i + size] for (data,) in found for i in range(0, len(data), size)]


def repeat_row(conn: sqlite3.Connection, columns: list[str], row: int, old: int, by: float) -> None:
    """Enter the phase `old` again as `row`, its lengths `by` times as long."""
    held = conn.execute("SELECT * FROM phase WHERE id = ?", (old,)).fetchone()
    facts = dict(zip(columns, held, strict=True))
    content = hashlib.sha256(f"{facts['content']} {row}".encode()).hexdigest()
    facts |= {"id": row, "content": content, "phase_id": f"{facts['formula']}-{content[:16]}"}
    facts |= {"location": "", "source_id": f"{facts['source_id']}-{row}"}
    facts |= {edge: facts[edge] * by for edge in ("a_A", "b_A", "c_A")}
    facts |= {"volume_A3": facts["volume_A3"] * by**3}
    facts |= {"density_g_cm3": facts["density_g_cm3"] / by**3}
    marks = ", ".join("?" * len(columns))
    conn.execute(f"INSERT INTO phase VALUES ({marks})", list(facts.values()))
    (packed,) = conn.execute("SELECT data FROM lines WHERE phase = ?", (old,)).fetchone()
    width, *strongest = struct.unpack_from("<B3f", packed)
    head = struct.pack("<B3f", width, *(value * by**2 for value in strongest))
    conn.execute("INSERT INTO lines VALUES (?, ?)", (row, head + packed[len(head) :]))
    for table, kept in (("structure", "symmetry, data"), ("label", "kind, text, key")):
        conn.execute(
            f"INSERT INTO {table} (phase, {kept}) SELECT ?, {kept} FROM {table} WHERE phase = ?",
            (row, old),
        )


def shifted(strong: bytes, ln_by: float) -> bytes:
    """The strongest lines of a phase whose cell is stretched."""
    code = np.frombuffer(strong, dtype="<u2", count=PLACES).astype(np.int64)
    moved = np.where(code > 0, np.clip(code + round(ln_by / CODE_STEP), 1, 65535), 0)
    return moved.astype("<u2").tobytes() + strong[2 * PLACES :]


def patterns_of(library: Library, seed: int) -> list[tuple[str, list[RingList], set[str]]]:
    """Simulated patterns of starter phases: their kind, the ring lists, the ids of the phases."""
    random = np.random.default_rng(seed)
    phases = library.line_table("x-ray", library.strong_lines("x-ray").row[:STARTER].tolist())
    chosen = [phases.phase_ids[i] for i in random.choice(STARTER, 40, replace=False)]
    simulator = Simulator(lambda i: library.crystal(chosen[i]), random)
    usable = [i for i in range(len(chosen)) if simulator.usable(i)]
    made = []
    for name, conditions, shares in CASES:
        rings: list[RingList] = []
        while len(rings) < len(conditions):
            truth = [int(i) for i in random.choice(usable, len(shares), replace=False)]
            drawn = [simulator.pattern(truth, list(shares), how) for how in conditions]
            rings = [one for one in drawn if one is not None]
        made.append((name, rings, {chosen[i] for i in truth}))
    return made


# the memory of a process is told by itself: its parent hears that of the fork, too
_TELLING = """
import atexit, runpy, sys
def tell():
    with open("/proc/self/status") as status:
        print(*(line.split()[1] for line in status if line.startswith("VmHWM")), file=sys.stderr)
atexit.register(tell)
sys.argv[0] = "phaseid"
runpy.run_module("phaseid", run_name="__main__", alter_sys=True)
"""


def command(words: list[str]) -> tuple[float, float]:
    """Seconds and MB at most that a command takes in a fresh Python; nan MB where untold."""
    start = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-c", _TELLING, *words], capture_output=True, text=True, check=False
    )
    seconds = time.perf_counter() - start
    if done.returncode:
        raise SystemExit(f"phaseid {' '.join(words)} failed: {done.stderr}")
    last = done.stderr.split()[-1:]
    return seconds, int(last[0]) / 1024 if last and last[0].isdigit() else math.nan


def forget(path: Path) -> None:
    """Let the system forget what it keeps of a file in memory, where it can be asked to."""
    if hasattr(os, "posix_fadvise"):
        with path.open("rb") as file:
            os.fsync(file.fileno())
            os.posix_fadvise(file.fileno(), 0, 0, os.POSIX_FADV_DONTNEED)


def show_library(path: Path, folder: Path, seed: int, brute_force: int) -> None:
    """Everything that is asked of a large library."""
    with Library.open(path) as library:
        held = len(library)
        size = path.stat().st_size
        say(f"library of {held} phases, {size / 2**20:.0f} MB, {size / held / 1024:.2f} kB a phase")
        show_look_ups(library)
        start = time.process_time()
        library.strong_lines("x-ray")
        say(f"  reading the strongest lines: {time.process_time() - start:.2f} s CPU")
        for number, (name, patterns, truth) in enumerate(patterns_of(library, seed)):
            start, wall = time.process_time(), time.perf_counter()
            answer = identify(patterns, library)
            cpu, wall = time.process_time() - start, time.perf_counter() - wall
            field = field_of(patterns, library, Chemistry(), 3)
            passed = {field.tables[0].phase_ids[i] for i in field.phases}
            files = [folder / f"{number}-{i}.csv" for i in range(len(patterns))]
            for file, rings in zip(files, patterns, strict=True):
                file.write_text(rings_to_text(rings), encoding="utf-8")
            forget(path)
            cold, memory = command(["identify", *map(str, files), "--library", str(path)])
            say(
                f"  {name:26s} {cpu:5.2f} s CPU, {wall:5.2f} s; cold {cold:5.2f} s,"
                f" {memory:4.0f} MB; passed on {len(truth & passed)} of {len(truth)}"
            )
            if number < brute_force:
                start = time.process_time()
                whole = identify(patterns, library, exhaustive=True)
                cpu = time.process_time() - start
                same = [h.phases[0].phase.phase_id for h in whole.hypotheses[:1]] == [
                    h.phases[0].phase.phase_id for h in answer.hypotheses[:1]
                ]
                say(f"    the whole library: {cpu:.1f} s CPU; {'the same' if same else 'another'}")


def show_look_ups(library: Library) -> None:
    seconds = []
    for text in ("corundum", "Al2O3", "quartz", "Fe3O4"):
        start = time.perf_counter()
        library.find(text)
        seconds.append(time.perf_counter() - start)
    cold, _ = command(["library", "find", "corundum", "--library", str(library.path)])
    say(f"  a look-up: {1e3 * statistics.median(seconds):.1f} ms; as a command {cold:.2f} s")


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--phases", type=int, default=100_000)
    parser.add_argument("--most", type=int, default=500_000, help="0: only the library of --phases")
    parser.add_argument("--keep", type=Path, help="a folder to keep the libraries in")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--brute-force", type=int, default=1, metavar="N", help="cases searched so")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        keep = options.keep or folder
        keep.mkdir(parents=True, exist_ok=True)
        steps = [n for n in (1000, 10_000) if n < options.phases] + [options.phases]
        path = None
        rates = []
        for wanted in steps:
            path = built(keep, wanted, path)
            rates.append(show_adding(path, folder))
        say(f"  the slowest of these is {100 * (1 - min(rates) / max(rates)):.0f} % below the best")
        assert path is not None
        show_library(path, folder, options.seed, options.brute_force)
        if options.most > options.phases:
            largest = keep / f"scale-{options.most}.sqlite"
            if not largest.exists():
                repeat_rows(path, largest, options.most)
            show_library(largest, folder, options.seed, 0)
    return 0


if __name__ == "__main__":
    sys.exit(main())
