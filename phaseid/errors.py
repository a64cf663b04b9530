"""Every error phaseid raises on purpose.

    PhaseidError
    ├── InputError        what was given is wrong                     exit code 2
    │   └── CifError      a structure file that cannot be used (recorded, never fatal to a run)
    └── LibraryError      the library is missing, unreadable, newer   exit code 3

Each message says what is wrong, where, and what to do next. Only `cli` turns them into exit codes.
"""

from __future__ import annotations

from pathlib import Path


class PhaseidError(Exception):
    """Base of all errors that phaseid raises on purpose."""

    exit_code = 1


class InputError(PhaseidError):
    """What was given is wrong.

    `path` and `line` say where; `remedy` says what to do next. All three appear in the message.
    """

    exit_code = 2

    def __init__(
        self,
        what: str,
        *,
        path: str | Path | None = None,
        line: int | None = None,
        remedy: str | None = None,
    ) -> None:
        self.what = what
        self.path = None if path is None else str(path)
        self.line = line
        self.remedy = remedy
        where = "" if self.path is None else self.path
        if line is not None:
            where = f"{where} line {line}".strip()
        message = f"{where}: {what}" if where else what
        if remedy is not None:
            if not message.endswith("\n"):
                message += " " if message.endswith((".", "?", "!")) else ". "
            message += remedy
        super().__init__(message)


class CifError(InputError):
    """A structure that cannot be used; `code` is a short stable word for the kind of defect."""

    def __init__(self, code: str, what: str, *, path: str | Path | None = None) -> None:
        self.code = code
        super().__init__(what, path=path)


class LibraryError(PhaseidError):
    """The library is missing, unreadable, damaged or from a newer version."""

    exit_code = 3
