"""Results as tidy records: flat dictionaries that a data frame takes, and a table of them.

Every result of matching is `Tidy`: `records()` for a data frame, `summary()` in a sentence, and
with both of them a table wherever it is shown, in a notebook or by rich.
"""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, ClassVar, Protocol, TypeVar

if TYPE_CHECKING:
    from rich.table import Table

    from phaseid.library.phase import Phase

Record = dict[str, Any]
PHASE_KEYS = ("phase_id", "name", "formula", "space_group")
_SHOWN = 30
Row = TypeVar("Row", bound="OneRecord")


class OneRecord(Protocol):
    """Something that is one row of a table."""

    def record(self) -> Record:
        """The row, as a flat dictionary."""


class Tidy:
    """A result that shows itself as a table of its records, of `shown_keys` where it names some."""

    __slots__ = ()
    shown_keys: ClassVar[tuple[str, ...]] = ()

    @abstractmethod
    def records(self) -> list[Record]:
        """One flat dictionary per row, all with the same keys; None where nothing is known."""

    @abstractmethod
    def summary(self) -> str:
        """The result in a sentence."""

    def _repr_html_(self) -> str:
        from html import escape

        keys, rows = self._table()
        head = "".join(f"<th>{escape(key)}</th>" for key in keys)
        body = "".join(
            "<tr>" + "".join(f"<td>{escape(shown(row[key]))}</td>" for key in keys) + "</tr>"
            for row in rows[:_SHOWN]
        )
        more = f"<p>{len(rows) - _SHOWN} more rows</p>" if len(rows) > _SHOWN else ""
        return (
            f"<p>{escape(self.summary())}</p><table><thead><tr>{head}</tr></thead>"
            f"<tbody>{body}</tbody></table>{more}"
        )

    def __rich__(self) -> Table:
        from rich.table import Table

        keys, rows = self._table()
        grid = Table(title=self.summary(), title_justify="left")
        for key in keys:
            grid.add_column(key)
        for row in rows[:_SHOWN]:
            grid.add_row(*(shown(row[key]) for key in keys))
        return grid

    def _table(self) -> tuple[list[str], list[Record]]:
        """The keys worth a column, and the rows."""
        rows = self.records()
        keys = self.shown_keys or (tuple(rows[0]) if rows else ())
        return [key for key in keys if any(row[key] is not None for row in rows)], rows


class Rows(list[Row], Tidy):
    """A list of rows that shows itself as a table."""

    def records(self) -> list[Record]:
        """One record per row."""
        return [row.record() for row in self]

    def summary(self) -> str:
        """How many rows."""
        return f"{len(self)} row{'' if len(self) == 1 else 's'}"


def shown(value: Any) -> str:
    """A cell in words: numbers to five digits, nothing for what is not known."""
    if value is None:
        return ""
    return f"{value:.5g}" if isinstance(value, float) else str(value)


def phase_record(phase: Phase) -> Record:
    """What every record says of a phase."""
    values = (phase.phase_id, phase.name, phase.formula, phase.space_group_symbol)
    return dict(zip(PHASE_KEYS, values, strict=True))


def cell_record(cell: Sequence[float] | None) -> Record:
    """A cell's lengths and angles, each a column."""
    names = ("a_A", "b_A", "c_A", "alpha_deg", "beta_deg", "gamma_deg")
    return dict(zip(names, [None] * 6 if cell is None else cell, strict=True))


def indices(hkl: tuple[int, ...]) -> str:
    """Miller indices as one word for a cell: "1 0 -2"."""
    return " ".join(str(int(i)) for i in hkl)
