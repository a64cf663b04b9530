"""Structure files wherever they lie: single files, folders, archives read member by member.

Nothing is unpacked to disk; a member's name is only a name.
"""

from __future__ import annotations

import bz2
import gzip
import hashlib
import lzma
import os
import tarfile
import zipfile
import zlib
from collections.abc import Callable, Iterable, Iterator
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

from phaseid import __version__
from phaseid.crystal.cif_text import MAX_BYTES
from phaseid.library.tally import Rejected

_CIF = (".cif", ".mcif")
_UNPACKING: dict[str, Callable[[IO[bytes]], AbstractContextManager[Any]]] = {
    "gz": lambda file: gzip.GzipFile(fileobj=file),
    "bz2": bz2.BZ2File,
    "xz": lzma.LZMAFile,
}
_TAR = (".tar", ".tar.gz", ".tgz", ".tar.bz2", ".tbz2", ".tar.xz", ".txz")
_ARCHIVE = (".zip", *_TAR)
_BAD_ARCHIVE = (
    zipfile.BadZipFile,
    tarfile.TarError,
    OSError,
    EOFError,
    lzma.LZMAError,
    zlib.error,
    NotImplementedError,  # a zip compression that Python does not know
    RuntimeError,  # an encrypted zip member
    ValueError,  # a zip member's header that makes no sense
)


@dataclass(frozen=True, slots=True)
class StructureFile:
    """The bytes of one structure file; `file` its name, `location` where it lies.

    `known`: the library remembers these bytes, they need not be read again.
    """

    location: str
    file: str
    data: bytes
    known: bool = False

    @property
    def digest(self) -> str:
        """128 bits (hex) of the SHA-256 of the bytes as this version of phaseid reads them."""
        return hashlib.sha256(f"phaseid {__version__}\n".encode() + self.data).hexdigest()[:32]


Found = StructureFile | Rejected


def is_structure_file(name: str) -> bool:
    """Whether a file of that name is taken for a structure file."""
    return _without_packing(name.lower()).endswith(_CIF)


def _without_packing(name: str) -> str:
    for ending in (".gz", ".bz2", ".xz"):
        if name.endswith(ending):
            return name[: -len(ending)]
    return name


def count_structure_files(paths: Iterable[Path]) -> int | None:
    """Return how many structure files `read_all` will find, None where only reading tells."""
    total = 0
    for path in paths:
        if path.is_dir():
            inside = count_structure_files(_in_folder(path))
            if inside is None:
                return None
            total += inside
        elif path.name.lower().endswith(_TAR):
            return None
        elif path.name.lower().endswith(".zip"):
            try:
                with zipfile.ZipFile(path) as archive:
                    total += sum(_wanted(info.filename) for info in archive.infolist())
            except _BAD_ARCHIVE:
                total += 1
        else:
            total += 1
    return total


def read_all(paths: Iterable[Path]) -> Iterator[Found]:
    """Yield every structure file in files, folders (nested) and archives, in a fixed order.

    What cannot be read comes as a Rejected, with the reason; nothing is raised.
    """
    for path in paths:
        if path.is_dir():
            closed: list[OSError] = []
            inside = list(_in_folder(path, closed.append))
            yield from read_all(inside)
            for error in closed:
                reason = f"the folder cannot be opened ({_words(error)})"
                yield _rejected(Path(error.filename), "unreadable", reason)
            if not inside and not closed:
                yield _rejected(
                    path, "no_structures", "the folder holds no CIF file and no archive"
                )
        else:
            yield from _from_file(path)


def _in_folder(
    folder: Path, on_closed: Callable[[OSError], object] | None = None
) -> Iterator[Path]:
    for here, folders, files in os.walk(folder, onerror=on_closed):
        folders.sort()
        for name in sorted(files):
            if _wanted(name) or name.lower().endswith(_ARCHIVE):
                yield Path(here, name)


def _wanted(member: str) -> bool:
    name = member.rsplit("/", 1)[-1]
    hidden = name.startswith(".") or member.startswith("__MACOSX/")
    return is_structure_file(name) and not hidden


def _from_file(path: Path) -> Iterator[Found]:
    try:
        if zipfile.is_zipfile(path):
            yield from _from_zip(path)
        elif path.name.lower().endswith(_TAR):
            yield from _from_tar(path)
        elif path.name.lower().endswith(".zip"):
            yield _rejected(path, "bad_archive", "this is no zip archive, or a damaged one")
        else:
            with path.open("rb") as file:
                yield _member(file, path.name.lower(), str(path.absolute()), path.name)
    except FileNotFoundError:
        yield _rejected(path, "no_such_file", "there is no such file or folder")
    except _BAD_ARCHIVE as error:
        yield _rejected(path, "unreadable", f"the file cannot be read ({_words(error)})")


def _from_zip(path: Path) -> Iterator[Found]:
    with zipfile.ZipFile(path) as archive:
        wanted = [info for info in archive.infolist() if _wanted(info.filename)]
        if not wanted:
            yield _rejected(path, "no_structures", "the archive holds no CIF file")
        for info in wanted:
            location = f"{path.absolute()}!{info.filename}"
            try:
                with archive.open(info) as file:
                    found = _member(file, info.filename.lower(), location, info.filename)
            except _BAD_ARCHIVE as error:
                reason = f"the member cannot be read ({_words(error)})"
                found = Rejected(location, info.filename, "", "unreadable", reason)
            yield found


def _from_tar(path: Path) -> Iterator[Found]:
    empty = True
    with tarfile.open(path, mode="r|*") as archive:
        for info in archive:
            if not info.isfile() or not _wanted(info.name):
                continue
            empty = False
            file = archive.extractfile(info)
            if file is not None:
                with file:
                    yield _member(
                        file, info.name.lower(), f"{path.absolute()}!{info.name}", info.name
                    )
    if empty:
        yield _rejected(path, "no_structures", "the archive holds no CIF file")


def _member(file: IO[bytes], name: str, location: str, shown: str) -> Found:
    """Read one structure file, bounded in size, unpacking .gz, .bz2 and .xz on the way."""
    ending = name.rsplit(".", 1)[-1]
    try:
        with _UNPACKING.get(ending, nullcontext)(file) as plain:
            data = plain.read(MAX_BYTES + 1)  # the reader of CIF text refuses what is longer
    except _BAD_ARCHIVE as error:
        reason = f"the file cannot be read ({_words(error)})"
        return Rejected(location, shown, "", "unreadable", reason)
    return StructureFile(location, shown, data)


def _rejected(path: Path, code: str, reason: str) -> Rejected:
    return Rejected(str(path.absolute()), path.name, "", code, reason)


def _words(error: Exception) -> str:
    if isinstance(error, OSError) and error.strerror:
        return error.strerror
    return str(error) or type(error).__name__
