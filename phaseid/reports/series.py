"""A series as text, as JSON and as a table of records."""

from __future__ import annotations

import csv
import io
from pathlib import Path
from typing import Any

from phaseid.matching.identification import PhaseAnswer
from phaseid.matching.series_answer import Series, SeriesPattern, SeriesPhase
from phaseid.reports.json import CELL_KEYS, phase_dict, probe_dict
from phaseid.reports.picture_style import phase_letter
from phaseid.reports.plain import (
    Column,
    cell_text,
    phase_text,
    probability_text,
    safe,
    shorten,
    table,
    wrap,
)
from phaseid.rings.writing import spreadsheet_text

SCHEMA = "phaseid.series/1"
Failed = tuple[str, str]
"""Source and reason of a pattern that could not be read."""
_COLUMN_WIDTH, _OTHER_COLUMNS = 7, 46


def series_dict(series: Series, failed: list[Failed]) -> dict[str, Any]:
    """Return the object that `phaseid series --json` prints."""
    return {
        "schema": SCHEMA,
        "axis": {
            "name": series.axis.name,
            "unit": series.axis.unit,
            "values": list(series.axis.values),
        },
        "common_scale": None
        if series.scale is None
        else {"factor": series.scale.factor, "sigma": series.scale.sigma},
        "persistence": {
            "mean": series.persistence,
            "tried": [
                {"value": value, "probability": probability}
                for value, probability in series.persistence_posterior
            ],
        },
        "patterns": [_pattern_dict(series, number) for number in range(len(series.patterns))],
        "phases": [_phase_dict(phase) for phase in series.phases],
        "failed": [{"source": source, "reason": reason} for source, reason in failed],
        "library": {
            "path": series.library.path,
            "phases": series.library.phases,
            "digest": series.library.digest,
        },
        "remarks": list(series.remarks),
        "cautions": list(series.cautions),
    }


def _pattern_dict(series: Series, number: int) -> dict[str, Any]:
    pattern = series.patterns[number]
    return {
        "title": pattern.rings.title,
        "source": pattern.rings.source,
        "probe": probe_dict(pattern.rings.probe),
        "metadata": dict(pattern.rings.metadata),
        "rings": len(pattern.rings),
        "verdict": pattern.verdict,
        "phases": list(pattern.phases),
        "probability": pattern.probability,
        "unlisted_probability": pattern.unlisted,
        "unexplained": None
        if pattern.best is None
        else [left.ring for left in pattern.best.unexplained],
        "alone": {
            "verdict": pattern.alone.verdict,
            "unlisted_probability": pattern.alone.unlisted_probability,
        },
    }


def _phase_dict(phase: SeriesPhase) -> dict[str, Any]:
    return {
        "phase": phase_dict(phase.phase),
        "indistinguishable": [phase_dict(other) for other in phase.indistinguishable],
        "probability": phase.probability.tolist(),
        "alone": phase.alone.tolist(),
        "share": [None if part is None else part.share for part in phase.answers],
        "share_sigma": [None if part is None else part.share_sigma for part in phase.answers],
        "refined_cell": [
            None
            if part is None or part.cell is None
            else dict(zip(CELL_KEYS, part.cell, strict=True))
            for part in phase.answers
        ],
    }


def series_csv(series: Series) -> str:
    """Return one line per pattern and phase, for a spreadsheet or a plotting program."""
    stream = io.StringIO()
    rows = series.records()
    if rows:
        writer = csv.DictWriter(stream, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        for row in rows:
            writer.writerow({key: _cell(value) for key, value in row.items()})
    return stream.getvalue()


def _cell(value: object) -> object:
    return spreadsheet_text(value) if isinstance(value, str) else value


def series_text(series: Series, width: int = 80) -> str:
    """Return what changes along the series, phase against pattern, and what each letter means."""
    page = wrap(_headline(series), width, indent="")
    shown = series.phases[: max(1, (width - _OTHER_COLUMNS) // _COLUMN_WIDTH)]
    page += ["", *table(_columns(series, shown), _rows(series, shown), width)]
    hidden = len(series.phases) - len(shown)
    if hidden:
        page += wrap(f"{hidden} more phases are in --csv and --json", width)
    for k, phase in enumerate(series.phases):
        page += ["", *_legend(series, k, phase, width)]
    if len(shown) > 1:
        page += _shares(series, shown, width)
    if series.scale is not None:
        factor, sigma = series.scale.factor, series.scale.sigma
        words = f"Scale in common, measured d / calculated d: {factor:.4f} ± {sigma:.4f}"
        page += ["", *wrap(words, width, first="")]
    for heading, sentences in (("Remarks", series.remarks), ("Caution", series.cautions)):
        if sentences:
            page += ["", heading]
            for sentence in sentences:
                page += wrap(sentence, width, first="  ", indent="    ")
    return "\n".join(page) + "\n"


def axis_text(series: Series, number: int) -> str:
    """Where a pattern stands along the series."""
    return f"{series.axis.values[number]:.6g}"


def _headline(series: Series) -> str:
    sure = sum(pattern.verdict == "identified" for pattern in series.patterns)
    names = ", ".join(_named(phase) for phase in series.phases) or "no phase of the library"
    return (
        f"{len(series.patterns)} patterns by {series.axis.name}: {names}. "
        f"{sure} of {len(series.patterns)} are identified (probability 0.9 or more)."
    )


def _named(phase: SeriesPhase) -> str:
    others = len(phase.indistinguishable)
    like = f" or {others} like it" if others else ""
    return f"{phase_text(phase.phase)}{like}"


def _columns(series: Series, shown: tuple[SeriesPhase, ...]) -> list[Column]:
    heading = series.axis.title.replace(" (", "\n(") if series.axis.name != "number" else "no."
    return [
        Column(heading),
        Column("pattern", "left", flexible=True),
        Column("rings\nleft"),
        *(Column(phase_letter(k)) for k in range(len(shown))),
        Column("not\nlisted"),
        Column("answer", "left"),
    ]


def _rows(series: Series, shown: tuple[SeriesPhase, ...]) -> list[list[str]]:
    return [
        [
            axis_text(series, t),
            shorten(_title(pattern), 24),
            _left(pattern),
            *(probability_text(float(phase.probability[t])) for phase in shown),
            probability_text(pattern.unlisted),
            _answer(pattern),
        ]
        for t, pattern in enumerate(series.patterns)
    ]


def _title(pattern: SeriesPattern) -> str:
    return safe(Path(pattern.rings.source).name or pattern.rings.title)


def _left(pattern: SeriesPattern) -> str:
    count = len(pattern.rings)
    return "" if pattern.best is None else f"{len(pattern.best.unexplained)}/{count}"


def _answer(pattern: SeriesPattern) -> str:
    if pattern.verdict == "no-match":
        return "?"
    letters = " + ".join(phase_letter(k) for k in pattern.phases)
    return letters if pattern.verdict == "identified" else f"{letters} ?".strip()


def _legend(series: Series, k: int, phase: SeriesPhase, width: int) -> list[str]:
    seen = [
        axis_text(series, t) for t in range(len(series.patterns)) if phase.probability[t] >= 0.5
    ]
    where = f"likely at {_spans(seen)}" if seen else "nowhere likely"
    what = (
        f"{phase_letter(k)} {phase_text(phase.phase)}, {safe(phase.phase.space_group_symbol)}, "
        f"{cell_text(phase.phase.cell)}; {phase.phase.phase_id}; {where}"
    )
    lines = wrap(what, width, first="", indent="   ")
    if phase.indistinguishable:
        names = ", ".join(phase_text(other) for other in phase.indistinguishable)
        lines += wrap(f"these rings cannot tell it from {names}", width, indent="   ")
    return lines


def _spans(words: list[str]) -> str:
    return ", ".join(words) if len(words) < 4 else f"{words[0]}, {words[1]} … {words[-1]}"


def _shares(series: Series, shown: tuple[SeriesPhase, ...], width: int) -> list[str]:
    """The weight shares by pattern, none where no pattern gives any."""
    columns = [
        Column(series.axis.title if series.axis.name != "number" else "no."),
        *(Column(phase_letter(k)) for k in range(len(shown))),
    ]
    rows = [
        [axis_text(series, t), *(_share(phase.answers[t]) for phase in shown)]
        for t in range(len(series.patterns))
    ]
    if not any(any(cells[1:]) for cells in rows):
        return []
    return ["", "Share by weight, %", *table(columns, rows, width)]


def _share(part: PhaseAnswer | None) -> str:
    if part is None or part.share is None:
        return ""
    return f"{100 * part.share:.0f} ± {100 * (part.share_sigma or 0.0):.0f}"
