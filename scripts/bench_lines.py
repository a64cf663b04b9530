#!/usr/bin/env python3
"""How fast lines are computed: per structure, where the time goes, and against pymatgen.

CPU time of all threads (scripts/bench allows one), best of three. pymatgen's XRDCalculator computes
X-rays only, from the same atoms to the same smallest d; phaseid computes all three probes.
"""

from __future__ import annotations

import argparse
import math
import resource
import statistics
import sys
import time
import zipfile
from collections.abc import Callable, Iterator, Sequence
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
from phaseid.resources import data_path

MOLYBDENUM_KA1_A = 0.70931715  # short enough for 0.6 Å


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


def pymatgen_seconds(crystal: Crystal, d_min_A: float) -> float:
    """CPU time of XRDCalculator on every atom of the cell, the structure made beforehand."""
    from pymatgen.analysis.diffraction.xrd import XRDCalculator
    from pymatgen.core import Lattice, Structure

    p1 = read_operations(crystal.operations)
    found = orbits(crystal.cell, p1, crystal.sites)
    signs = (1, -1) if p1.centrosymmetric else (1,)
    places: dict[tuple[int, ...], dict[str, float]] = {}
    coords: dict[tuple[int, ...], np.ndarray] = {}
    for fract, site in zip(found.fract, found.site, strict=True):
        for sign in signs:
            for centring in p1.centrings:
                place = (sign * fract + centring + p1.origin) % 1.0
                key = tuple(np.rint(place * 5000).astype(int) % 5000)
                atoms = places.setdefault(key, {})
                coords.setdefault(key, place)
                element = crystal.sites[site].element
                atoms[element] = min(1.0, crystal.sites[site].occupancy)
    species = []
    for atoms in places.values():
        crowd = max(1.0, sum(atoms.values()))
        species.append({element: share / crowd for element, share in atoms.items()})
    structure = Structure(Lattice.from_parameters(*crystal.cell), species, list(coords.values()))
    calculator = XRDCalculator(MOLYBDENUM_KA1_A)
    limit = 2 * math.degrees(math.asin(MOLYBDENUM_KA1_A / (2 * d_min_A)))
    start = time.process_time()
    calculator.get_pattern(structure, two_theta_range=(0, limit))
    return time.process_time() - start


def cosine_nanoseconds() -> float:
    phase = np.random.default_rng(0).uniform(-3, 3, 1 << 14).astype(np.float32)
    out = np.empty_like(phase)
    return (
        cpu_seconds(lambda: [np.cos(phase, out=out) for _ in range(200)]) / 200 / len(phase) * 1e9
    )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("paths", nargs="*", type=Path, default=[data_path("starter")])
    parser.add_argument("--d-min", type=float, default=None, help="Å; default: adaptive")
    parser.add_argument("--pymatgen", type=int, metavar="N", default=0, help="compare every Nth")
    options = parser.parse_args()

    start = time.process_time()
    crystals = [c for name, data in cif_texts(options.paths) for c in read_cif(data, name).crystals]
    reading = time.process_time() - start
    if not crystals:
        print("No structure could be read there.", file=sys.stderr)
        return 2
    for crystal in crystals:
        compute_lines(crystal, d_min_A=options.d_min)  # fills the caches of space groups
    mine = [
        cpu_seconds(lambda c=crystal: compute_lines(c, d_min_A=options.d_min))
        for crystal in crystals
    ]
    ms = sorted(second * 1e3 for second in mine)
    count = len(ms)
    slowest = crystals[int(np.argmax(mine))]
    print(f"structures {count}   reading {reading / count * 1e3:.2f} ms each")
    print(
        f"lines, X-rays + electrons + neutrons: mean {statistics.mean(ms):.2f} ms"
        f"   median {statistics.median(ms):.2f}   p90 {ms[int(0.9 * count)]:.2f}"
        f"   slowest {ms[-1]:.1f} ({slowest.source.file})"
    )
    print(f"structures per second and core: {1e3 / statistics.mean(ms):.0f}")

    hkl = work = 0.0
    phases = 0
    for crystal in crystals:
        operations = read_operations(crystal.operations)
        found = unique_reflections(crystal.cell, operations, options.d_min)
        hkl += cpu_seconds(
            lambda c=crystal, o=operations: unique_reflections(c.cell, o, options.d_min)
        )
        work += cpu_seconds(
            lambda c=crystal, o=operations, f=found: squared_amplitudes(c, o, f, CU_KA1_EV)
        )
        waves = 1 if operations.centrosymmetric else 2
        images = len(orbits(crystal.cell, operations, crystal.sites).site)
        phases += waves * images * len(found.hkl)
    total = sum(mine)
    cosine = cosine_nanoseconds()
    rest = total - hkl - work
    print(
        f"time: reflections {hkl / total:.0%}   amplitudes {work / total:.0%}"
        f"   merging and the rest {rest / total:.0%}"
    )
    print(
        f"arithmetic limit: {phases / count:.0f} cosines a structure at {cosine:.2f} ns"
        f" = {phases * cosine / 1e6 / count:.3f} ms, {phases * cosine / 1e9 / total:.0%} of it"
    )
    print(f"peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB")

    if options.pymatgen:
        ratios, theirs, ours = [], [], []
        for i in range(0, count, options.pymatgen):
            d_min_A = (
                options.d_min
                or unique_reflections(
                    crystals[i].cell, read_operations(crystals[i].operations)
                ).d_min_A
            )
            theirs.append(pymatgen_seconds(crystals[i], d_min_A))
            ours.append(mine[i])
            ratios.append(theirs[-1] / ours[-1])
            print(f"{i + 1}/{count} {crystals[i].source.file} {ratios[-1]:.0f}", file=sys.stderr)
        slow = np.argsort(theirs)[-max(1, len(theirs) // 10) :]
        tenth = sum(theirs[i] for i in slow) / sum(ours[i] for i in slow)
        print(
            f"pymatgen XRDCalculator on {len(theirs)} of them, X-rays only:"
            f" mean {statistics.mean(theirs) * 1e3:.0f} ms"
            f"   median {statistics.median(theirs) * 1e3:.1f}"
        )
        print(
            f"times faster: mean over mean {sum(theirs) / sum(ours):.0f}"
            f"   median {statistics.median(ratios):.0f}"
            f"   geometric mean {statistics.geometric_mean(ratios):.0f}"
            f"   least {min(ratios):.0f}   on its slowest tenth {tenth:.0f}"
        )
    return 0


if __name__ == "__main__":
    sys.exit(main())
