"""Grey images from files: TIFF, PNG and other pictures, MRC."""

from __future__ import annotations

import struct
import warnings
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError
from phaseid.rings.measuring.geometry import Pixels

MAX_PIXELS = 50_000_000  # about 7000 × 7000, under 1 GB of memory on the way
MIN_SIDE = 32
SUFFIXES = (".tif", ".tiff", ".png", ".mrc", ".mrcs", ".map", ".jpg", ".jpeg", ".bmp", ".gif")

_MAGIC = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+", b"\x89PNG", b"\xff\xd8\xff", b"BM", b"GIF8")
# MRC2014 modes (Cheng et al. 2015, J. Struct. Biol. 192, 146)
_MRC_MODES = {0: "i1", 1: "i2", 2: "f4", 6: "u2", 12: "f2"}
_MRC_HEADER = 1024


def is_image(path: Path) -> bool:
    """Whether a file holds an image, by its first bytes, else by its name."""
    try:
        with path.open("rb") as stream:
            head = stream.read(212)
    except OSError:
        return False
    if head.startswith(_MAGIC) or head[208:211] == b"MAP":
        return True
    return path.suffix.lower() in SUFFIXES


def read_image(path: str | Path) -> tuple[Pixels, NDArray[np.bool_]]:
    """Counts (h, w) and which pixels are usable (finite).

    Raises InputError if the file cannot be read, is no single grey image, is constant, or is larger
    than the memory set aside for it.
    """
    file = Path(path)
    try:
        with file.open("rb") as stream:
            head = stream.read(_MRC_HEADER)
    except OSError as error:
        raise InputError(
            f"cannot be read: {(error.strerror or str(error)).lower()}",
            path=path,
            remedy="Give the path of an image.",
        ) from None
    if not head:
        raise InputError("is empty", path=path, remedy="Save the image again.")
    mrc = head[208:211] == b"MAP" or (file.suffix.lower() in (".mrc", ".mrcs", ".map"))
    raw = _read_mrc(file, head) if mrc else _read_picture(file)
    return _checked(raw, path)


def _checked(raw: NDArray[np.generic], path: str | Path) -> tuple[Pixels, NDArray[np.bool_]]:
    if min(raw.shape) < MIN_SIDE:
        raise InputError(
            f"is {raw.shape[1]} × {raw.shape[0]} pixels, too small to hold rings",
            path=path,
            remedy=f"At least {MIN_SIDE} pixels a side are needed.",
        )
    image = raw.astype(np.float32)
    usable = np.isfinite(image)
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
    return image, usable


def _too_large(path: Path, size: tuple[int, int] | None = None) -> InputError:
    extent = "is" if size is None else f"is {size[0]} × {size[1]} pixels,"
    return InputError(
        f"{extent} larger than phaseid takes into memory ({MAX_PIXELS / 1e6:.0f} million pixels)",
        path=path,
        remedy="Bin the image, or cut out the part with the rings.",
    )


def _read_picture(path: Path) -> NDArray[np.generic]:
    from PIL import Image, UnidentifiedImageError

    array: NDArray[np.generic] = np.zeros(0)
    size = (0, 0)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with Image.open(path) as picture:
                size = picture.size
                if size[0] * size[1] <= MAX_PIXELS:
                    mode = {"P": "RGB", "1": "L"}.get(picture.mode)
                    array = np.asarray(picture if mode is None else picture.convert(mode))
    except UnidentifiedImageError:
        raise InputError(
            "is not an image that can be read",
            path=path,
            remedy="Grey TIFF, PNG and MRC can; export the image as one of them.",
        ) from None
    except Image.DecompressionBombError:
        raise _too_large(path) from None
    except Exception as error:  # decoders raise anything on a damaged file
        reason = f"{error}".splitlines()[0][:100] if f"{error}" else type(error).__name__
        raise InputError(
            f"is damaged or cut short ({reason})", path=path, remedy="Export the image again."
        ) from None
    if size[0] * size[1] > MAX_PIXELS:
        raise _too_large(path, size)
    if array.ndim == 3:
        array = _grey(array, path)
    if array.ndim != 2 or array.size == 0:
        raise InputError(
            "is not a single grey image", path=path, remedy="Export one image as grey TIFF or PNG."
        )
    return array


def _grey(array: NDArray[np.generic], path: Path) -> NDArray[np.generic]:
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


def _read_mrc(path: Path, head: bytes) -> NDArray[np.generic]:
    if len(head) < _MRC_HEADER:
        raise InputError(
            "is cut short, its header is incomplete", path=path, remedy="Copy it again."
        )
    order = ">" if head[212:214] == b"\x11\x11" else "<"
    columns, rows, sections, mode = struct.unpack(f"{order}4i", head[:16])
    extended = struct.unpack(f"{order}i", head[92:96])[0]
    if mode not in _MRC_MODES or min(columns, rows, sections) < 1 or extended < 0:
        raise InputError(
            f"is not an MRC image that can be read (mode {mode}, {columns} × {rows})",
            path=path,
            remedy="Modes 0, 1, 2, 6 and 12 can; export it as one of them or as TIFF.",
        )
    if sections > 1:
        raise InputError(
            f"holds {sections} images", path=path, remedy="Save the one with the rings by itself."
        )
    if columns * rows > MAX_PIXELS:
        raise _too_large(path, (columns, rows))
    kind = np.dtype(order + _MRC_MODES[mode])
    start = _MRC_HEADER + extended
    if path.stat().st_size < start + columns * rows * kind.itemsize:
        raise InputError("is cut short, pixels are missing", path=path, remedy="Copy it again.")
    values = np.fromfile(path, dtype=kind, count=columns * rows, offset=start)
    return values.reshape(rows, columns)
