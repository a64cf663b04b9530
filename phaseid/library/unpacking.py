"""Bytes that strangers packed: unpacked as a stream, within an allowance, never to disk."""

from __future__ import annotations

import bz2
import gzip
import io
import lzma
import tarfile
import zipfile
import zlib
from collections.abc import Callable
from contextlib import AbstractContextManager, nullcontext
from typing import IO, Any

from phaseid.crystal.cif_text import MAX_BYTES

FREE_BYTES = 256 << 20
FULLEST = 100
"""An archive may unpack to so many times its size, beyond what is free; CIF text packs 3 to 20."""
_PIECE = 1 << 20

Opener = Callable[[Any], AbstractContextManager[Any]]

_BY_ENDING: dict[str, Opener] = {
    "gz": lambda file: gzip.GzipFile(fileobj=file),
    "bz2": bz2.BZ2File,
    "xz": lzma.LZMAFile,
}
_BY_MAGIC: dict[bytes, Opener] = {
    b"\x1f\x8b": _BY_ENDING["gz"],
    b"BZh": _BY_ENDING["bz2"],
    b"\xfd7zXZ": _BY_ENDING["xz"],
}
PACKED = tuple(f".{ending}" for ending in _BY_ENDING)


class TooFull(Exception):  # noqa: N818 - read as a sentence: the archive was too full
    """An archive that unpacks to far more than text would."""


BAD_ARCHIVE = (
    zipfile.BadZipFile,
    tarfile.TarError,
    OSError,
    EOFError,
    lzma.LZMAError,
    zlib.error,
    TooFull,
    MemoryError,  # a dictionary of gigabytes asked for by an xz header
    NotImplementedError,  # a zip compression that Python does not know
    RuntimeError,  # an encrypted zip member
    ValueError,  # a zip member's header that makes no sense
    OverflowError,
)


class Allowance:
    """How many bytes an archive of `size` bytes may still unpack to."""

    def __init__(self, size: int) -> None:
        self._left = FREE_BYTES + FULLEST * size

    def spend(self, count: int) -> None:
        """Take off what was unpacked; raises TooFull where the allowance is spent."""
        self._left -= count
        if self._left < 0:
            raise TooFull(
                f"it unpacks to more than {FULLEST} times its size, as no archive of structures "
                "does; unpack it yourself if you trust it, and add the folder"
            )


class Metered(io.RawIOBase):
    """A stream that spends from an allowance what is read from it."""

    def __init__(self, stream: IO[bytes], allowance: Allowance) -> None:
        self._stream = stream
        self._allowance = allowance

    def read(self, size: int = -1) -> bytes:
        """Return up to `size` bytes, a piece at most."""
        data = self._stream.read(_PIECE if size < 0 else min(size, _PIECE))
        self._allowance.spend(len(data))
        return data


def unpacked(file: IO[bytes]) -> AbstractContextManager[Any]:
    """Return the stream inside a .gz, .bz2 or .xz stream that can seek, by its first bytes."""
    head = file.read(8)
    file.seek(0)
    for magic, opened in _BY_MAGIC.items():
        if head.startswith(magic):
            return opened(file)
    return nullcontext(file)


def content(file: IO[bytes], name: str) -> bytes:
    """Return the bytes of a structure file called `name`, unpacked by the ending of its name.

    One byte more than the reader of CIF text takes at the most. Raises one of BAD_ARCHIVE.
    """
    ending = name.lower().rsplit(".", 1)[-1]
    with _BY_ENDING.get(ending, nullcontext)(file) as plain:
        data: bytes = plain.read(MAX_BYTES + 1)
        return data
