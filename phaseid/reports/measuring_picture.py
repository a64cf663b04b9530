"""A picture of what was measured: the curve, its background and the rings found."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from phaseid.errors import InputError
from phaseid.reports.plain import safe
from phaseid.rings.measuring import Measurement

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

    figure = Figure(figsize=(8.0, 4.5), layout="constrained")
    axes = figure.subplots()
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
    axes.set_title(safe(Path(found.source).name).replace("$", r"\$"), fontsize=10)
    axes.legend(frameon=False, fontsize=8)
    try:
        figure.savefig(path, dpi=150)
    except OSError as error:
        raise InputError(
            f"cannot be written: {(error.strerror or str(error)).lower()}",
            path=path,
            remedy="Choose another place with --plot.",
        ) from None
