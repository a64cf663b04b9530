"""Grey images from files, checked, and which of their pixels are counts."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError
from phaseid.rings.measuring.geometry import Pixels
from phaseid.rings.measuring.image_files import (
    ARRAY,
    DETECTOR_SUFFIXES,
    DETECTORS,
    PICTURES,
    TIFF,
    Raw,
    is_mrc,
    read_pixels,
)

MIN_SIDE = 32
SUFFIXES = (".tif", ".tiff", ".png", ".jpg", ".jpeg", ".bmp", ".gif", ".npy", *DETECTOR_SUFFIXES)
_HEAD_BYTES = 1024


@dataclass(frozen=True, slots=True, eq=False)
class Plate:
    """An image as read: `counts` (h, w), which are `usable` (finite, no flags), remarks."""

    counts: Pixels
    usable: NDArray[np.bool_]
    remarks: tuple[str, ...] = ()


def is_image(path: Path) -> bool:
    """Whether a file holds an image, by its first bytes, else by its name."""
    try:
        with path.open("rb") as stream:
            head = stream.read(_HEAD_BYTES)
    except OSError:
        return False
    known = head.startswith((*TIFF, *PICTURES, ARRAY, *DETECTORS))
    return known or is_mrc(path, head) or path.suffix.lower() in SUFFIXES


def read_image(path: str | Path, *, frame: int | None = None) -> Plate:
    """The counts of an image; of several in one file the sum, or image number `frame` from 1.

    Raises InputError if the file cannot be read, is no grey image, is constant, or is larger than
    the memory set aside for it.
    """
    file = Path(path)
    try:
        with file.open("rb") as stream:
            head = stream.read(_HEAD_BYTES)
    except OSError as error:
        raise InputError(
            f"cannot be read: {(error.strerror or str(error)).lower()}",
            path=path,
            remedy="Give the path of an image.",
        ) from None
    if not head:
        raise InputError("is empty", path=path, remedy="Save the image again.")
    raw, count = read_pixels(file, head, frame)
    if raw.ndim == 3:
        raw = _grey(raw, path)
    if raw.ndim != 2 or raw.size == 0 or raw.dtype.kind not in "biuf":
        raise InputError("is not a grey image", path=path, remedy="Export it as grey TIFF or PNG.")
    remarks: tuple[str, ...] = ()
    if count > 1 and frame is None:
        remarks = (f"Its {count} images were added up; --frame N measures one of them.",)
    elif count > 1:
        remarks = (f"This is image {frame} of {count}.",)
    return _checked(raw, path, remarks)


def _checked(raw: Raw, path: str | Path, remarks: tuple[str, ...]) -> Plate:
    if min(raw.shape) < MIN_SIDE:
        raise InputError(
            f"is {raw.shape[1]} × {raw.shape[0]} pixels, too small to hold rings",
            path=path,
            remedy=f"At least {MIN_SIDE} pixels a side are needed.",
        )
    with np.errstate(over="ignore"):
        image = raw.astype(np.float32)
    usable = np.isfinite(image) & ~_flagged(raw)
    if not usable.any():
        raise InputError("has no finite pixel", path=path, remedy="Export the image again.")
    low, high = float(image[usable].min()), float(image[usable].max())
    if low == high:
        raise InputError(
            f"is constant: every pixel is {low:g}",
            path=path,
            remedy="Check that the exposure was saved, not an empty frame.",
        )
    image[~usable] = low
    return Plate(image, usable, remarks)


def _flagged(raw: Raw) -> NDArray[np.bool_]:
    """Pixels (h, w) that hold a mark instead of counts: gaps between modules, dead pixels.

    Counting detectors write -1 and -2, or the largest number of the type (common practice, no
    source).
    """
    none = np.zeros(raw.shape, dtype=np.bool_)
    if raw.dtype.kind not in "iu":
        return none
    marked = none
    below = raw < 0
    if below.any() and len(np.unique(raw[below])) <= 3:
        marked = below
    top = int(np.iinfo(raw.dtype).max)
    at_top = raw == top
    if at_top.any() and not at_top.all() and int(raw[~at_top].max()) < top // 2:
        marked = marked | at_top
    return marked


def _grey(array: Raw, path: str | Path) -> Raw:
    """The grey channel of a picture stored as colour; raises InputError if it has real colour."""
    colours = array[..., : min(3, array.shape[2])]
    if array.shape[2] == 2:  # grey and opacity
        return np.asarray(array[..., 0])
    if (colours == colours[..., :1]).all():
        return np.asarray(colours[..., 0])
    raise InputError(
        "is a colour image; its colours are no measure of intensity",
        path=path,
        remedy="Export the image in grey, without a colour map, scale bar or labels.",
    )
