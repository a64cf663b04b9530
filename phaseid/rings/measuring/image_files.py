"""The pixels of image files: TIFF, pictures, MRC, NumPy arrays, detectors' own formats."""

from __future__ import annotations

import logging
import struct
import warnings
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError

MAX_PIXELS = 50_000_000  # about 7000 × 7000, under 1 GB of memory on the way
MAX_STACK_PIXELS = 1_000_000_000
Raw = NDArray[Any]

TIFF = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
PICTURES = (b"\x89PNG", b"\xff\xd8\xff", b"BM", b"GIF8")
ARRAY = b"\x93NUMPY"
DETECTORS = (b"###CBF", b"\x89HDF")
DETECTOR_SUFFIXES = (
    *(".cbf", ".edf", ".img", ".mccd", ".mar3450", ".mar2300"),
    *(".sfrm", ".gfrm", ".kccd", ".h5", ".hdf5", ".nxs"),
)
# MRC2014 modes (Cheng et al. 2015, J. Struct. Biol. 192, 146)
_MRC_MODES = {0: "i1", 1: "i2", 2: "f4", 6: "u2", 12: "f2"}
_MRC_HEADER = 1024
_CBF_BINARY = b"\x0c\x1a\x04\xd5"  # begins the binary part (imgCIF dictionary)
_CBF_HEADER = 1_000_000
_IMOD_STAMP = 1146047817  # its flag says whether bytes are signed; from memory


def is_mrc(path: Path, head: bytes) -> bool:
    """Whether the first bytes or the name are those of an MRC file."""
    return head[208:211] == b"MAP" or path.suffix.lower() in (".mrc", ".mrcs", ".map")


def read_pixels(path: Path, head: bytes, frame: int | None) -> tuple[Raw, int]:
    """Pixels (h, w) or (h, w, c) and how many images the file holds.

    `frame` chooses one of several, from 1; None adds them up. Raises InputError.
    """
    if is_mrc(path, head):
        return _mrc(path, head, frame)
    if head.startswith(TIFF):
        return _tiff(path, frame)
    if head.startswith(ARRAY):
        return _array(path, frame)
    if head.startswith(DETECTORS) or path.suffix.lower() in DETECTOR_SUFFIXES:
        return _detector(path, frame)
    return _picture(path, frame)


def too_large(path: Path, size: tuple[int, int]) -> InputError:
    """The error for an image of more pixels than are taken into memory."""
    return InputError(
        f"is {size[0]} × {size[1]} pixels, larger than phaseid takes into memory "
        f"({MAX_PIXELS / 1e6:.0f} million pixels)",
        path=path,
        remedy="Bin the image, or cut out the part with the rings.",
    )


def damaged(path: Path, error: Exception) -> InputError:
    """The error for what a decoder stumbled over."""
    reason = f"{error}".splitlines()[0][:100] if f"{error}" else type(error).__name__
    return InputError(
        f"is damaged or cut short ({reason})", path=path, remedy="Export the image again."
    )


def _check_size(path: Path, columns: int, rows: int, count: int, frame: int | None) -> None:
    """Refuse what is too large, and a frame that is not there."""
    if columns * rows > MAX_PIXELS:
        raise too_large(path, (columns, rows))
    if frame is not None and not 1 <= frame <= count:
        raise InputError(
            f"has no image {frame}, it holds {count}",
            path=path,
            remedy=f"Choose one from 1 to {count}."
            if count > 1
            else "Leave out which image to take.",
        )
    if frame is None and columns * rows * count > MAX_STACK_PIXELS:
        raise InputError(
            f"holds {count} images of {columns} × {rows} pixels, too many to add up",
            path=path,
            remedy="Choose one with --frame N.",
        )


def _chosen(frames: Iterable[Raw]) -> Raw:
    """One image as it is, the sum of several in double precision."""
    total: Raw | None = None
    for number, image in enumerate(frames):
        if number == 0:
            total = image
        elif total is not None:
            total = np.add(total, image, dtype=np.float64)
    if total is None:
        raise ValueError("no image in it")
    return total


def _indices(count: int, frame: int | None) -> range:
    return range(count) if frame is None else range(frame - 1, frame)


def _tiff(path: Path, frame: int | None) -> tuple[Raw, int]:
    import tifffile

    try:
        with _complaints_of("tifffile"), tifffile.TiffFile(path) as file:
            len(file.pages)  # finds a chain of pages that runs in a circle; `series` would not
            series = file.series[0]
            shape = series.shape
            colour = 1 if series.axes.endswith("S") else 0
            columns, rows = shape[-1 - colour], shape[-2 - colour]
            count = int(np.prod(shape[: len(shape) - 2 - colour], dtype=np.int64))
            _check_size(path, columns, rows, count, frame)
            if count == 1:
                return series.asarray().reshape(shape[-2 - colour :]), 1
            pages = series.asarray(out="memmap").reshape(count, *shape[-2 - colour :])
            return _chosen(pages[i] for i in _indices(count, frame)), count
    except InputError:
        raise
    except Exception as error:  # decoders raise anything on a damaged file
        if "imagecodecs" in f"{error}":  # compressed as only Pillow undoes it
            return _picture(path, frame)
        raise damaged(path, error) from None


def _picture(path: Path, frame: int | None) -> tuple[Raw, int]:
    from PIL import Image, UnidentifiedImageError

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with Image.open(path) as picture:
                count = getattr(picture, "n_frames", 1)
                _check_size(path, *picture.size, count, frame)
                return _chosen(_pages(picture, _indices(count, frame))), count
    except InputError:
        raise
    except UnidentifiedImageError:
        raise InputError(
            "is not an image that can be read",
            path=path,
            remedy="Grey TIFF, PNG and MRC can; export the image as one of them.",
        ) from None
    except Image.DecompressionBombError:
        raise InputError(
            f"is larger than phaseid takes into memory ({MAX_PIXELS / 1e6:.0f} million pixels)",
            path=path,
            remedy="Bin the image, or cut out the part with the rings.",
        ) from None
    except Exception as error:  # decoders raise anything on a damaged file
        raise damaged(path, error) from None


def _pages(picture: Any, indices: range) -> Iterable[Raw]:
    for index in indices:
        if index or len(indices) > 1:
            picture.seek(index)
        mode = {"P": "RGB", "1": "L"}.get(picture.mode)
        yield np.asarray(picture if mode is None else picture.convert(mode))


def _array(path: Path, frame: int | None) -> tuple[Raw, int]:
    try:
        pixels = np.load(path, mmap_mode="r", allow_pickle=False)
        if pixels.ndim < 2:
            return pixels, 1
        rows, columns = pixels.shape[-2:]
        stack = pixels.reshape(-1, rows, columns)
        _check_size(path, columns, rows, len(stack), frame)
        return _chosen(np.array(stack[i]) for i in _indices(len(stack), frame)), len(stack)
    except InputError:
        raise
    except Exception as error:
        raise damaged(path, error) from None


def _detector(path: Path, frame: int | None) -> tuple[Raw, int]:
    try:
        import fabio
    except ImportError:
        raise InputError(
            "is in a detector's own format, which needs a further library",
            path=path,
            remedy="Install it with: pip install 'phaseid[detector]'; or export TIFF.",
        ) from None
    _check_binary_part(path)
    try:
        with _complaints_of("fabio") as complaints, fabio.open(str(path)) as file:
            count = int(file.nframes)
            rows, columns = (int(n) for n in file.shape[-2:])
            _check_size(path, columns, rows, count, frame)
            frames = (np.array(file.get_frame(i).data) for i in _indices(count, frame))
            image = _chosen(frames)
    except InputError:
        raise
    except Exception as error:
        raise damaged(path, error) from None
    if complaints:  # it fills up what is missing
        raise damaged(path, ValueError(complaints[0]))
    return image, count


def _check_binary_part(path: Path) -> None:
    """Refuse a CBF file without its binary part, in which its reader would search for ever."""
    with path.open("rb") as stream:
        head = stream.read(_CBF_HEADER)
    if head.startswith(b"###CBF") and _CBF_BINARY not in head:
        raise damaged(path, ValueError("no binary part"))


@contextmanager
def _complaints_of(library: str) -> Iterator[list[str]]:
    """What a library logs as errors while it reads, kept from the screen, with its warnings."""
    complaints: list[str] = []
    handler = logging.Handler(logging.ERROR)
    handler.emit = lambda record: complaints.append(record.getMessage())  # type: ignore[method-assign]
    logger = logging.getLogger(library)
    propagate, logger.propagate = logger.propagate, False
    logger.addHandler(handler)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield complaints
    finally:
        logger.removeHandler(handler)
        logger.propagate = propagate


def _mrc(path: Path, head: bytes, frame: int | None) -> tuple[Raw, int]:
    if len(head) < _MRC_HEADER:
        raise InputError(
            "is cut short, its header is incomplete", path=path, remedy="Copy it again."
        )
    order = ">" if head[212:214] == b"\x11\x11" else "<"
    columns, rows, count, mode = struct.unpack(f"{order}4i", head[:16])
    extended = struct.unpack(f"{order}i", head[92:96])[0]
    if mode not in _MRC_MODES or min(columns, rows, count) < 1 or extended < 0:
        raise InputError(
            f"is not an MRC image that can be read (mode {mode}, {columns} × {rows})",
            path=path,
            remedy="Modes 0, 1, 2, 6 and 12 can; export it as one of them or as TIFF.",
        )
    _check_size(path, columns, rows, count, frame)
    kind = np.dtype(order + _MRC_MODES[mode])
    stamp, flags = struct.unpack(f"{order}2i", head[152:160])
    if mode == 0 and stamp == _IMOD_STAMP and not flags & 1:
        kind = np.dtype("u1")
    size = columns * rows
    start = _MRC_HEADER + extended
    if path.stat().st_size < start + size * count * kind.itemsize:
        raise InputError("is cut short, pixels are missing", path=path, remedy="Copy it again.")
    frames = (
        np.fromfile(path, dtype=kind, count=size, offset=start + i * size * kind.itemsize)
        for i in _indices(count, frame)
    )
    return _chosen(frames).reshape(rows, columns), count
