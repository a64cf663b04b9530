"""Structure files wherever they lie: single files, folders, archives read member by member.

Nothing is unpacked to disk; a member's name is only a name.
"""

from __future__ import annotations

import hashlib
import os
import tarfile
import zipfile
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import IO

from phaseid import __version__
from phaseid.crystal.cif_text import MAX_BYTES
from phaseid.library.tally import Rejected
from phaseid.library.unpacking import (
    BAD_ARCHIVE,
    PACKED,
    Allowance,
    Metered,
    TooFull,
    content,
    unpacked,
)
from phaseid.library.walking import Shut, no_file, walk

_CIF = (".cif", ".mcif")
_TAR = (".tar", ".tar.gz", ".tgz", ".tar.bz2", ".tbz2", ".tar.xz", ".txz")
_ARCHIVE = (".zip", *_TAR)
_NESTED = "an archive inside an archive is not opened; unpack the outer one and add the folder"
_LARGE = f"more than {MAX_BYTES >> 20} MB, the most that is read; split it"


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
    for ending in PACKED:
        if name.endswith(ending):
            return name[: -len(ending)]
    return name


def count_structure_files(paths: Iterable[Path]) -> int | None:
    """Return how many files `read_all` will tell of, None where only reading tells."""
    total = 0
    for path in paths:
        inside = _in_folder(path) if _is_folder(path) else iter((path,))
        for item in inside:
            number = 1 if isinstance(item, Shut) else _count(item)
            if number is None:
                return None
            total += number
    return total


def _count(path: Path) -> int | None:
    """Return how many structure files are in a file, None where only reading it tells."""
    name = path.name.lower()
    if name.endswith(_TAR):
        return None
    if name.endswith(".zip") and no_file(path) is None:
        try:
            with zipfile.ZipFile(path) as archive:
                return sum(_told(info.filename) for info in archive.infolist())
        except BAD_ARCHIVE:
            return 1
    return 1


def read_all(paths: Iterable[Path]) -> Iterator[Found]:
    """Yield every structure file in files, folders (nested) and archives, in a fixed order.

    What cannot be read comes as a Rejected, with the reason; nothing is raised.
    """
    for path in paths:
        if _is_folder(path):
            empty = True
            for item in _in_folder(path):
                empty = False
                if isinstance(item, Shut):
                    yield _rejected(item.path, item.code, item.reason)
                else:
                    yield from _from_file(item)
            if empty:
                reason = "the folder holds no CIF file and no archive"
                yield _rejected(path, "no_structures", reason)
        else:
            problem = no_file(path)
            if problem is None:
                yield from _from_file(path)
            else:
                yield _rejected(path, *problem)


def _is_folder(path: Path) -> bool:
    return os.path.isdir(path)  # noqa: PTH112 - Path.is_dir raises where a folder above is closed


def _in_folder(folder: Path) -> Iterator[Path | Shut]:
    return walk(folder, lambda name: _wanted(name) or name.lower().endswith(_ARCHIVE))


def _wanted(member: str) -> bool:
    name = member.rsplit("/", 1)[-1]
    hidden = name.startswith(".") or member.startswith("__MACOSX/")
    return is_structure_file(name) and not hidden


def _told(member: str) -> bool:
    """Whether a member of an archive is read, or refused for being an archive itself."""
    return _wanted(member) or member.lower().endswith(_ARCHIVE)


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
                yield _file(file, _plain(_absolute(path)), _plain(path.name))
    except TooFull as error:
        yield _rejected(path, "bomb", f"not read further: {error}")
    except BAD_ARCHIVE as error:
        yield _rejected(path, "unreadable", f"the file cannot be read ({_words(error)})")


def _from_zip(path: Path) -> Iterator[Found]:
    allowance = Allowance(path.stat().st_size)
    with zipfile.ZipFile(path) as archive:
        told = [info for info in archive.infolist() if _told(info.filename)]
        if not told:
            yield _rejected(path, "no_structures", "the archive holds no CIF file")
        for info in told:
            location, shown = _member_of(path, info.filename)
            refused = _refused(info.filename, info.file_size)
            if refused is not None:
                yield Rejected(location, shown, "", *refused)
                continue
            try:
                with archive.open(info) as file:
                    found = _file(file, location, shown)
            except BAD_ARCHIVE as error:
                reason = f"the member cannot be read ({_words(error)})"
                found = Rejected(location, shown, "", "unreadable", reason)
            yield _within(allowance, found)


def _from_tar(path: Path) -> Iterator[Found]:
    allowance = Allowance(path.stat().st_size)
    empty = True
    with (
        path.open("rb") as packed,
        unpacked(packed) as stream,
        tarfile.open(fileobj=Metered(stream, allowance), mode="r|") as archive,
    ):
        for info in archive:
            if not info.isfile() or not _told(info.name):
                continue
            empty = False
            location, shown = _member_of(path, info.name)
            refused = _refused(info.name, info.size)
            if refused is not None:
                yield Rejected(location, shown, "", *refused)
                continue
            file = archive.extractfile(info)
            if file is not None:
                with file:
                    yield _within(allowance, _file(file, location, shown))
    if empty:
        yield _rejected(path, "no_structures", "the archive holds no CIF file")


def _refused(member: str, size: int) -> tuple[str, str] | None:
    """Return why a member is not even opened, None where it is."""
    if not _wanted(member):
        return "nested_archive", _NESTED
    return ("too_large", f"the member holds {_LARGE}") if size > MAX_BYTES else None


def _within(allowance: Allowance, found: Found) -> Found:
    if isinstance(found, StructureFile):
        allowance.spend(len(found.data))
    return found


def _file(file: IO[bytes], location: str, shown: str) -> Found:
    try:
        data = content(file, shown)
    except TooFull:
        raise
    except BAD_ARCHIVE as error:
        reason = f"the file cannot be read ({_words(error)})"
        return Rejected(location, shown, "", "unreadable", reason)
    return StructureFile(location, shown, data)


def _member_of(path: Path, member: str) -> tuple[str, str]:
    shown = _plain(member)
    return f"{_plain(_absolute(path))}!{shown}", shown


def _rejected(path: Path, code: str, reason: str) -> Rejected:
    return Rejected(_plain(_absolute(path)), _plain(path.name or str(path)), "", code, reason)


def _absolute(path: Path) -> Path:
    try:
        return path.absolute()
    except OSError:  # the folder we stand in is gone
        return path


def _plain(name: str | Path) -> str:
    """Return a name as text that can be stored: what is no character is written out."""
    return str(name).encode("utf-8", "backslashreplace").decode()


def _words(error: Exception) -> str:
    if isinstance(error, OSError) and error.strerror:
        return error.strerror
    return str(error) or type(error).__name__
