"""How fast structures become lines: end to end, by stage, against pymatgen, against the machine.

    scripts/bench lines [CIF FILES, FOLDERS, ZIPS] [--every N]

Without paths: the open structures beside the checkout (../shared/data/open_structures.zip), else
the starter structures. CPU time of one thread. Against pymatgen (its CIF parser, then XRDCalculator
for X-rays, to the same smallest d) stand phaseid's reader and the lines of all three probes.
"""

from __future__ import annotations

import argparse
import math
import resource
import statistics
import sys
import tempfile
import time
import warnings
import zipfile
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np

from phaseid.crystal.cif import read_cif
from phaseid.crystal.crystal import Crystal
from phaseid.crystal.lines import compute_lines
from phaseid.crystal.operations import read_operations
from phaseid.crystal.orbits import orbits
from phaseid.crystal.reflections import unique_reflections
from phaseid.crystal.scattering import CU_KA1_EV
from phaseid.crystal.structure_factor import squared_amplitudes
from phaseid.library import Library
from phaseid.library.entries import entry
from phaseid.resources import data_path

OPEN_STRUCTURES = Path(__file__).parents[2] / "shared" / "data" / "open_structures.zip"
MOLYBDENUM_KA1_A = 0.70931715  # short enough for 0.6 Å
GAUSSIANS = 9  # per kind of atom: 4 of X-rays, 5 of electrons
MADE_SITES = (3000, 8000)


@dataclass(frozen=True)
class Case:
    """One structure: its text, what is read of it, and the CPU seconds phaseid takes."""

    name: str
    text: bytes
    crystal: Crystal
    reading_s: float
    lines_s: float
    d_min_A: float

    @property
    def both_s(self) -> float:
        return self.reading_s + self.lines_s


def cif_texts(paths: Sequence[Path]) -> Iterator[tuple[str, bytes]]:
    for path in paths:
        if path.is_dir():
            for file in sorted(path.rglob("*.cif")):
                yield file.name, file.read_bytes()
        elif zipfile.is_zipfile(path):
            with zipfile.ZipFile(path) as archive:
                for name in sorted(n for n in archive.namelist() if n.endswith(".cif")):
                    yield name, archive.read(name)
        else:
            yield path.name, path.read_bytes()


def cpu_seconds(work: Callable[[], object], repeats: int = 3) -> float:
    best = math.inf
    for _ in range(repeats):
        start = time.process_time()
        work()
        best = min(best, time.process_time() - start)
    return best


def measured(name: str, text: bytes) -> Case | None:
    found = read_cif(text, name).crystals
    if not found:
        return None
    crystal = found[0]
    lines = compute_lines(crystal)
    return Case(
        name,
        text,
        crystal,
        cpu_seconds(lambda: read_cif(text, name), 5),
        cpu_seconds(lambda: compute_lines(crystal), 5),
        lines.complete_to_A,
    )


def first_pass(texts: Sequence[tuple[str, bytes]]) -> float:
    """CPU seconds to read and compute everything once, nothing known of any space group yet."""

    def once() -> None:
        for name, text in texts:
            for crystal in read_cif(text, name).crystals:
                compute_lines(crystal)

    return cpu_seconds(once, 1)


def pymatgen_seconds(case: Case) -> tuple[float, float] | None:
    """CPU seconds of pymatgen's parser and of its XRDCalculator; None if it refuses the file."""
    from pymatgen.analysis.diffraction.xrd import XRDCalculator
    from pymatgen.io.cif import CifParser

    text = case.text.decode("utf-8", "replace")
    limit = 2 * math.degrees(math.asin(MOLYBDENUM_KA1_A / (2 * case.d_min_A)))
    calculator = XRDCalculator(MOLYBDENUM_KA1_A)
    best = (math.inf, math.inf)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for _ in range(2):
            try:
                start = time.process_time()
                (structure, *_) = CifParser.from_str(text).parse_structures(primitive=False)
                parsed = time.process_time()
                calculator.get_pattern(structure, two_theta_range=(0, limit))
            except (ValueError, ZeroDivisionError, AssertionError, KeyError):
                return None
            best = min(best[0], parsed - start), min(best[1], time.process_time() - parsed)
    return best


def summary(seconds: Sequence[float]) -> str:
    ms = sorted(1e3 * s for s in seconds)
    return (
        f"mean {statistics.mean(ms):.3f} ms   median {statistics.median(ms):.3f}"
        f"   p90 {ms[int(0.9 * len(ms))]:.3f}   slowest {ms[-1]:.1f}"
    )


def show_stages(cases: Sequence[Case]) -> None:
    reflections = amplitudes = rows = 0.0
    for case in cases:
        crystal = case.crystal
        operations = read_operations(crystal.operations)
        found = unique_reflections(crystal.cell, operations)
        reflections += cpu_seconds(partial(unique_reflections, crystal.cell, operations))
        amplitudes += cpu_seconds(
            partial(squared_amplitudes, crystal, operations, found, CU_KA1_EV)
        )
        rows += cpu_seconds(partial(entry, crystal, ""))
    reading, lines = (sum(getattr(c, f"{part}_s") for c in cases) for part in ("reading", "lines"))
    with tempfile.TemporaryDirectory() as folder, Library.create(Path(folder) / "l") as library:
        start = time.process_time()
        library.add_crystals([case.crystal for case in cases])
        writing = time.process_time() - start - rows
    stages = {
        "reading": reading,
        "reflections": reflections,
        "amplitudes": amplitudes,
        "merging": lines - reflections - amplitudes,
        "trimming, keys, packing": rows - lines,
        "SQLite": writing,
    }
    total = sum(stages.values())
    print(
        "CIF text to stored row: "
        f"{1e3 * total / len(cases):.2f} ms, {len(cases) / total:.0f} structures per second; "
        + ", ".join(f"{name} {part / total:.0%}" for name, part in stages.items())
    )


def show_limit(cases: Sequence[Case]) -> None:
    """Count what has to be worked out, and what this machine would need for it at its best."""
    cosines = exponentials = products = 0.0
    for case in cases:
        operations = read_operations(case.crystal.operations)
        n = len(unique_reflections(case.crystal.cell, operations).hkl)
        images = len(orbits(case.crystal.cell, operations, case.crystal.sites).site)
        kinds = len({site.element for site in case.crystal.sites})
        waves = 1 if operations.centrosymmetric else 2
        cosines += waves * images * n
        exponentials += (GAUSSIANS + 1) * kinds * n
        products += n * (3 * images + waves * images * kinds + (GAUSSIANS + 4 * waves) * kinds)
    single = np.random.default_rng(0).uniform(-3, 3, 1 << 14).astype(np.float32)
    double, square = single.astype(np.float64), np.ones((256, 256))
    out32, out64, out2 = np.empty_like(single), np.empty_like(double), np.empty_like(square)

    def each_s(work: Callable[[], object], count: int) -> float:
        return cpu_seconds(lambda: [work() for _ in range(50)], 5) / 50 / count

    cosine_s = each_s(lambda: np.cos(single, out=out32), single.size)
    exponential_s = each_s(lambda: np.exp(double, out=out64), double.size)
    product_s = each_s(lambda: np.matmul(square, square, out=out2), 256**3)
    limit = cosines * cosine_s + exponentials * exponential_s + products * product_s
    taken = sum(case.lines_s for case in cases)
    each = len(cases)
    print(
        f"limit of this machine: {cosines / each:.0f} cosines at {1e9 * cosine_s:.2f} ns, "
        f"{exponentials / each:.0f} exponentials at {1e9 * exponential_s:.2f} ns, "
        f"{products / each:.0f} multiply-adds at {1e9 * product_s:.3f} ns a structure make "
        f"{1e3 * limit / each:.3f} ms, {limit / taken:.0%} of the time that lines take"
    )


def made_cell(sites: int) -> bytes:
    """A large cell without symmetry, its atoms jittered about a grid; each swings by itself."""
    rng = np.random.default_rng(sites)
    side = math.ceil(sites ** (1 / 3))
    grid = np.stack(np.unravel_index(np.arange(sites), (side,) * 3), axis=1)
    fract = (grid + 0.5 + rng.uniform(-0.15, 0.15, grid.shape)) / side
    edges = 2.2 * side * np.array([1.0, 1.03, 1.07])
    head = [f"_cell_length_{axis} {edge:.3f}" for axis, edge in zip("abc", edges, strict=True)]
    head += [f"_cell_angle_{angle} 90" for angle in ("alpha", "beta", "gamma")]
    head += ["_space_group_name_H-M_alt 'P 1'", "loop_"]
    head += [f"_atom_site_{tag}" for tag in ("label", "fract_x", "fract_y", "fract_z")]
    rows = [
        f"{('C', 'H', 'O', 'Zn')[i % 4]}{i} {x:.5f} {y:.5f} {z:.5f} {u:.4f}"
        for i, ((x, y, z), u) in enumerate(zip(fract, rng.uniform(0.01, 0.05, sites), strict=True))
    ]
    return "\n".join(["data_made", *head, "_atom_site_u_iso_or_equiv", *rows]).encode()


def show_large(cases: Sequence[Case]) -> None:
    largest = max(cases, key=lambda case: case.both_s)
    found = [(f"largest of them ({largest.name})", largest.text)]
    found += [(f"made cell of {sites} sites", made_cell(sites)) for sites in MADE_SITES]
    for name, text in found:
        start = time.process_time()
        (crystal, *_) = read_cif(text, name).crystals
        lines = compute_lines(crystal)
        print(
            f"{name}: {time.process_time() - start:.2f} s, {len(lines.d_A)} lines to "
            f"{lines.complete_to_A:.2f} Å"
        )
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"peak memory of this process so far {peak:.0f} MB")


def show_ratios(cases: Sequence[Case]) -> None:
    pairs = []
    for case in cases:  # each beside the other, so that a busy machine slows both
        theirs, mine = pymatgen_seconds(case), measured(case.name, case.text)
        if theirs is not None and mine is not None:
            pairs.append((mine, theirs))
    ratios = np.array([sum(theirs) / case.both_s for case, theirs in pairs])
    alone = [theirs[1] / case.lines_s for case, theirs in pairs]
    parsing = [theirs[0] / case.reading_s for case, theirs in pairs]
    tenth = max(1, len(pairs) // 10)
    slow = {
        "our slowest tenth": np.argsort([case.both_s for case, _ in pairs])[-tenth:],
        "its slowest tenth": np.argsort([sum(theirs) for _, theirs in pairs])[-tenth:],
        "the tenth of least gain": np.argsort(ratios)[:tenth],
    }
    print(
        f"pymatgen on {len(pairs)} of them ({len(cases) - len(pairs)} it refuses): parser "
        f"{1e3 * statistics.mean(t[0] for _, t in pairs):.1f} ms, XRDCalculator "
        f"{1e3 * statistics.mean(t[1] for _, t in pairs):.0f} ms in the mean"
    )
    print(
        f"times faster, reading and lines: geometric mean {statistics.geometric_mean(ratios):.0f}, "
        f"least {ratios.min():.1f}; "
        + ", ".join(
            f"{name} {statistics.geometric_mean(ratios[rows]):.0f}" for name, rows in slow.items()
        )
    )
    print(
        f"  lines alone {statistics.geometric_mean(alone):.0f}, "
        f"reading alone {statistics.geometric_mean(parsing):.0f} (geometric means)"
    )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("paths", nargs="*", type=Path)
    parser.add_argument(
        "--every", type=int, default=1, metavar="N", help="compare every Nth; 0: none"
    )
    options = parser.parse_args()
    paths = options.paths
    if not paths:
        paths = [OPEN_STRUCTURES if OPEN_STRUCTURES.exists() else data_path("starter")]
        print(f"structures: {paths[0].name}")
    texts = list(cif_texts(paths))
    first = first_pass(texts)
    cases = [case for name, text in texts if (case := measured(name, text)) is not None]
    if not cases:
        print("No structure could be read there.", file=sys.stderr)
        return 2
    print(f"{len(cases)} structures; the first pass {1e3 * first / len(texts):.2f} ms each, later:")
    print(f"  reading                          {summary([case.reading_s for case in cases])}")
    print(f"  lines, three probes              {summary([case.lines_s for case in cases])}")
    show_stages(cases)
    show_limit(cases)
    show_large(cases)
    if options.every > 0:
        show_ratios(cases[:: options.every])
    return 0


if __name__ == "__main__":
    sys.exit(main())
