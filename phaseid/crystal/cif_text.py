"""Bytes -> CIF blocks: encoding, byte order mark, lenient syntax, and limits on hostile input.

gemmi parses. What it refuses is tried again without its check for duplicate tags and empty items,
then after light repairs that cannot change a value: characters outside ASCII made "?", empty loops
and text before the first data_ line dropped.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import cast

import gemmi

from phaseid.crystal.crystal import Finding

MAX_BYTES = 32 * 1024 * 1024
MAX_BLOCKS = 100_000
_MAX_NUMBER = 100  # characters
_MAX_MESSAGE = 400
_UTF8_BOM = b"\xef\xbb\xbf"
_UTF16_BOMS = (b"\xff\xfe", b"\xfe\xff")
_DATA = re.compile(r"^data_", re.IGNORECASE | re.MULTILINE)
_NUMBER = re.compile(r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?(?:\(\d+\))?$")
_FRACTION = re.compile(r"([-+]?\d{1,9})/(\d{1,9})$")
_PLACE = re.compile(r"^[^:]*:(\d+)(?::(\d+)\(\d+\))?:?\s*")


class Block:
    """One data block: tags (lower case) to raw values, loops by column.

    `text` and `number` read single items, also where the item stands in a loop of one row.
    """

    def __init__(self, block: gemmi.cif.Block) -> None:
        self.name: str = block.name
        self._pairs: dict[str, str] = {}
        self._loops: dict[str, tuple[gemmi.cif.Loop, int]] = {}
        self._values: dict[int, list[str]] = {}  # of loops read, by identity
        self._tags = ""  # all tags, each on a line of its own
        for item in block:
            pair = cast("tuple[str, str] | None", item.pair)
            if pair is not None:
                self._pairs.setdefault(pair[0].lower(), pair[1])
                continue
            loop = item.loop
            if loop is not None:
                for index, tag in enumerate(loop.tags):
                    self._loops.setdefault(tag.lower(), (loop, index))
        self._tags = "\n" + "\n".join((*self._pairs, *self._loops))

    def __contains__(self, tag: str) -> bool:
        return tag in self._pairs or tag in self._loops

    def has_prefix(self, *prefixes: str) -> bool:
        """Tell whether any tag starts with one of the prefixes (lower case)."""
        return any("\n" + prefix in self._tags for prefix in prefixes)

    def text(self, *tags: str) -> str:
        """Return the first given value among the tags, unquoted, white space joined, else ""."""
        for tag in tags:
            raw = self._pairs.get(tag)
            if raw is None:
                column = self.column(tag) if tag in self._loops else ()
                if not column:
                    continue
                raw = column[0]
            if raw not in ("?", ".", ""):
                value = " ".join(gemmi.cif.as_string(raw).split())
                if value not in ("", "?", "."):
                    return value
        return ""

    def number(self, *tags: str) -> float | None:
        """Return the first readable number among the tags, its standard uncertainty dropped."""
        for tag in tags:
            if tag not in self:
                continue
            plain = gemmi.cif.as_number(self._pairs.get(tag, "?"))
            value = plain if math.isfinite(plain) else parse_number(self.text(tag))
            if value is not None:
                return value
        return None

    def whole(self, *tags: str) -> int | None:
        """Return the first whole number among the tags, quoted or not."""
        value = self.number(*tags)
        return int(value) if value is not None and value == int(value) else None

    def column(self, tag: str) -> list[str]:
        """Return a loop's column as raw values; a single item is a column of one; else []."""
        if tag in self._pairs:
            return [self._pairs[tag]]
        if tag not in self._loops:
            return []
        loop, index = self._loops[tag]
        values = self._values.get(id(loop))
        if values is None:
            values = self._values[id(loop)] = list(loop.values)
        return values[index :: loop.width()]

    def rows(self, tag: str) -> int:
        """Return the number of rows of the loop that holds a tag; 1 for a single item, else 0."""
        if tag in self._loops:
            return self._loops[tag][0].length()
        return int(tag in self._pairs)

    def strings(self, tag: str) -> list[str]:
        """Return a loop's column unquoted."""
        return [gemmi.cif.as_string(raw) for raw in self.column(tag)]


@dataclass(frozen=True, slots=True)
class Unreadable:
    """Why a text is no CIF: a code and a sentence."""

    code: str
    reason: str


def parse_number(text: str) -> float | None:
    """Return a CIF number ("0.707(2)") or a simple fraction ("3/4"); None for anything else."""
    if len(text) > _MAX_NUMBER:
        return None
    if _NUMBER.match(text):
        value = float(text.partition("(")[0])
        return value if math.isfinite(value) else None
    fraction = _FRACTION.match(text)
    if fraction and int(fraction.group(2)):
        return int(fraction.group(1)) / int(fraction.group(2))
    return None


def parse_cif(data: bytes) -> tuple[list[Block], tuple[Finding, ...]] | Unreadable:
    """Return the blocks of a CIF text and what had to be repaired, or why it cannot be read."""
    if len(data) > MAX_BYTES:
        return Unreadable(
            "too_large",
            f"the file holds more than {MAX_BYTES // 2**20} MB, the most that is read; split it, "
            "or drop embedded reflection lists",
        )
    findings: list[Finding] = []
    text = _decode(data, findings)
    if text is None:
        return Unreadable("not_text", "this is a binary file, no CIF text")
    if text.count("data_") > MAX_BLOCKS:
        return Unreadable(
            "too_large", f"the file holds more than {MAX_BLOCKS} data blocks; split it"
        )
    document = _parse(text, findings)
    if isinstance(document, Unreadable):
        return document
    return [Block(block) for block in document], tuple(findings)


def _decode(data: bytes, findings: list[Finding]) -> str | None:
    if data.startswith(_UTF16_BOMS):
        findings.append(Finding("encoding", "the text is UTF-16, CIF asks for ASCII"))
        text = data.decode("utf-16", errors="replace")
        return None if "\0" in text else text
    data = data.removeprefix(_UTF8_BOM)
    if b"\0" in data:
        return None
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError:
        findings.append(Finding("encoding", "the text is not UTF-8; it is read as Latin-1"))
        return data.decode("latin-1")


def _parse(text: str, findings: list[Finding]) -> gemmi.cif.Document | Unreadable:
    try:
        return gemmi.cif.read_string(text)
    except (ValueError, RuntimeError, UnicodeError) as error:
        message = str(error)
    note = _syntax_finding(message)
    for candidate in _repairs(text):
        try:
            document = gemmi.cif.read_string(candidate, check_level=0)
        except (ValueError, RuntimeError, UnicodeError):
            continue
        findings.append(note)
        return document
    if _DATA.search(text) is None:
        return Unreadable("not_cif", "no data_ block: this is no CIF")
    return Unreadable("syntax_error", f"CIF syntax: {_readable(message)}")


def _repairs(text: str) -> list[str]:
    """Return texts to try in turn, each with one more repair."""
    attempts = [text]
    if not text.isascii():
        text = text.encode("ascii", errors="replace").decode("ascii")
        attempts.append(text)
    start = _DATA.search(text)
    if start and start.start() > 0:
        text = text[start.start() :]
        attempts.append(text)
    full = _without_empty_loops(text)
    if full is not None:
        attempts.append(full)
    return attempts


def _without_empty_loops(text: str) -> str | None:
    """Return text without loops that have tags and no values, None if there is no such loop."""
    kept: list[str] = []
    header: list[str] = []  # a loop_ line and the tags after it, until a value shows up
    dropped = False
    for line in (*text.split("\n"), "data_"):
        words = line.split()
        opens = bool(words) and words[0].lower().startswith(("loop_", "data_"))
        bare_tag = len(words) == 1 and words[0].startswith("_")
        if header and (not words or bare_tag):
            header.append(line)
            continue
        if header and len(header) > 1 and (opens or (words and words[0].startswith("_"))):
            dropped = True
        else:
            kept += header
        header = []
        if len(words) == 1 and words[0].lower() == "loop_":
            header = [line]
        else:
            kept.append(line)
    return "\n".join(kept[:-1]) if dropped else None


def _syntax_finding(message: str) -> Finding:
    if "duplicate tag" in message:
        return Finding("duplicate_tag", f"{_readable(message)}; the first value is used")
    return Finding("syntax_error", f"CIF syntax repaired: {_readable(message)}")


def _readable(message: str) -> str:
    """Return a parser message with its place written as "line N"."""
    place = _PLACE.match(message)
    if place is None:
        return message[:_MAX_MESSAGE]
    words = message[place.end() :].removeprefix("in ")
    return f"line {place.group(1)}: {words[:_MAX_MESSAGE]}"
