"""A picture of what was measured: the plate, its curve and background, the rings found."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from phaseid.errors import InputError
from phaseid.reports.plain import safe
from phaseid.rings.measuring import Disc, Measurement

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_NUMBER: dict[str, Any] = {"color": "tab:orange", "fontsize": 8, "ha": "center", "va": "center"}
FORMATS = (".png", ".svg", ".pdf")


def draw_measurement(found: Measurement, path: Path) -> None:
    """Write the picture; raises InputError where its format is unknown or it cannot be written."""
    if path.suffix.lower() not in FORMATS:
        raise InputError(
            f"pictures end in {', '.join(FORMATS)}, not '{path.suffix}'",
            path=path,
            remedy="Name the picture with one of these endings.",
        )
    from matplotlib.figure import Figure

    figure = Figure(figsize=(8.0, 4.5 if found.disc is None else 8.5), layout="constrained")
    if found.disc is None:
        _draw_curve(figure.subplots(), found)
    else:
        plate, curve = figure.subplots(2, 1, height_ratios=(5, 4))
        _draw_plate(plate, found, found.disc)
        _draw_curve(curve, found)
    figure.suptitle(safe(Path(found.source).name).replace("$", r"\$"), fontsize=10)
    try:
        figure.savefig(path, dpi=150)
    except OSError as error:
        raise InputError(
            f"cannot be written: {(error.strerror or str(error)).lower()}",
            path=path,
            remedy="Choose another place with --plot.",
        ) from None


def _draw_plate(axes: Axes, found: Measurement, disc: Disc) -> None:
    """The image about its centre, ellipse corrected, with the rings found on its right half."""
    from matplotlib.patches import Arc

    reach = disc.reach_px
    axes.imshow(disc.grey, cmap="gray", vmin=0, vmax=255, extent=(-reach, reach, reach, -reach))
    for number, ring in enumerate(found.rings, start=1):
        size = 2.0 * ring.position
        axes.add_patch(
            Arc((0, 0), size, size, theta1=-60, theta2=60, color="tab:orange", linewidth=0.8)
        )
        axes.text(ring.position * 0.5, ring.position * 0.866, str(number), **_NUMBER)
    axes.plot(0, 0, "+", color="tab:orange")
    axes.set_xlabel("px from the centre, ellipse corrected")


def _draw_curve(axes: Axes, found: Measurement) -> None:
    x, mean, median, background = found.curve.T
    axes.plot(x, mean, color="black", linewidth=0.9, label="mean")
    if not np.array_equal(mean, median):
        axes.plot(x, median, color="tab:blue", linewidth=0.6, label="median along the ring")
    axes.plot(x, background, color="tab:orange", linewidth=1.0, label="background")
    top = float(mean.max())
    for number, ring in enumerate(found.rings, start=1):
        level = float(np.interp(ring.position, x, mean))
        axes.annotate(
            str(number),
            (ring.position, level),
            xytext=(0, 8),
            textcoords="offset points",
            ha="center",
            fontsize=8,
            arrowprops={"arrowstyle": "-", "linewidth": 0.5},
        )
    low = max(0.5 * float(background.min()), 1e-3 * top)
    axes.set_yscale("log")
    axes.set_ylim(low, 1.6 * top)
    axes.set_xlabel(found.column)
    axes.set_ylabel("counts")
    axes.legend(frameon=False, fontsize=8)
