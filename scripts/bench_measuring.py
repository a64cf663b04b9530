"""How well rings and peaks are measured: drawn images and profiles of known truth, measured again.

    python scripts/bench_measuring.py [images] [profiles] [phases] [--cases 200] [--seed 1]

What draws them stands in tests/rings and shares no code with what measures. `images`: centre,
ellipse, radii, rings found and invented. `profiles`: the same of peaks. `phases`: images of phases
of the starter library, measured and identified, beside the same rings given as numbers.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from phaseid.errors import InputError
from phaseid.rings.measuring import measure_pixels

sys.path.insert(0, str(Path(__file__).parents[1] / "tests" / "rings"))

from ring_images import drawing, random_scene


def spread(values: list[float]) -> str:
    """Standard deviation of pulls, and how many lie beyond three."""
    pulls = np.array(values)
    beyond = 100 * float((np.abs(pulls) > 3).mean())
    return (
        f"mean {pulls.mean():+.2f}, sd {pulls.std():.2f}, beyond 3: {beyond:.1f} % of {len(pulls)}"
    )


def images(cases: int, seed: int) -> None:
    """Drawn images of every kind, 384 px high."""
    off, ellipse, radius = [], [], []
    clear: list[tuple[float, bool]] = []
    limits: list[bool] = []
    invented = refused = 0
    seconds = 0.0
    for case in range(cases):
        scene = random_scene(100_000 * seed + case)
        drawn = drawing(scene)
        image = drawn.counts.astype(np.float32)
        start = time.process_time()
        try:
            found = measure_pixels(image, np.ones(image.shape, dtype=bool), source=f"{case}")
        except InputError as error:
            print(f"  case {case}: {error}")
            refused += 1
            clear += [(float(c), False) for c in drawn.clear]
            continue
        finally:
            seconds += time.process_time() - start
        geometry = found.geometry
        assert geometry is not None
        off.append(float(np.hypot(geometry.x - scene.centre[0], geometry.y - scene.centre[1])))
        if geometry.ellipse_known:
            e, turn = 0.5 * np.log(scene.ratio), np.radians(2 * scene.angle)
            sigma = np.sqrt(np.diag(geometry.covariance))
            ellipse.append(float(geometry.stretch_c - e * np.cos(turn)) / float(sigma[2]))
            ellipse.append(float(geometry.stretch_s - e * np.sin(turn)) / float(sigma[3]))
        taken = set()
        for r, top, c in zip(scene.radii, scene.heights, drawn.clear, strict=True):
            apart = [abs(ring.position - r) for ring in found.rings]
            k = int(np.argmin(apart))
            hit = apart[k] < 2.0
            clear.append((float(c), hit))
            if top * scene.sigma * np.sqrt(2 * np.pi) > found.limit:
                limits.append(hit)
            if hit:
                taken.add(k)
                radius.append((found.rings[k].position - r) / found.rings[k].sigma)
        extra = len(found.rings) - len(taken)
        invented += extra
        if extra or off[-1] > 1:
            print(f"  case {case}: {extra} invented, centre off by {off[-1]:.2f} px")
    print(f"{cases} images, {refused} refused, {1e3 * seconds / cases:.0f} ms each")
    print(f"centre off by {np.median(off):.3f} px (median), {np.percentile(off, 95):.3f} px (95 %)")
    print(f"ellipse, pulls: {spread(ellipse)}; determined in {len(ellipse) // 2} images")
    print(f"radii, pulls: {spread(radius)}")
    print(f"above the stated limit: {100 * np.mean(limits):.1f} % of {len(limits)} found")
    for low, high in ((0, 3), (3, 5), (5, 8), (8, 12), (12, 20), (20, np.inf)):
        hits = [hit for c, hit in clear if low <= c < high]
        if hits:
            print(f"  {low:g} to {high:g} sigmas: {100 * np.mean(hits):.1f} % of {len(hits)} found")
    print(f"invented rings: {invented} in {cases - refused} images")


PARTS: dict[str, Callable[[int, int], None]] = {"images": images}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("parts", nargs="*", choices=list(PARTS), default=list(PARTS))
    parser.add_argument("--cases", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    for part in options.parts:
        PARTS[part](options.cases, options.seed)


if __name__ == "__main__":
    main()
