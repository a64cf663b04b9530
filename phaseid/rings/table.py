"""From the text of a ring list to its cells: metadata, header, rows. No physics here.

A file says what it means or is refused: separators and decimal commas are accepted where only one
reading is possible, misspelt columns are refused with the nearest name.
"""

from __future__ import annotations

import csv
import re
import unicodedata
from dataclasses import dataclass, field
from difflib import get_close_matches
from pathlib import Path
from typing import TYPE_CHECKING

from phaseid.errors import InputError
from phaseid.rings.columns import COLUMNS, Column

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from phaseid.rings.measuring.disc import Disc

KNOWN_KEYS = ("title", "probe", "scale uncertainty", "camera constant", "detection limit")
OPTIONAL_COLUMNS = ("sigma", "intensity", "spottiness", "arcs", "note")
MAX_BYTES = 2_000_000
MAX_RINGS = 2000
MAX_LINE = 5000
FORMULA_SIGNS = ("=", "+", "-", "@", "\t", "\r")
"""With one of these a cell begins that a spreadsheet takes for a formula."""

_CONTROL = re.compile(rb"[\x00-\x08\x0e-\x19\x1b-\x1f]")  # never in text
_TOO_MANY = "{} cells, {} in the header (a decimal comma? Write 2.338 or separate columns by ';')"
_SYNONYMS = {
    "intensity": (
        "i",
        "int",
        "irel",
        "i_rel",
        "rel_int",
        "i/i0",
        "i/i1",
        "rel_intensity",
        "height",
    ),
    "sigma": ("error", "err", "esd", "std", "uncertainty", "sd", "±", "u"),
}


@dataclass(frozen=True, slots=True)
class Row:
    """One ring as typed; `where` is how to point at it ("line 7"), `defect` why it is no row."""

    where: str
    position: str
    sigma: str = ""
    intensity: str = ""
    spottiness: str = ""
    arcs: str = ""
    note: str = ""
    defect: str = ""


@dataclass(slots=True)
class RingTable:
    """A ring list taken apart; `metadata` has keys as spelt, `keys` the known ones with line.

    `disc` is a picture of the image the rings were measured on, `curve` (k, 2) the curve (position
    in the column's unit, counts above the background), if they were measured just now.
    """

    source: str
    column: Column
    rows: list[Row]
    metadata: dict[str, str] = field(default_factory=dict)
    keys: dict[str, tuple[str, int | None]] = field(default_factory=dict)
    remarks: list[str] = field(default_factory=list)
    disc: Disc | None = None
    curve: NDArray[np.float64] | None = None


def read_text(path: str | Path) -> str:
    """The text of a ring list file; raises InputError if it cannot be read or is no text."""
    file = Path(path)
    try:
        with file.open("rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except (OSError, ValueError) as error:
        reason = (getattr(error, "strerror", None) or str(error)).lower()
        raise InputError(
            f"cannot be read: {reason}", path=path, remedy="Give the path of a ring list file."
        ) from None
    return text_of(data, str(path))


def text_of(data: bytes, path: str) -> str:
    """The text in the bytes of a ring list called `path`; raises InputError if it is no text."""
    if len(data) > MAX_BYTES:
        raise InputError(
            f"is larger than {MAX_BYTES // 1_000_000} MB, too large for a ring list",
            path=path,
            remedy="A whole profile or image is turned into rings by 'phaseid measure'.",
        )
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise InputError("is UTF-16 text", path=path, remedy="Save it as UTF-8.")
    if _CONTROL.search(data):
        raise InputError(
            "is a binary file, not a ring list",
            path=path,
            remedy="Rings of an image: 'phaseid measure'; a spreadsheet: save it as CSV.",
        )
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise InputError(
            "is not UTF-8 text", path=path, line=line, remedy="Save it as UTF-8 (or write A for Å)."
        ) from None


def parse_table(text: str, source: str) -> RingTable:
    """Take the text of a ring list apart; raises InputError naming file, line and remedy."""
    metadata: dict[str, str] = {}
    keys: dict[str, tuple[str, int | None]] = {}
    remarks: list[str] = []
    body: list[tuple[int, str]] = []
    for number, raw in enumerate(re.split(r"\r\n|\r|\n", text.removeprefix("\ufeff")), start=1):
        line = raw.strip()
        if len(line) > MAX_LINE:
            raise InputError(
                f"is longer than {MAX_LINE} characters",
                path=source,
                line=number,
                remedy="A ring list has one ring a line.",
            )
        if line.startswith("#"):
            _take_metadata(line, number, source, metadata, keys, remarks)
        elif line.strip(",; \t"):
            body.append((number, raw))
    if not body:
        raise InputError(
            "has no header and no rings",
            path=source,
            remedy="A ring list has a header line such as 'd_A,intensity' and a line per ring.",
        )
    header_line, header = body[0]
    delimiter, names = _split_header(header)
    columns = _columns(names, source, header_line, remarks)
    position = next(name for name in columns if name in COLUMNS)
    if len(body) == 1:
        raise InputError("has a header but no rings", path=source, remedy="Add a line per ring.")
    if len(body) - 1 > MAX_RINGS:
        raise InputError(
            f"has {len(body) - 1} rows; a ring list has at most {MAX_RINGS}",
            path=source,
            remedy="A whole profile is turned into rings by 'phaseid measure'.",
        )
    rows = []
    for number, raw in body[1:]:
        cells = _split(raw, delimiter, len(columns))
        extra = [cell for cell in cells[len(columns) :] if cell]
        if extra and columns[-1] == "note":
            cells[len(columns) - 1] = ", ".join([cells[len(columns) - 1], *extra])
            extra = []
        by_name = dict(zip(columns, cells, strict=False))
        rows.append(
            Row(
                where=f"line {number}",
                position=by_name.get(position, ""),
                sigma=by_name.get("sigma", ""),
                intensity=by_name.get("intensity", ""),
                spottiness=by_name.get("spottiness", ""),
                arcs=by_name.get("arcs", ""),
                note=_note(by_name.get("note", "")),
                defect=_TOO_MANY.format(len(cells), len(columns)) if extra else "",
            )
        )
    return RingTable(source, COLUMNS[position], rows, metadata, keys, remarks)


def refuse_rows(problems: list[tuple[str, str]], source: str) -> None:
    """Raise InputError on all bad rows together, each as (where, what); none is no error."""
    if not problems:
        return
    remedy = "Correct it, or begin its line with '#' to leave it out."
    together = "Correct them, or begin their lines with '#' to leave them out."
    path = source or None
    if len(problems) == 1:
        where, what = problems[0]
        number = int(where[5:]) if where.startswith("line ") else None
        if number is None:
            what, remedy = f"{where}: {what}", "Correct it."
        raise InputError(what, path=path, line=number, remedy=remedy)
    shown = [f"\n  {where}: {what}" for where, what in problems[:20]]
    if len(problems) > 20:
        shown.append(f"\n  and {len(problems) - 20} more")
    if path is None:
        together = "Correct them."
    raise InputError(
        f"{len(problems)} rows cannot be used{''.join(shown)}\n", path=path, remedy=together
    )


def _take_metadata(
    line: str,
    number: int,
    source: str,
    metadata: dict[str, str],
    keys: dict[str, tuple[str, int | None]],
    remarks: list[str],
) -> None:
    match = re.match(r"#+\s*([^:#]{1,60}?)\s*:\s*(.*)$", line)
    if match is None:
        return
    spelt, value = match[1], match[2].strip()
    key = re.sub(r"[\s_-]+", " ", unicodedata.normalize("NFKC", spelt)).lower()
    if key in KNOWN_KEYS:
        if key in keys and keys[key][0] != value:
            raise InputError(
                f"'{key}' is given twice, as '{keys[key][0]}' and as '{value}'",
                path=source,
                line=number,
                remedy="Keep one of the two lines.",
            )
        keys[key] = (value, number)
    elif close := get_close_matches(key, KNOWN_KEYS, n=1, cutoff=0.75):
        remarks.append(
            f"Line {number}: metadata '{spelt}' is kept but not used; did you mean '{close[0]}'?"
        )
    metadata[spelt] = value


def _split_header(header: str) -> tuple[str | None, list[str]]:
    """Separator (None for blanks) and names; the header decides for the whole file."""
    for delimiter in (";", "\t", ","):
        if delimiter in header:
            cells = _split(header, delimiter, 0)
            while len(cells) > 1 and not cells[-1]:
                cells.pop()
            return delimiter, cells
    words = header.split()
    known = {_canonical(name) for name in (*COLUMNS, *OPTIONAL_COLUMNS)}
    if len(words) > 1 and all(_canonical(word) in known for word in words):
        return None, words
    return ",", [header.strip().strip('"')]


def _split(line: str, delimiter: str | None, count: int) -> list[str]:
    if delimiter is None:
        return line.split(None, count - 1)
    return [cell.strip() for cell in next(csv.reader([line], delimiter=delimiter), [""])]


def _note(text: str) -> str:
    """Return a note without the apostrophe that guards it from spreadsheets."""
    return text[1:] if text.startswith(tuple(f"'{sign}" for sign in FORMULA_SIGNS)) else text


def _canonical(name: str) -> str:
    plain = unicodedata.normalize("NFKC", name).strip().lower()
    plain = plain.replace("å", "a").replace("θ", "theta").replace("°", "deg")
    return re.sub(r"[\s()\[\],_]+", "_", plain).strip("_")


def _columns(names: list[str], source: str, line: int, remarks: list[str]) -> list[str]:
    """The format's names for the header's columns, "" for one that is not used."""
    known = {_canonical(name): name for name in (*COLUMNS, *OPTIONAL_COLUMNS)}
    found = [known.get(_canonical(name), "") for name in names]
    positions = [name for name in found if name in COLUMNS]
    choices = f"The position columns are {', '.join(COLUMNS)}."

    def refuse(what: str, remedy: str) -> InputError:
        return InputError(what, path=source, line=line, remedy=remedy)

    if len(positions) > 1:
        raise refuse(
            f"two position columns: {positions[0]} and {positions[1]}",
            "Keep exactly one; each list states its rings in one way.",
        )
    if not positions:
        if all(re.fullmatch(r"[\d.,eE+\s-]+", name) for name in names if name):
            raise refuse(
                "the header line is missing, numbers come first",
                "Put a line such as 'd_A,intensity' above them.",
            )
        if re.match(
            r"(title|probe|scale uncertainty|camera constant|detection limit)\s*:", names[0].lower()
        ):
            raise refuse(
                f"'{names[0]}' stands where the header should be",
                "Begin metadata lines with '#'.",
            )
        nearest = next((near for name in names if (near := _nearest_position(name))), "")
        hint = f"Did you mean {nearest}? " if nearest else ""
        shown = ", ".join(f"'{name}'" for name in names[:8])
        raise refuse(f"no position column among {shown}", f"{hint}{choices}")
    suffix = _canonical(positions[0].rpartition("_")[2])
    for index, name in enumerate(names):
        if found[index] or not name:
            continue
        plain = _canonical(name)
        if plain == f"sigma_{suffix}":
            found[index] = "sigma"
            continue
        synonym = [usual for usual, others in _SYNONYMS.items() if plain in others]
        close = get_close_matches(plain, OPTIONAL_COLUMNS, n=1, cutoff=0.7)
        near = next(iter(synonym + close), "")
        if near in ("sigma", "intensity"):
            raise refuse(f"unknown column '{name}'", f"Did you mean '{near}'?")
        hint = f"; did you mean '{near}'?" if near else "."
        remarks.append(f"Column '{name}' is not used{hint}")
    used = [name for name in found if name]
    for name in used:
        if used.count(name) > 1:
            raise refuse(f"two columns '{name}'", "Keep one of them.")
    return found


def _nearest_position(name: str) -> str:
    plain = _canonical(name)
    if "theta" in plain or plain in ("tth", "2th", "angle"):
        return "'two_theta_deg'"
    if "diam" in plain:
        return "'diameter_mm'"
    if "radius" in plain or plain in ("r", "r_mm", "r_px"):
        return "'radius_px'" if "px" in plain or "pix" in plain else "'radius_mm' or 'radius_px'"
    for letter, words in {
        "d": ("d", "dspacing", "spacing"),
        "q": ("q",),
        "g": ("g", "s", "k"),
    }.items():
        head = re.split(r"[_\-/\s]", plain)[0]
        if head in words:
            both = "'d_A' or 'd_nm'" if letter == "d" else f"'{letter}_1/A' or '{letter}_1/nm'"
            if letter == "d" or "nm" not in plain:
                return both
            return f"'{letter}_1/nm'"
    close = get_close_matches(plain, [_canonical(c) for c in COLUMNS], n=1, cutoff=0.6)
    return next((f"'{c}'" for c in COLUMNS if _canonical(c) in close), "")
