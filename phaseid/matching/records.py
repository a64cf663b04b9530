"""Results as tidy records: flat dictionaries that a data frame takes, and a table of them.

Every result of matching is `Tidy`: `records()` for a data frame, `summary()` in a sentence, and
with both of them a table wherever it is shown, in a notebook or by rich.
"""

from __future__ import annotations

from abc import abstractmethod
from html import escape
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rich.table import Table

    from phaseid.library.phase import Phase

Record = dict[str, Any]
_SHOWN = 30


class Tidy:
    """A result that shows itself as a table of its records."""

    __slots__ = ()

    @abstractmethod
    def records(self) -> list[Record]:
        """One flat dictionary per row, all with the same keys; None where nothing is known."""

    @abstractmethod
    def summary(self) -> str:
        """The result in a sentence."""

    def _repr_html_(self) -> str:
        rows = self.records()
        keys = [key for key in rows[0] if any(row[key] is not None for row in rows)] if rows else []
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

        rows = self.records()
        grid = Table(title=self.summary(), title_justify="left")
        keys = [key for key in rows[0] if any(row[key] is not None for row in rows)] if rows else []
        for key in keys:
            grid.add_column(key)
        for row in rows[:_SHOWN]:
            grid.add_row(*(shown(row[key]) for key in keys))
        return grid


def shown(value: Any) -> str:
    """A cell in words: numbers to five digits, nothing for what is not known."""
    if value is None:
        return ""
    return f"{value:.5g}" if isinstance(value, float) else str(value)


def phase_record(phase: Phase) -> Record:
    """What every record says of a phase."""
    return {
        "phase_id": phase.phase_id,
        "name": phase.name,
        "formula": phase.formula,
        "space_group": phase.space_group_symbol,
    }


def indices(hkl: tuple[int, ...]) -> str:
    """Miller indices as one word for a cell: "1 0 -2"."""
    return " ".join(str(int(i)) for i in hkl)
