"""Folders: what lies in them, and what in them is better left alone."""

from __future__ import annotations

import os
import stat
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import NamedTuple


class Shut(NamedTuple):
    """Something in a folder that is not entered: a code, and the reason in words."""

    path: Path
    code: str
    reason: str


def walk(folder: Path, wanted: Callable[[str], bool]) -> Iterator[Path | Shut]:
    """Yield every ordinary file of a wanted name in a folder and those below, in a fixed order.

    A link is followed where it leads to a file in `folder`. Other links come as Shut, and so do
    folders that cannot be opened, pipes and devices. However deep a folder is, memory stays small.
    """
    root = Path(os.path.realpath(folder))
    waiting = [folder]
    while waiting:
        here = waiting.pop()
        try:
            with os.scandir(here) as entries:
                found = sorted(entries, key=lambda entry: entry.name)
        except OSError as error:
            yield Shut(here, "unreadable", f"the folder cannot be opened ({error.strerror})")
            continue
        inner = []
        for entry in found:
            path = here / entry.name
            if entry.is_dir(follow_symlinks=False):
                inner.append(path)
            elif entry.is_symlink() and path.is_dir():
                yield Shut(path, "link", "a link to a folder is not followed; name the folder")
            elif wanted(entry.name):
                yield _looked_at(path, entry.is_symlink(), root)
        waiting += reversed(inner)


def _looked_at(path: Path, is_link: bool, root: Path) -> Path | Shut:
    if is_link and not Path(os.path.realpath(path)).is_relative_to(root):
        return Shut(path, "link", "a link that leads out of the folder; name the file itself")
    problem = no_file(path)
    return path if problem is None else Shut(path, *problem)


def no_file(path: Path) -> tuple[str, str] | None:
    """Return code and reason where a path is no file that can be read to an end, else None."""
    try:
        mode = path.stat().st_mode
    except FileNotFoundError:
        return "no_such_file", "there is no such file or folder"
    except (OSError, ValueError) as error:
        return "unreadable", f"the file cannot be read ({getattr(error, 'strerror', error)})"
    if stat.S_ISREG(mode):
        return None
    return "no_file", "this is a pipe or a device, not a file"
