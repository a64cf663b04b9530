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
from simulated_patterns import ELECTRON, Simulator

from phaseid.errors import InputError
from phaseid.library import open_default
from phaseid.matching.identify import identify
from phaseid.rings import RingList, rings_from_values
from phaseid.rings.measuring import Curve, measure_curve, measure_pixels

sys.path.insert(0, str(Path(__file__).parents[1] / "tests" / "rings"))

from ring_images import Scene, drawing, random_scene
from ring_profiles import random_scan


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


def profiles(cases: int, seed: int) -> None:
    """Scans of LaB6 and silicon from their certified cells."""
    pulls: list[float] = []
    clear: list[tuple[float, bool]] = []
    invented = told = 0
    seconds = 0.0
    for case in range(cases):
        scan = random_scan(100_000 * seed + case)
        sigma = np.sqrt(np.maximum(scan.counts, 1.0))
        curve = Curve(
            f"{case}", "two_theta_deg", scan.two_theta_deg, scan.counts, sigma, sigma_stated=False
        )
        start = time.process_time()
        found = measure_curve(curve, probe="x-ray Cu Ka")
        seconds += time.process_time() - start
        told += (found.metadata["probe"] == "x-ray Cu Ka1") == scan.doublet
        taken = set()
        for place, c in zip(scan.peaks, scan.clear, strict=True):
            apart = [abs(peak.position - place) for peak in found.rings]
            k = int(np.argmin(apart))
            hit = apart[k] < 0.1
            clear.append((c, hit))
            if hit:
                taken.add(k)
                if found.metadata["probe"] == "x-ray Cu Ka1" or not scan.doublet:
                    pulls.append((found.rings[k].position - place) / found.rings[k].sigma)
        invented += len(found.rings) - len(taken)
        if len(found.rings) > len(taken):
            extra = [p for k, p in enumerate(found.rings) if k not in taken]
            where = ", ".join(
                f"{p.position:.2f} ({p.intensity / p.intensity_sigma:.0f})" for p in extra
            )
            print(f"  case {case}: invented {where}{' beside Kα2' * scan.doublet}")
    print(f"{cases} profiles, {1e3 * seconds / cases:.0f} ms each")
    print(f"Kα2 told rightly in {100 * told / cases:.0f} %")
    print(f"positions, pulls: {spread(pulls)}")
    for low, high in ((0, 3), (3, 5), (5, 8), (8, 12), (12, 20), (20, np.inf)):
        hits = [hit for c, hit in clear if low <= c < high]
        if hits:
            print(f"  {low:g} to {high:g} sigmas: {100 * np.mean(hits):.1f} % of {len(hits)} found")
    print(f"invented peaks: {invented} in {cases} profiles")


CAMERA_A_PX, CAMERA_SIGMA = 300.0, 0.005  # radius × d of the drawn plates
PLATE_PX, EDGE_PX = 460, 215


def phases(cases: int, seed: int) -> None:
    """Electron plates of phases of the starter library, measured and identified."""
    with open_default(None) as library:
        held = library.phases()
        simulator = Simulator(
            lambda i: library.crystal(held[i].phase_id), np.random.default_rng(seed)
        )
        hits = {"measured": 0, "typed": 0}
        done = refused = 0
        while done < cases:
            truth = int(simulator.rng.integers(len(held)))
            plate = _plate(simulator, truth) if simulator.usable(truth) else None
            if plate is None:
                continue
            done += 1
            scene, typed = plate
            lists = {"typed": typed}
            try:
                drawn = drawing(scene).counts.astype(np.float32)
                found = measure_pixels(drawn, np.ones(drawn.shape, dtype=bool), source="drawn")
                lists["measured"] = found.ring_list(
                    probe="electron 200 kV",
                    camera_constant=f"{CAMERA_A_PX} +- {CAMERA_A_PX * CAMERA_SIGMA} A px",
                )
            except InputError as error:
                print(f"  {held[truth].formula}: {error.what}")
                refused += 1
            outcome = {}
            for name, rings in lists.items():
                best = identify([rings], library).hypotheses
                named = {
                    phase.phase_id
                    for one in (best[0].phases if best else ())
                    for phase in (one.phase, *one.indistinguishable)
                }
                outcome[name] = held[truth].phase_id in named and len(best[0].phases) == 1
                hits[name] += outcome[name]
            if outcome["typed"] != outcome.get("measured"):
                print(f"  {held[truth].formula}: {outcome}, {len(scene.radii)} rings")
    for name, number in hits.items():
        share = number / cases
        error = 100 * np.sqrt(max(share * (1 - share), 0.01) / cases)
        print(f"top-1, {name}: {100 * share:.1f} ± {error:.1f} % of {cases} ({refused} refused)")


def _plate(simulator: Simulator, truth: int) -> tuple[Scene, RingList] | None:
    """A plate of one phase and the list a person would type of it; None where it has few rings.

    Positions carry the strain and intensities the scatter of real specimens in both.
    """
    rng, how = simulator.rng, ELECTRON
    scale = float(np.exp(rng.normal(0.0, CAMERA_SIGMA)))
    reflections = simulator.powder(truth)
    weight = reflections.strength["electron"] * reflections.d_A**2  # mean along the ring
    radius = CAMERA_A_PX * scale / reflections.d_A * np.exp(rng.normal(0.0, how.strain))
    inside = (radius > 30.0) & (radius < EDGE_PX)
    if not inside.any():
        return None
    bins = np.unique(np.round(np.log(radius[inside]), 4), return_inverse=True)[1]
    level = np.bincount(bins, weight[inside])
    place = np.bincount(bins, weight[inside] * radius[inside]) / np.maximum(level, 1e-300)
    level *= np.exp(rng.normal(0.0, how.scatter, len(level)))
    keep = level > 0.004 * level.max()
    place, level = place[keep], level[keep] / level.max()
    if keep.sum() < 4:
        return None
    seen = level > 0.03
    scene = Scene(
        size=(PLATE_PX, PLATE_PX),
        centre=(PLATE_PX / 2 + float(rng.normal(0, 4)), PLATE_PX / 2 + float(rng.normal(0, 4))),
        radii=tuple(place.tolist()),
        heights=tuple((200.0 * level).tolist()),
        sigma=1.3,
        ratio=1 + float(rng.uniform(0, 0.02)),
        angle=float(rng.uniform(0, 180)),
        stop=(6.0, 12.0, float(rng.uniform(0, 360))),
        seed=int(rng.integers(1 << 30)),
    )
    # by eye: lines closer than a ring is wide are one, radii to 0.3 px
    lines = sorted(zip(place[seen].tolist(), level[seen].tolist(), strict=True))
    groups: list[list[tuple[float, float]]] = []
    for line in lines:
        if groups and line[0] - groups[-1][-1][0] < 2.4 * scene.sigma:
            groups[-1].append(line)
        else:
            groups.append([line])
    if len(groups) < 4:
        return None
    sums = [sum(top for _, top in group) for group in groups]
    middles = [sum(r * top for r, top in g) / total for g, total in zip(groups, sums, strict=True)]
    typed = rings_from_values(
        [r + float(rng.normal(0.0, 0.3)) for r in middles],
        column="radius_px",
        probe="electron 200 kV",
        sigma=0.3,
        intensities=[100 * total / max(sums) for total in sums],
        camera_constant=f"{CAMERA_A_PX} +- {CAMERA_A_PX * CAMERA_SIGMA} A px",
    )
    return scene, typed


PARTS: dict[str, Callable[[int, int], None]] = {
    "images": images,
    "profiles": profiles,
    "phases": phases,
}


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
