"""What finding costs in a large library: questions put to a generated table of phases.

    scripts/bench finding [--phases 500000]

The rows are those of the starter structures with an element exchanged and the cell scaled, by seed;
they have no lines, which finding does not read. Times are CPU time of one thread, first and best of
four, start-up of Python excluded; a question lists 50 phases and counts the rest.
"""

from __future__ import annotations

import argparse
import random
import sqlite3
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

from phaseid.library import Library, build_starter
from phaseid.library.formulas import SYMBOLS, name_key
from phaseid.library.question import Question

S = frozenset
QUESTIONS = (
    Question(must=S({"Al", "O"})),
    Question(must=S({"O"})),
    Question(must=S({"Al", "O"}), only=S({"Al", "O"})),
    Question(only=S({"Al", "Ca", "Fe", "H", "K", "Mg", "Na", "O", "Si"})),
    Question(must=S({"Fe"}), exclude=S({"O"})),
    Question(space_group="225"),
    Question(space_group="P21/c", must=S({"Fe", "O"})),
    Question(space_group="Fm-3m", density_g_cm3=(2.0, 3.0)),
    Question(edges_A=(4.76, 12.99)),
    Question(edges_A=(5.43,)),
    Question(edges_A=(4.6, 2.95), must=S({"O"})),
    Question(density_g_cm3=(2.6, 2.7)),
    Question(must=S({"Ti", "O"}), density_g_cm3=(4.0, 4.5)),
    Question(source="COD 1234567"),
    Question(text="corundum"),
    Question(text="Al2O3"),
    Question(name="quartz"),
    Question(text="oxide"),
    Question(text="oxide", must=S({"Fe"})),
)
ELEMENTS = SYMBOLS[:94]
SCALED = {"a_A": 1, "b_A": 1, "c_A": 1, "volume_A3": 3, "density_g_cm3": -3}


def rows(file: Path, count: int) -> Iterator[dict[str, Any]]:
    """Yield generated rows of table `phase`, from those of a library."""
    dice = random.Random(1)
    with closing(sqlite3.connect(file)) as conn:
        conn.row_factory = sqlite3.Row
        given = [dict(row) for row in conn.execute("SELECT * FROM phase")]
    for number in range(count):
        row = dict(dice.choice(given))
        held = row["elements"].split()
        old, new = dice.choice(held), dice.choice(ELEMENTS)
        if new not in held:
            row["elements"] = " ".join(sorted([new, *(e for e in held if e != old)]))
            parts = row["formula_key"].replace(f"{old}0", f"{new}0").split()
            row["formula_key"] = " ".join(sorted(parts))
        factor = dice.uniform(0.9, 1.1)
        row |= {column: row[column] * factor**power for column, power in SCALED.items()}
        row |= {"id": number + 1, "content": f"{number:064x}", "phase_id": f"x-{number:08x}"}
        row |= {"source_database": "COD", "source_id": str(1_000_000 + number)}
        yield row


def generate(path: Path, starter: Path, count: int) -> None:
    Library.create(path).close()
    with closing(sqlite3.connect(path)) as conn:
        conn.execute("PRAGMA synchronous = OFF")
        for row in rows(starter, count):
            marks = ", ".join(f":{column}" for column in row)
            conn.execute(f"INSERT INTO phase ({', '.join(row)}) VALUES ({marks})", row)
            labels = (
                (row["id"], "name", row["name"], name_key(row["name"])),
                (row["id"], "number", f"COD {row['source_id']}", row["source_id"]),
            )
            conn.executemany(
                "INSERT INTO label (phase, kind, text, key) VALUES (?, ?, ?, ?)", labels
            )
        conn.execute("DELETE FROM ungrouped")
        conn.commit()


def told(question: Question) -> str:
    asked = {name: getattr(question, name) for name in question.__slots__}
    nothing = Question()
    return ", ".join(
        f"{name} {' '.join(sorted(value)) if isinstance(value, S) else value}"
        for name, value in asked.items()
        if value != getattr(nothing, name)
    )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--phases", type=int, default=500_000)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        path, starter = Path(place) / "large.sqlite", Path(place) / "starter.sqlite"
        build_starter(starter)
        generate(path, starter, options.phases)
        with Library.open(path) as library:
            print(f"{options.phases} phases\n  first   best    found  question")
            for question in QUESTIONS:
                times = []
                for _ in range(4):
                    start = time.process_time()
                    found = library.search(question, limit=50)
                    times.append(1e3 * (time.process_time() - start))
                count = f"{found.total}{'+' if found.more else ''}"
                print(f"{times[0]:7.1f} {min(times):6.1f} {count:>8}  {told(question)}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
