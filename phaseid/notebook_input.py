"""What a notebook's functions take: rings, phases and libraries in the ways a person gives them."""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal
    from phaseid.library import Library, Phase
    from phaseid.matching.chemistry import Chemistry
    from phaseid.rings import RingList

    Shelf = Library | str | os.PathLike[str] | None
    Typed = str | os.PathLike[str] | Sequence[Any]
    Given = RingList | str | os.PathLike[str] | Sequence[Any]

_READING = (
    "probe",
    "scale_uncertainty",
    "camera_constant",
    "calibration",
    "unit",
    "sigma",
    "intensities",
)


@contextmanager
def opened(library: Shelf) -> Iterator[Library]:
    """The library given, left open; or one opened for this call."""
    from phaseid.cli.options import open_library
    from phaseid.library import Library

    if isinstance(library, str | os.PathLike) or library is None:
        with open_library(None if library is None else Path(library)) as shelf:
            yield shelf
    elif isinstance(library, Library):
        yield library
    else:
        raise InputError(
            f"a library is a path or open, not {type(library).__name__}",
            remedy="Leave it out, or give the path of a library file.",
        )


def found_phase(text: str, library: Shelf) -> tuple[Phase, Crystal]:
    """The phase that `text` names, and its structure; raises InputError as the commands do."""
    from phaseid.cli.phases import find_in, named_file

    if (found := named_file(text)) is not None:
        return found
    with opened(library) as shelf:
        return find_in(shelf, text)


def chemistry_of(
    chemistry: Chemistry | None, must: str | None, only: str | None, exclude: str | None
) -> Chemistry:
    """The chemistry given whole or as element lists; raises InputError where both are."""
    from phaseid.matching.chemistry import Chemistry

    if chemistry is None:
        return Chemistry.parse(must, only, exclude)
    if (must, only, exclude) != (None, None, None):
        raise InputError(
            "chemistry and element lists are both given", remedy="Give one or the other."
        )
    return chemistry


def ring_lists_of(given: Given, reading: dict[str, Any]) -> list[RingList]:
    """The ring lists that are meant: one of numbers, or one for each of several things."""
    from phaseid.cli.ring_input import ring_lists
    from phaseid.rings import RingList

    unknown = set(reading) - set(_READING)
    if unknown:
        raise TypeError(f"unexpected argument {', '.join(sorted(unknown))}")
    if isinstance(given, RingList):
        if reading:
            raise InputError(
                "a ring list that is read already takes no further reading",
                remedy=f"Give {', '.join(reading)} where it is read.",
            )
        return [given]
    if isinstance(given, str | os.PathLike) or _are_numbers(given):
        words = {key: _word(value) for key, value in reading.items() if value is not None}
        return ring_lists(words_of(given), **words)
    return [rings for one in given for rings in ring_lists_of(one, reading)]


def _are_numbers(given: Sequence[Any]) -> bool:
    from phaseid.cli.ring_input import typed_numbers

    return len(given) > 0 and all(
        not hasattr(one, "d_A")
        and not isinstance(one, os.PathLike)
        and len(typed_numbers(_word(one))) == 1
        for one in given
    )


def words_of(given: Typed) -> list[str]:
    """Rings as they would be typed: a path, or numbers."""
    if isinstance(given, str | os.PathLike):
        return [os.fspath(given)]
    return [_word(one) for one in given]


def _word(value: Any) -> str:
    """One value as it would be typed; of several, a list."""
    if isinstance(value, str):
        return value
    if hasattr(value, "tolist"):  # a number or array of numpy
        value = value.tolist()
    if isinstance(value, Sequence):
        return " ".join(_word(one) for one in value)
    return repr(value) if isinstance(value, int | float) else os.fspath(value)
