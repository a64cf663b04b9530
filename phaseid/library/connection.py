"""Opening a library file, and SQLite's complaints in plain words."""

from __future__ import annotations

import errno
import sqlite3
import struct
import tempfile
import zlib
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager, suppress
from pathlib import Path

from phaseid.errors import InputError, LibraryError
from phaseid.library.schema import SCHEMA_VERSION, apply_steps, stored_version
from phaseid.library.seal import break_seal, is_broken, seal

Tell = Callable[[str], None]

_WAIT_S = 60.0
_CACHE_KB = 128 << 10
_CHECKPOINT_PAGES = 8000
_MAGIC = b"SQLite format 3\x00"
MENDING = "Restore a copy, or move it away and add the structures anew."
_ANOTHER = "Name another file with --library, or move this one away."


def _connect(path: Path, mode: str) -> sqlite3.Connection:
    uri = f"{path.absolute().as_uri()}?{mode}"
    conn = sqlite3.connect(uri, uri=True, timeout=_WAIT_S, isolation_level=None)
    try:
        conn.execute("SELECT count(*) FROM sqlite_master")
    except BaseException:
        conn.close()
        raise
    return conn


@contextmanager
def told(path: Path) -> Iterator[None]:
    """Turn what SQLite or the system raises about `path` into a LibraryError with a remedy."""
    try:
        yield
    except (sqlite3.Error, OSError) as error:
        raise LibraryError(_plain_words(path, error)) from error


@contextmanager
def decoded(path: Path) -> Iterator[None]:
    """As `told`, where stored bytes are given their meaning: what has none is damage.

    Raises InputError for a question that is no text.
    """
    try:
        with told(path):
            yield
    except UnicodeEncodeError as error:  # in what was asked for; what is stored gets decoded
        raise InputError("this is no text that can be looked up", remedy="Use UTF-8.") from error
    except (ArithmeticError, LookupError, TypeError, ValueError, struct.error, zlib.error) as error:
        text = f"{type(error).__name__}: {error}"
        raise LibraryError(f"{path}: the library is damaged ({text}). {MENDING}") from error


def _plain_words(path: Path, error: Exception) -> str:
    text = str(error)
    if "readonly" in text:
        return (
            f"{path}: the library cannot be written. Check the permissions, or use --library FILE."
        )
    if isinstance(error, PermissionError):
        return f"{path}: permission denied. Check the permissions, or use --library FILE."
    if "full" in text or getattr(error, "errno", None) == errno.ENOSPC:
        return f"{path}: the disk is full. What was stored is kept; free some space and try again."
    if "disk I/O" in text:
        return (
            f"{path}: the disk refused to write or read ({text}). What was stored is kept; check "
            "the disk, the network behind it, and any limit on the size of files."
        )
    if "locked" in text or "busy" in text:
        return (
            f"{path}: another program is writing to the library. Wait for it to end and try again."
        )
    if any(word in text for word in ("malformed", "not a database", "decode to UTF-8")):
        return f"{path}: the library is damaged ({text}). {MENDING}"
    return f"{path}: the library cannot be used ({text}). Check the disk and the permissions."


def check_file(path: Path) -> None:
    """Raise LibraryError unless `path` is a SQLite file (its schema is not looked at)."""
    with told(path):
        if not path.exists():
            raise LibraryError(
                f"{path}: there is no library. Check the name, or make one: "
                f"phaseid library add FILES --library {path}"
            )
        if path.is_dir():
            raise LibraryError(f"{path}: this is a folder, not a library file. {_ANOTHER}")
        with path.open("rb") as file:
            head = file.read(len(_MAGIC))
    if head != _MAGIC:
        raise LibraryError(f"{path}: this is not a library of phaseid. {_ANOTHER}")


def open_for_reading(path: Path, tell: Tell | None = None) -> sqlite3.Connection:
    """Open a library file so that nothing can change it.

    An older schema is brought up to date first, and `tell` is told so. Raises LibraryError:
    missing, a folder, not a library, newer, damaged.
    """
    check_file(path)
    with told(path):
        conn = _read_only(path)
        version = _checked_version(conn, path)
        if version < SCHEMA_VERSION:
            conn.close()
            close_after_writing(open_for_writing(path, tell), path)
            conn = _read_only(path)
    return conn


def another_reader(path: Path) -> sqlite3.Connection:
    """Open a file that is open for reading once more, unchecked. Raises sqlite3.Error."""
    return _read_only(path)


def _read_only(path: Path) -> sqlite3.Connection:
    try:
        return _connect(path, "mode=ro")
    except sqlite3.OperationalError:
        pass
    try:  # a writer was killed: its journal must be played back, which needs write access
        _connect(path, "mode=rw").close()
        return _connect(path, "mode=ro")
    except sqlite3.OperationalError:  # a read-only medium
        left_over = path.with_name(f"{path.name}-wal")
        if left_over.exists() and left_over.stat().st_size > 0:
            raise
        return _connect(path, "mode=ro&immutable=1")


def _checked_version(conn: sqlite3.Connection, path: Path) -> int:
    try:
        version = stored_version(conn)
    except sqlite3.Error:
        conn.close()
        raise
    broken = version <= SCHEMA_VERSION and is_broken(path)
    if 0 < version <= SCHEMA_VERSION and not broken:
        return version
    conn.close()
    if broken:
        raise LibraryError(
            f"{path}: the library is damaged, its bytes are not those that were written (a bad "
            f"disk or a bad copy). {MENDING}"
        )
    if version <= 0:
        raise LibraryError(f"{path}: this is a SQLite file but no library of phaseid. {_ANOTHER}")
    raise LibraryError(
        f"{path}: the library has schema version {version}, this phaseid reads up to "
        f"{SCHEMA_VERSION}. Update phaseid, or name another library with --library."
    )


def open_for_writing(path: Path, tell: Tell | None = None) -> sqlite3.Connection:
    """Open an existing library file for adding; an older schema is brought up to date.

    Transactions are explicit. Raises LibraryError as `open_for_reading`, and where the file or its
    folder cannot be written.
    """
    check_file(path)
    with told(path):
        conn = _connect(path, "mode=rw")
        version = _checked_version(conn, path)
        try:
            break_seal(conn)
            if version < SCHEMA_VERSION:
                _bring_up_to_date(conn, path, version, tell)
            # readers go on reading while a writer adds; a killed writer loses one batch at most
            conn.execute("PRAGMA journal_mode = WAL")
            conn.execute("PRAGMA synchronous = NORMAL")
            # a batch touches a page of every index for each entry: they stay here until it is whole
            conn.execute(f"PRAGMA cache_size = -{_CACHE_KB}")
            conn.execute(f"PRAGMA wal_autocheckpoint = {_CHECKPOINT_PAGES}")
        except BaseException:
            conn.close()
            raise
    return conn


def _bring_up_to_date(
    conn: sqlite3.Connection, path: Path, version: int, tell: Tell | None
) -> None:
    """Apply the steps that are missing, all or none; the file as it was stays beside it."""
    from phaseid.library.grouping import group_entries

    copy = path.with_name(f"{path.name}.schema-{version}")
    number = 1
    while copy.exists():
        number += 1
        copy = path.with_name(f"{path.name}.schema-{version}-{number}")
    if tell is not None:
        tell(
            f"Bringing the library {path} up to date, once; as it was it is kept as {copy.name}, "
            "which you may delete later ..."
        )
    with tempfile.TemporaryDirectory(prefix=f".{path.name}-", dir=path.parent) as folder:
        made = Path(folder) / copy.name
        with closing(sqlite3.connect(made)) as whole:
            conn.backup(whole)
        made.rename(copy)
    apply_steps(conn, finish=group_entries)
    with suppress(sqlite3.OperationalError):  # somebody reads, or the disk is nearly full
        conn.execute("VACUUM")


def close_after_writing(conn: sqlite3.Connection, path: Path) -> None:
    """Close a writing connection; leave one plain file, sealed, where no reader is in the way."""
    try:
        conn.execute("PRAGMA busy_timeout = 0")
        (mode,) = conn.execute("PRAGMA journal_mode = DELETE").fetchone()
        if mode == "delete":
            seal(conn, path)
    except (sqlite3.OperationalError, OSError):
        pass  # somebody reads: the file stays in WAL mode and without a seal until the next time
    finally:
        conn.close()


def publish_new(path: Path, build: Callable[[Path], None]) -> bool:
    """Let `build` make a file beside `path`, then give it that name in one step.

    Returns False, leaving the other's file, where somebody else made `path` in the meantime. A
    failed or killed build never shows under `path`. Raises LibraryError for a folder that is
    missing or cannot be written.
    """
    with told(path):
        if not path.parent.is_dir():
            raise LibraryError(
                f"{path}: the folder {path.parent} does not exist. Create it, or name another file."
            )
        with tempfile.TemporaryDirectory(prefix=f".{path.name}-", dir=path.parent) as folder:
            made = Path(folder) / path.name
            try:
                build(made)
            except LibraryError as error:  # the reader knows of `path` alone
                raise LibraryError(str(error).replace(str(made), str(path))) from error
            try:
                path.hardlink_to(made)
            except FileExistsError:
                return False
            except OSError:  # a file system without hard links
                if path.exists():
                    return False
                made.rename(path)
    return True


def build_empty(path: Path) -> None:
    """Create an empty library at `path`, which must not exist."""
    with closing(sqlite3.connect(path, isolation_level=None)) as conn:
        apply_steps(conn)
