"""Faces for the words of PNG and PDF: DejaVu Sans, else a face of the system, else the code.

A viewer finds faces for the letters of an SVG by itself; these two formats bring theirs along.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import cache
from importlib.util import find_spec
from itertools import groupby
from pathlib import Path
from typing import TYPE_CHECKING
from unicodedata import normalize

from phaseid.errors import InputError
from phaseid.reports.plain import safe

if TYPE_CHECKING:
    from PIL.ImageFont import FreeTypeFont

FACE_RATIO = 0.93
"""Size in which words are set: DejaVu Sans runs wider than a browser's face."""
_BOLD = "DejaVuSans-Bold.ttf"
_FAMILY = ("DejaVuSans.ttf", "Vera.ttf")  # with matplotlib; with reportlab, without Greek
SYSTEM_FACES = (
    "DroidSansFallbackFull.ttf",
    "DroidSansFallback.ttf",
    "wqy-zenhei.ttc",
    "wqy-microhei.ttc",
    "NotoSansCJK-Regular.ttc",
    "Arial Unicode.ttf",
    "PingFang.ttc",
    "AppleSDGothicNeo.ttc",
    "msyh.ttc",
    "YuGothR.ttc",
    "malgun.ttf",
    "seguisym.ttf",
)
"""Files with many letters that Linux, macOS and Windows often have."""
_NO_LETTER = "\U0010ffff"
_PLAIN_TO = 0xFF  # each of them has these

Usable = Callable[[Path], bool]


def runs(words: str, bold: bool, usable: Usable) -> list[tuple[Path, str]]:
    """Words in pieces, each with a file of a face that has its letters and is `usable`.

    A letter that no face has becomes a plainer one of the same meaning (NFKC), else `[U+9244]`.
    Raises InputError where there is no face at all.
    """
    own = _face(" ", bold, usable)
    pieces: list[tuple[Path, str]] = []
    shown = "".join(_shown(letter, bold, usable) for letter in normalize("NFC", safe(words)))
    for found, letters in groupby(shown, lambda letter: _face(letter, bold, usable)):
        text = "".join(letters)
        file, text = (own, _spelt(text)) if found is None else (found, text)
        if file is None:
            raise InputError(
                "no face was found for the words of the picture",
                remedy="Install phaseid's dependencies anew, or write an .svg.",
            )
        if pieces and pieces[-1][0] == file:
            text = pieces.pop()[1] + text
        pieces.append((file, text))
    return pieces


def _shown(letter: str, bold: bool, usable: Usable) -> str:
    """The letter, or plainer ones where no face has it and they are in the first face."""
    if _face(letter, bold, usable) is not None:
        return letter
    plainer = normalize("NFKC", letter)
    return letter if any(_face(one, bold, usable) is None for one in plainer) else plainer


def _spelt(letters: str) -> str:
    return f"[U+{ord(letters[0]):04X}{'…' if len(letters) > 1 else ''}]"


@cache
def _face(letter: str, bold: bool, usable: Usable) -> Path | None:
    """The first file that has the letter."""
    for file in _files(bold):
        if usable(file) and (ord(letter) <= _PLAIN_TO or _has(file, letter)):
            return file
    return None


def _files(bold: bool) -> Iterator[Path]:
    """Files of faces as they are preferred; those of the system are sought last."""
    for name in (*((_BOLD,) if bold else ()), *_FAMILY, *SYSTEM_FACES):
        if (file := _found(name)) is not None:
            yield file


@cache
def _found(name: str) -> Path | None:
    """A file of that name where a package has it, found without loading that, or the system."""
    from PIL import ImageFont

    for package, folder in (("matplotlib", "mpl-data/fonts/ttf"), ("reportlab", "fonts")):
        home = find_spec(package)
        file = Path(home.origin if home and home.origin else "").parent / folder / name
        if file.is_file():
            return file
    try:
        return Path(str(ImageFont.truetype(name).path))
    except OSError:
        return None


def _has(file: Path, letter: str) -> bool:
    """Whether a face draws the letter unlike one that does not exist."""
    return _drawn(file, letter) != _drawn(file, _NO_LETTER)


def _drawn(file: Path, letter: str) -> tuple[tuple[int, int], bytes]:
    mask = face(file, 16).getmask(letter)
    return mask.size, bytes(mask)


@cache
def face(file: Path, size: int) -> FreeTypeFont:
    """The face of a file in a size, in dots."""
    from PIL import ImageFont

    return ImageFont.truetype(str(file), size)
