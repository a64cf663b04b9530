"""What is known of the specimen's elements, as constraints on the phases of an answer."""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from phaseid.errors import InputError
from phaseid.library.formulas import SYMBOLS

_KNOWN = frozenset(SYMBOLS)


def parse_elements(text: str | None, option: str) -> frozenset[str]:
    """Read a list of element symbols such as "Al,O" (commas, semicolons or blanks between).

    Raises InputError with a caret under the first word that is no element.
    """
    if text is None:
        return frozenset()
    found = set()
    for word in re.finditer(r"[^\s,;]+", text):
        symbol = word.group().capitalize()
        symbol = "H" if symbol in ("D", "T") else symbol
        if symbol not in _KNOWN:
            near = difflib.get_close_matches(symbol, SYMBOLS, n=3, cutoff=0.4)
            pointer = f"\n  {text}\n  {' ' * word.start()}^"
            raise InputError(
                f"{option}: '{word.group()}' is not an element symbol{pointer}\n",
                remedy=f"Close symbols: {', '.join(near)}." if near else "Write e.g. Al,O.",
            )
        found.add(symbol)
    if not found:
        raise InputError(f"{option}: no element given", remedy="Write e.g. Al,O.")
    return frozenset(found)


def _parted(only: str | None) -> tuple[str | None, str | None]:
    """The list without the marks of doubt, and the elements in doubt alone, None where none is."""
    if only is None or "?" not in only:
        return only, None
    doubted = re.findall(r"([^\s,;?]+)\?", only)
    return only.replace("?", ""), ",".join(doubted)


@dataclass(frozen=True, slots=True)
class Chemistry:
    """Constraints on an answer.

    The phases of an answer together contain every element of `must`; no phase contains an element
    of `exclude`, nor one outside `only` (None: any). `must` elements are always allowed. Elements
    of `doubt`, part of `only`, were seen with doubt: phases with them may be there, but are less
    likely.
    """

    must: frozenset[str] = frozenset()
    only: frozenset[str] | None = None
    exclude: frozenset[str] = frozenset()
    doubt: frozenset[str] = frozenset()

    @classmethod
    def parse(cls, must: str | None, only: str | None, exclude: str | None) -> Chemistry:
        """Build from three texts; in `only`, "Fe?" is an element seen with doubt.

        Raises InputError for unknown symbols or a contradiction.
        """
        for text, option in ((must, "--must"), (exclude, "--not")):
            if text is not None and "?" in text:
                raise InputError(
                    f"{option}: an element in doubt is neither required nor excluded: {text}",
                    remedy="Name it in --only, as Fe?; without --only every element is allowed.",
                )
        only, doubt = _parted(only)
        chemistry = cls(
            must=parse_elements(must, "--must"),
            only=None if only is None else parse_elements(only, "--only"),
            exclude=parse_elements(exclude, "--not"),
            doubt=parse_elements(doubt, "--only"),
        )
        if chemistry.must & chemistry.doubt:
            raise InputError(
                f"--must requires {', '.join(sorted(chemistry.must & chemistry.doubt))}, "
                "which --only puts in doubt",
                remedy="Take it out of --must, or take its question mark away.",
            )
        both = chemistry.must & chemistry.exclude
        if both:
            raise InputError(
                f"--must and --not both name {', '.join(sorted(both))}",
                remedy="An element cannot be both required and excluded: take it out of one.",
            )
        if chemistry.only is not None and not chemistry.must <= chemistry.only:
            outside = ", ".join(sorted(chemistry.must - chemistry.only))
            raise InputError(
                f"--must names {outside}, which --only does not allow",
                remedy="Add it to --only, or take it out of --must.",
            )
        if chemistry.only is not None and not chemistry.only - chemistry.exclude:
            raise InputError(
                "--only and --not leave no element",
                remedy="Take an element out of --not, or add one to --only.",
            )
        return chemistry

    def admits(self, elements: Iterable[str]) -> bool:
        """Whether one phase with these elements may be part of an answer."""
        have = frozenset(elements)
        return not (have & self.exclude) and (self.only is None or have <= self.only)

    def satisfied_by(self, phases: Sequence[frozenset[str]]) -> bool:
        """Whether phases with these element sets together contain all required elements."""
        return self.must <= frozenset().union(*phases)

    def describe(self) -> str:
        """One sentence for the answer, "" where nothing is constrained."""
        parts = []
        if self.must:
            parts.append(f"required {', '.join(sorted(self.must))}")
        if self.only is not None:
            parts.append(f"no element other than {', '.join(sorted(self.only))}")
        if self.doubt:
            parts.append(f"in doubt {', '.join(sorted(self.doubt))}")
        if self.exclude:
            parts.append(f"excluded {', '.join(sorted(self.exclude))}")
        return f"Chemistry: {'; '.join(parts)}." if parts else ""
