"""Images written by other libraries (Pillow, tifffile, NumPy, fabio) come back count for count."""

from __future__ import annotations

import struct
import zlib
from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from phaseid.errors import InputError
from phaseid.rings.measuring import is_image, measure_image
from phaseid.rings.measuring.image_files import MAX_PIXELS
from phaseid.rings.measuring.images import read_image

COUNTS = np.random.default_rng(3).poisson(40, (50, 64))


def same(path: Path, wanted: np.ndarray = COUNTS) -> bool:
    assert is_image(path)
    return bool(np.array_equal(read_image(path).counts, wanted))


@pytest.mark.parametrize(
    "kind", ["uint8", "uint16", "int16", "int32", "uint32", "float32", "float64"]
)
@pytest.mark.parametrize("compression", [None, "zlib"])
def test_tiff(tmp_path: Path, kind: str, compression: str | None) -> None:
    path = tmp_path / "image.tif"
    tifffile.imwrite(path, COUNTS.astype(kind), compression=compression)
    assert same(path)


def test_tiff_of_the_other_byte_order_and_in_tiles(tmp_path: Path) -> None:
    path = tmp_path / "image.tif"
    tifffile.imwrite(path, COUNTS.astype("uint16"), byteorder=">", tile=(16, 32), bigtiff=True)
    assert same(path)


@pytest.mark.parametrize("compression", ["tiff_lzw", "packbits"])
def test_tiff_compressed_by_others(tmp_path: Path, compression: str) -> None:
    path = tmp_path / "image.tif"
    Image.fromarray(COUNTS.astype("uint16")).save(path, compression=compression)
    assert same(path)


@pytest.mark.parametrize("kind", ["uint8", "uint16"])
def test_png(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "image.png"
    Image.fromarray(COUNTS.astype(kind)).save(path)
    assert same(path)


@pytest.mark.parametrize("kind", ["uint16", "<f4", "f8", "int64"])
def test_numpy_array(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "image.npy"
    np.save(path, COUNTS.astype(kind))
    assert same(path)


@pytest.mark.parametrize("suffix", ["edf", "cbf"])
def test_detector_formats(tmp_path: Path, suffix: str) -> None:
    fabio = pytest.importorskip("fabio", reason="the extra 'detector' is not installed")
    image = {"edf": fabio.edfimage.EdfImage, "cbf": fabio.cbfimage.CbfImage}[suffix]
    path = tmp_path / f"image.{suffix}"
    image(data=COUNTS.astype("int32")).write(str(path))
    assert same(path)


def test_without_the_library_its_name_is_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(__import__("sys").modules, "fabio", None)
    path = tmp_path / "image.cbf"
    path.write_bytes(b"###CBF: VERSION 1.5")
    with pytest.raises(InputError, match="needs a further library") as error:
        read_image(path)
    assert "phaseid[detector]" in (error.value.remedy or "")


def mrc(path: Path, frames: np.ndarray, mode: int, order: str = "<", flags: int | None = None):
    """Words 1-4 (columns, rows, sections, mode) and 53 ("MAP "): MRC2014, from memory."""
    header = bytearray(1024)
    count, rows, columns = frames.shape
    header[:16] = struct.pack(f"{order}4i", columns, rows, count, mode)
    header[208:214] = b"MAP " + (b"\x44\x44" if order == "<" else b"\x11\x11")
    if flags is not None:
        header[152:160] = struct.pack(f"{order}2i", 1146047817, flags)
    path.write_bytes(bytes(header) + frames.tobytes())


@pytest.mark.parametrize(
    ("mode", "kind"), [(0, "i1"), (1, "<i2"), (2, "<f4"), (6, "<u2"), (2, ">f4"), (12, "<f2")]
)
def test_mrc(tmp_path: Path, mode: int, kind: str) -> None:
    path = tmp_path / "image.mrc"
    mrc(path, COUNTS[None].astype(kind), mode, kind[0] if kind[0] in "<>" else "<")
    assert same(path)
    path.write_bytes(path.read_bytes()[:-10])
    with pytest.raises(InputError, match="cut short"):
        read_image(path)


def test_mrc_bytes_without_sign(tmp_path: Path) -> None:
    path = tmp_path / "image.mrc"
    mrc(path, (3 * COUNTS[None]).astype("u1"), 0, flags=0)
    assert same(path, 3 * COUNTS)


STACK = np.random.default_rng(4).poisson(30, (3, 50, 64)).astype("uint16")


def stack(tmp_path: Path, kind: str) -> Path:
    path = tmp_path / f"stack.{kind}"
    if kind == "tif":
        tifffile.imwrite(path, STACK, photometric="minisblack")
    elif kind == "mrc":
        mrc(path, STACK, 6)
    else:
        np.save(path, STACK)
    return path


@pytest.mark.parametrize("kind", ["tif", "mrc", "npy"])
def test_several_images_are_added_or_one_is_chosen(tmp_path: Path, kind: str) -> None:
    path = stack(tmp_path, kind)
    plate = read_image(path)
    assert np.array_equal(plate.counts, STACK.sum(axis=0))
    assert "3 images" in plate.remarks[0]
    assert np.array_equal(read_image(path, frame=2).counts, STACK[1])
    with pytest.raises(InputError, match="no image 4") as error:
        read_image(path, frame=4)
    assert "1 to 3" in (error.value.remedy or "")


def test_marks_of_a_counting_detector_are_no_counts(tmp_path: Path) -> None:
    gaps, top = COUNTS.astype("int32"), COUNTS.astype("uint32")
    gaps[:, 20:24], gaps[7, 7] = -1, -2
    top[30:33] = 2**32 - 1
    for name, pixels, number in (("gaps", gaps, 4 * 50 + 1), ("top", top, 3 * 64)):
        path = tmp_path / f"{name}.tif"
        tifffile.imwrite(path, pixels)
        plate = read_image(path)
        assert (~plate.usable).sum() == number
        assert plate.counts.min() >= 0
        assert plate.counts.max() < 100


def test_negative_values_of_a_corrected_image_stay(tmp_path: Path) -> None:
    path = tmp_path / "image.tif"
    tifffile.imwrite(path, (COUNTS - 40).astype("int16"))
    plate = read_image(path)
    assert plate.usable.all()
    assert np.array_equal(plate.counts, COUNTS - 40)


def test_huge_images_are_refused_before_they_are_unpacked(tmp_path: Path) -> None:
    side = 2 * int(MAX_PIXELS**0.5)
    bomb = tmp_path / "bomb.png"  # a grey PNG of its size in a few kilobytes
    rows = zlib.compress(b"\0" * 1_000_000, 9)

    def chunk(name: bytes, data: bytes) -> bytes:
        crc = zlib.crc32(name + data)
        return struct.pack(">I", len(data)) + name + data + struct.pack(">I", crc)

    header = struct.pack(">2I5B", side, side, 8, 0, 0, 0, 0)
    bomb.write_bytes(
        b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header) + chunk(b"IDAT", rows) + chunk(b"IEND", b"")
    )
    large = tmp_path / "large.mrc"
    mrc(large, np.zeros((1, 1, 1), dtype="i1"), 0)
    head = bytearray(large.read_bytes())
    head[:8] = struct.pack("<2i", side, side)
    large.write_bytes(head)
    array = tmp_path / "large.npy"
    np.lib.format.open_memmap(array, mode="w+", dtype="u1", shape=(side, side)).flush()
    tiff = tmp_path / "large.tif"
    tifffile.memmap(tiff, shape=(side, side), dtype="u1").flush()
    for path in (bomb, large, array, tiff):
        with pytest.raises(InputError, match="larger than phaseid takes"):
            read_image(path)


def test_more_frames_than_can_be_added_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "movie.mrc"
    mrc(path, np.zeros((1, 1, 1), dtype="i1"), 0)
    head = bytearray(path.read_bytes())
    head[:12] = struct.pack("<3i", 4096, 4096, 500)
    path.write_bytes(head)
    with pytest.raises(InputError, match="too many to add") as error:
        read_image(path)
    assert "--frame" in (error.value.remedy or "")


@pytest.mark.parametrize("name", ["a.tif", "a.png", "a.mrc", "a.npy", "a.cbf", "a.edf", "a.h5"])
@pytest.mark.parametrize("content", [b"", b"\0\1\2 nothing" * 40, b"<html>not found</html>"])
def test_what_is_no_image_is_refused(tmp_path: Path, name: str, content: bytes) -> None:
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(InputError):
        measure_image(path)


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9, 0.999])
@pytest.mark.parametrize("kind", ["tif", "png", "mrc", "npy", "edf", "cbf"])
def test_images_cut_short_end_in_a_plain_error(tmp_path: Path, kind: str, share: float) -> None:
    path = tmp_path / f"image.{kind}"
    if kind == "tif":
        tifffile.imwrite(path, COUNTS.astype("uint16"))
    elif kind == "png":
        Image.fromarray(COUNTS.astype("uint16")).save(path)
    elif kind == "mrc":
        mrc(path, COUNTS[None].astype("<u2"), 6)
    elif kind == "npy":
        np.save(path, COUNTS)
    else:
        fabio = pytest.importorskip("fabio", reason="the extra 'detector' is not installed")
        image = {"edf": fabio.edfimage.EdfImage, "cbf": fabio.cbfimage.CbfImage}[kind]
        image(data=COUNTS.astype("int32")).write(str(path))
    whole = path.read_bytes()
    path.write_bytes(whole[: int(share * len(whole))])
    if share == 0.999 and kind in ("png", "cbf"):  # no pixel is missing, only the mark of the end
        assert same(path)
        return
    with pytest.raises(InputError):
        read_image(path)
