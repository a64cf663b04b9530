"""What pictures and pages cost: cold commands by the clock, and sizes of what they write.

    scripts/bench reports [--library FILE] [--repeats N]

A three-phase pattern (corundum, aluminium, periclase, X-rays) and a plate are made from the
library's own calculated lines: it is the cost that is measured here, not the answer. Each command
starts a fresh Python; shown are the best and the median wall clock and the load of the machine.
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
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from phaseid.library import Library, build_starter
from phaseid.probes import Probe, parse_probe

PHASES = (("corundum", 1.0), ("Al", 0.8), ("periclase", 0.5))
WEAKEST = 3.0  # of 100: what the made-up pattern still shows
CAMERA_PX = 1050.0  # Å px
PLATE = ("--probe", "electron 200 kV", "--camera-constant", f"{CAMERA_PX:g} +- 5 A px")
MOST_BYTES = 1_000_000


def calculated(library: Library, probe: Probe, d_min_A: float, d_max_A: float) -> list[list[float]]:
    """d (Å) and intensity of the mixture's lines, by falling d; near ones joined."""
    found: list[list[float]] = []
    for name, weight in PHASES:
        lines = library.lines(library.choose(name).phase_id)
        inside = (lines.d_A > d_min_A) & (lines.d_A < d_max_A)
        intensity = np.where(inside, probe.intensity(lines), 0.0)
        intensity *= 100.0 * weight / intensity.max()
        shown = intensity > WEAKEST
        found += [list(pair) for pair in zip(lines.d_A[shown], intensity[shown], strict=True)]
    joined: list[list[float]] = []
    for d_A, intensity in sorted(found, reverse=True):
        if joined and joined[-1][0] / d_A < 1.0015:
            joined[-1][1] += intensity
        else:
            joined.append([float(d_A), float(intensity)])
    return joined


def ring_list(lines: Sequence[Sequence[float]]) -> str:
    rows = [f"{d:.5f},{0.0006 * d:.5f},{i:.1f}" for d, i in lines]
    head = ["# probe: x-ray Cu Ka1", "# scale uncertainty: 0.05 %", "d_A,sigma,intensity"]
    return "\n".join([*head, *rows]) + "\n"


def plate(lines: Sequence[Sequence[float]], size: int = 1024) -> NDArray[np.uint16]:
    steps = np.arange(size) - size / 2
    radius = np.hypot(*np.meshgrid(steps + 3.3, steps - 5.7))
    counts = 60.0 + 3000.0 * np.exp(-radius / 60.0)
    for d_A, intensity in lines:
        counts += 4 * intensity * np.exp(-4 * math.log(2) * ((radius - CAMERA_PX / d_A) / 5) ** 2)
    seen = np.random.default_rng(1).poisson(counts)
    return np.clip(seen, 0, 65535).astype(np.uint16)


def run(words: Sequence[str], library: Path, folder: Path, repeats: int) -> list[float]:
    environment = {**os.environ, "PHASEID_LIBRARY": str(library)}
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        subprocess.run(
            [sys.executable, "-m", "phaseid", *words],
            env=environment,
            cwd=folder,
            check=True,
            capture_output=True,
        )
        times.append(time.perf_counter() - start)
    return times


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--library", type=Path)
    parser.add_argument("--repeats", type=int, default=10)
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        library = given.library.resolve() if given.library else folder / "starter.sqlite"
        if given.library is None:
            build_starter(library)
        with Library.open(library) as shelf:
            rings = calculated(shelf, parse_probe("x-ray Cu Ka1"), 1.2, 4.5)
            spots = calculated(shelf, parse_probe("electron 200 kV"), 1.9, 4.5)
        (folder / "three.csv").write_text(ring_list(rings), encoding="utf-8")
        Image.fromarray(plate(spots)).save(folder / "plate.tif")
        commands: list[tuple[str, list[str], str]] = [
            ("identify", ["identify", "three.csv"], ""),
            *(
                (f"identify --plot {kind}", ["identify", "three.csv", "--plot", f"a.{kind}"], kind)
                for kind in ("png", "svg", "pdf")
            ),
            ("report", ["report", "three.csv", "-o", "a.html"], "html"),
            ("report of an image", ["report", "plate.tif", *PLATE, "-o", "a.html"], "html"),
            ("report --top 1000", ["report", "three.csv", "--top", "1000", "-o", "a.html"], "html"),
        ]
        print(f"{len(rings)} rings of three phases, {given.repeats} runs each, seconds and kB")
        for told, words, suffix in commands:
            times = run(words, library, folder, given.repeats)
            size = (folder / f"a.{suffix}").stat().st_size if suffix else 0
            wrote = f"{size / 1000:7.0f} kB" if suffix else ""
            over = "  above a megabyte" if size > MOST_BYTES else ""
            print(
                f"  {told:<22} best {min(times):5.2f}  median {statistics.median(times):5.2f}"
                f"{wrote}{over}"
            )
        if hasattr(os, "getloadavg"):
            print(f"load of the machine, one minute: {os.getloadavg()[0]:.1f}")


if __name__ == "__main__":
    main()
