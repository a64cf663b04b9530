"""An identification drawn into a PNG, SVG or PDF file."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

from phaseid.errors import InputError
from phaseid.matching.identification import Identification
from phaseid.reports.picture import Picture
from phaseid.reports.picture_axis import AxisName

if TYPE_CHECKING:
    from phaseid.library import Library

SUFFIXES = (".png", ".svg", ".pdf")


def check_picture_path(path: str | Path) -> None:
    """Refuse a file name that no picture can have, before any work is done.

    Raises InputError for another suffix than .png, .svg, .pdf, or a folder that is not there.
    """
    if Path(path).suffix.lower() not in SUFFIXES:
        raise InputError(
            "a picture cannot be written in a file of that name",
            path=path,
            remedy=f"Let it end in {SUFFIXES[0]}, {SUFFIXES[1]} or {SUFFIXES[2]}.",
        )
    check_folder(path)


def check_folder(path: str | Path) -> None:
    """Refuse a file in a folder that is not there, and a folder; raises InputError."""
    file = Path(path)
    try:
        is_folder, has_place = file.is_dir(), file.absolute().parent.is_dir()
    except OSError as error:  # a name that no file can have
        raise _unwritable(path, error) from None
    if is_folder:
        raise InputError("is a folder", path=path, remedy="Name a file in it.")
    if not has_place:
        raise InputError(
            "cannot be written: there is no such folder",
            path=path,
            remedy="Make the folder first, or choose another place.",
        )


def picture_bytes(
    answer: Identification,
    suffix: str,
    *,
    axis: AxisName | None = None,
    library: Library | None = None,
) -> bytes:
    """The picture in the format of `suffix` (.png, .svg, .pdf); `library` as in `sheet`."""
    from phaseid.reports.picture_sheet import sheet

    return drawn(sheet(answer, axis=axis, library=library), suffix)


def drawn(picture: Picture, suffix: str) -> bytes:
    """Any picture in the format of `suffix` (.png, .svg, .pdf)."""
    if suffix == ".svg":
        from phaseid.reports.picture_svg import svg_file

        return svg_file(picture).encode()
    if suffix == ".png":
        from phaseid.reports.picture_pixels import png

        return png(picture)
    from phaseid.reports.picture_paper import pdf

    return pdf(picture)


def write_picture(
    answer: Identification,
    path: str | Path,
    *,
    axis: AxisName | None = None,
    library: Library | None = None,
) -> None:
    """Draw the identification into a file; its suffix says how.

    With the answer's `library`, its lines that are too weak to be seen are drawn faintly. Raises
    InputError for another suffix than .png, .svg, .pdf, or where it cannot be written.
    """
    check_picture_path(path)
    suffix = Path(path).suffix.lower()
    write_whole(path, picture_bytes(answer, suffix, axis=axis, library=library))


def write_whole(path: str | Path, content: bytes) -> None:
    """Write a file whole or not at all; raises InputError where it cannot be written."""
    file = Path(path)
    part = file.with_name(f".phaseid-{os.getpid()}.part")
    try:
        if file.exists() and not file.is_file():  # a device or a pipe is written to, not replaced
            file.write_bytes(content)
        else:
            part.write_bytes(content)
            part.replace(file)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise _unwritable(path, error) from None


def _unwritable(path: str | Path, error: OSError) -> InputError:
    reason = (error.strerror or str(error)).lower()
    return InputError(f"cannot be written: {reason}", path=path, remedy="Choose another place.")
