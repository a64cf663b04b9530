"""Ring images drawn from known geometry. Shares no code with the finder.

A pixel's radius is that of the circle before distortion: the coordinates are turned into the
ellipse's axes, divided by its half-axes' factors and measured from the centre.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Scene:
    """What a drawn image holds; lengths in px, angles in degrees, peaks in counts."""

    size: tuple[int, int]  # height, width
    centre: tuple[float, float]  # x, y
    radii: tuple[float, ...]
    heights: tuple[float, ...]
    sigma: float = 1.8
    ratio: float = 1.0
    angle: float = 0.0
    background: float = 20.0
    tail: float = 400.0
    tail_length: float = 25.0
    halo: tuple[float, float, float] | None = None  # radius, sigma, height
    stop: tuple[float, float, float] | None = None  # half-width, tip radius, direction in degrees
    through: float = 0.02  # what the stop lets pass
    spots: int = 0  # crystallites a ring, 0 for even rings
    texture: float = 0.0
    dead: int = 0
    hot: int = 0
    scratches: int = 0
    saturation: float | None = None
    seed: int = 0


@dataclass(frozen=True, eq=False)
class Drawing:
    """Counts (h, w), and for each ring of the scene how many sigmas it stands above the counting
    noise of what lies under it, its background and everything else known."""

    counts: NDArray[np.float64]
    clear: NDArray[np.float64]


def draw(scene: Scene) -> NDArray[np.float64]:
    return drawing(scene).counts


def drawing(scene: Scene) -> Drawing:
    rng = np.random.default_rng(scene.seed)
    height, width = scene.size
    yy, xx = np.mgrid[0:height, 0:width].astype(float)
    dx, dy = xx - scene.centre[0], yy - scene.centre[1]
    phi = np.radians(scene.angle)
    along = dx * np.cos(phi) + dy * np.sin(phi)
    across = -dx * np.sin(phi) + dy * np.cos(phi)
    along, across = along / np.sqrt(scene.ratio), across * np.sqrt(scene.ratio)
    r = np.sqrt(along**2 + across**2)
    azimuth = np.arctan2(across, along)
    picture = scene.background + scene.tail * np.exp(-r / scene.tail_length)
    if scene.halo is not None:
        at, spread, top = scene.halo
        picture = picture + top * np.exp(-0.5 * ((r - at) / spread) ** 2)
    rings = []
    for radius, top in zip(scene.radii, scene.heights, strict=True):
        ring = top * np.exp(-0.5 * ((r - radius) / scene.sigma) ** 2)
        if scene.texture:
            ring = ring * (1 + scene.texture * np.cos(4 * azimuth + radius))
        if scene.spots:
            places = rng.uniform(-np.pi, np.pi, scene.spots)
            strengths = rng.exponential(1.0, scene.spots)
            along_ring = np.linspace(-np.pi, np.pi, 8192, endpoint=False)
            pattern = np.zeros(8192)
            spread = scene.sigma / radius
            for place, strength in zip(places, strengths, strict=True):
                off = np.angle(np.exp(1j * (along_ring - place)))
                pattern += strength * np.exp(-0.5 * (off / spread) ** 2)
            pattern /= pattern.mean()
            ring = ring * np.interp(azimuth, along_ring, pattern, period=2 * np.pi)
        rings.append(ring)
        picture = picture + ring
    open_to = np.ones(scene.size)
    if scene.stop is not None:
        half, tip, direction = scene.stop
        t = np.radians(direction)
        u, v = dx * np.cos(t) + dy * np.sin(t), -dx * np.sin(t) + dy * np.cos(t)
        shaded = ((np.abs(v) < half) & (u > 0)) | (np.hypot(dx, dy) < tip)
        open_to[shaded] = scene.through
    picture = open_to * picture
    seen = open_to == 1.0
    if scene.saturation is not None:
        seen &= picture < 0.9 * scene.saturation
    clear = [float(np.sqrt((ring[seen] ** 2 / picture[seen]).sum())) for ring in rings]
    counts = rng.poisson(picture).astype(float)
    for number, value in ((scene.dead, 0.0), (scene.hot, 20 * float(counts.max()))):
        counts[rng.integers(0, height, number), rng.integers(0, width, number)] = value
    for _ in range(scene.scratches):
        x, y, turn = rng.uniform(0, width), rng.uniform(0, height), rng.uniform(0, np.pi)
        off = (xx - x) * np.sin(turn) - (yy - y) * np.cos(turn)
        on = (np.abs(off) < 0.8) & (np.hypot(xx - x, yy - y) < 0.3 * width)
        counts[on] = rng.poisson(rng.choice([0.3, 3.0]) * counts[on])
    if scene.saturation is not None:
        counts = np.minimum(counts, scene.saturation)
    return Drawing(counts, np.array(clear))


def random_scene(seed: int, size: int = 384) -> Scene:
    """A scene as plates vary: off centre, distorted, some with stop, halo, spots or texture."""
    rng = np.random.default_rng(seed + 1000)
    height, width = size, int(size * rng.uniform(0.9, 1.2))
    reach = 0.46 * size
    radii: list[float] = []
    while len(radii) < rng.integers(5, 11):
        r = float(rng.uniform(0.14, 0.98)) * reach
        if all(abs(r - other) > 9 for other in radii):
            radii.append(r)
    stop = (float(rng.uniform(5, 9)), float(rng.uniform(9, 16)), float(rng.uniform(0, 360)))
    halo = (float(rng.uniform(0.3, 0.6)) * reach, 0.11 * size, float(rng.uniform(10, 60)))
    scene = Scene(
        size=(height, width),
        centre=(width / 2 + float(rng.normal(0, 12)), height / 2 + float(rng.normal(0, 12))),
        radii=tuple(sorted(radii)),
        heights=tuple(float(10 ** rng.uniform(0.6, 2.2)) for _ in radii),
        sigma=float(rng.uniform(1.2, 2.6)),
        ratio=float(1 + rng.uniform(0, 0.02)),
        angle=float(rng.uniform(0, 180)),
        background=float(10 ** rng.uniform(0.7, 2)),
        tail=float(10 ** rng.uniform(2, 3.3)),
        tail_length=float(rng.uniform(15, 40)),
        halo=halo if rng.random() < 0.4 else None,
        stop=stop if rng.random() < 0.5 else None,
        spots=int(rng.integers(60, 300)) if rng.random() < 0.25 else 0,
        texture=float(rng.uniform(0.2, 0.6)) if rng.random() < 0.2 else 0.0,
        dead=20,
        hot=20,
        seed=seed,
    )
    return replace(
        scene,
        through=float(rng.uniform(0.1, 0.4)) if rng.random() < 0.3 else 0.02,
        scratches=int(rng.integers(1, 4)) if rng.random() < 0.2 else 0,
        saturation=float(
            0.8 * max(scene.heights)
            + 2 * scene.background
            + (0 if scene.halo is None else scene.halo[2])
        )
        if rng.random() < 0.1
        else None,
    )
