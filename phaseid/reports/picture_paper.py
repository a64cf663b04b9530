"""A picture as PDF, drawn with matplotlib without a screen."""

from __future__ import annotations

import io
import warnings
from typing import TYPE_CHECKING, Any, Literal

from phaseid.reports.picture import Arc, Group, Line, Picture, Shade, Shape, Text, arc_points
from phaseid.reports.picture_style import LIGHT, colour, dashes
from phaseid.reports.plain import safe

if TYPE_CHECKING:
    from matplotlib.axes import Axes

UNITS_PER_INCH = 100.0
POINTS = 72.0 / UNITS_PER_INCH
_SIDE: dict[str, Literal["left", "center", "right"]] = {
    "start": "left",
    "middle": "center",
    "end": "right",
}


def pdf(picture: Picture) -> bytes:
    """The bytes of a PDF file; letters stay letters."""
    from matplotlib import rc_context
    from matplotlib.backends.backend_pdf import FigureCanvasPdf
    from matplotlib.figure import Figure

    figure = Figure(
        figsize=(picture.width / UNITS_PER_INCH, picture.height / UNITS_PER_INCH),
        facecolor=LIGHT.ground,
    )
    FigureCanvasPdf(figure)
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_xlim(0.0, picture.width)
    axes.set_ylim(picture.height, 0.0)
    axes.set_axis_off()
    for order, shape in enumerate(picture.shapes):
        _draw(axes, shape, order)
    stream = io.BytesIO()
    metadata: dict[str, Any] = {"Title": safe(picture.label), "CreationDate": None}
    with warnings.catch_warnings(), rc_context({"pdf.fonttype": 42}):
        warnings.simplefilter("ignore")  # a letter the face lacks is shown as a box
        figure.savefig(stream, format="pdf", metadata=metadata)
    return stream.getvalue()


def _draw(axes: Axes, shape: Shape, order: int) -> None:
    if isinstance(shape, Group):
        for part in shape.shapes:
            _draw(axes, part, order)
            if isinstance(part, Text):
                _halo(axes, part, order)
    elif isinstance(shape, Text):
        _write(axes, shape, order)
    elif isinstance(shape, Shade):
        _lay(axes, shape, order)
    elif isinstance(shape, Line) and shape.filled:
        from matplotlib.patches import Polygon

        axes.add_patch(Polygon(shape.points, color=colour(shape.role), lw=0, zorder=order))
    else:
        _stroke(axes, shape, order)


def _lay(axes: Axes, shade: Shade, order: int) -> None:
    """Ink as opaque as the image has it, within its circle."""
    import numpy as np
    from matplotlib.patches import Circle

    red, green, blue = (int(LIGHT.ink[k : k + 2], 16) for k in (1, 3, 5))
    dots = np.empty((*shade.ink.shape, 4), dtype=np.uint8)
    dots[..., 0], dots[..., 1], dots[..., 2], dots[..., 3] = red, green, blue, shade.ink
    box = (shade.x, shade.x + shade.width, shade.y + shade.height, shade.y)
    image = axes.imshow(dots, extent=box, aspect="auto", interpolation="none", zorder=order)
    circle = Circle((shade.centre_x, shade.centre_y), shade.radius, transform=axes.transData)
    image.set_clip_path(circle)


def _stroke(axes: Axes, shape: Line | Arc, order: int) -> None:
    from matplotlib.lines import Line2D

    points = arc_points(shape) if isinstance(shape, Arc) else shape.points
    dash = [length / shape.width for length in dashes(shape.role)]  # matplotlib counts in widths
    axes.add_line(
        Line2D(
            [x for x, _ in points],
            [y for _, y in points],
            color=colour(shape.role),
            linewidth=shape.width * POINTS,
            linestyle=(0, dash) if dash else "-",
            dash_capstyle="butt",
            solid_capstyle="butt",
            zorder=order,
        )
    )


def _write(axes: Axes, text: Text, order: int, **more: Any) -> None:
    style: dict[str, Any] = {
        "color": colour(text.role),
        "weight": "bold" if text.bold else "normal",
        "zorder": 2000 + order,
        **more,
    }
    axes.text(
        text.x,
        text.y,
        safe(text.words),
        fontsize=text.size * POINTS * 0.93,  # its face runs wider than a browser's
        ha=_SIDE[text.anchor],
        va="baseline",
        parse_math=False,
        **style,
    )


def _halo(axes: Axes, text: Text, order: int) -> None:
    """Clear the ground around words on a ring; the words themselves stay letters in a PDF."""
    from matplotlib.patheffects import Stroke

    halo = [Stroke(linewidth=3.0, foreground=LIGHT.ground)]
    _write(axes, text, order, zorder=1000 + order, path_effects=halo)
