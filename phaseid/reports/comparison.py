"""A comparison of two phases as text and as JSON."""

from __future__ import annotations

from typing import Any

from phaseid.matching.compare import SEPARABLE, Comparison, TellingRing
from phaseid.reports.json import phase_dict, probe_dict
from phaseid.reports.plain import Column, hkl_text, phase_text, table, wrap

SCHEMA = "phaseid.comparison/1"
SHOWN = 8
_COLUMNS = (
    Column("d\nÅ"),
    Column("of"),
    Column("hkl"),
    Column("I"),
    Column("other's\nline off by"),
    Column("needs\nsigma of d"),
    Column("shows in", "left"),
)
_BY = {"ratio": "ring ratios", "scale": "the absolute scale"}


def comparison_dict(result: Comparison) -> dict[str, Any]:
    """Return the object that `phaseid compare --json` prints."""
    return {
        "schema": SCHEMA,
        "A": phase_dict(result.phases[0]),
        "B": phase_dict(result.phases[1]),
        "probe": probe_dict(result.probe),
        "separable": result.separable,
        "confidence": result.confidence,
        "reading_sigma": result.reading_sigma,
        "d_range_A": list(result.d_range_A),
        "only_in_A": list(result.elements[0]),
        "only_in_B": list(result.elements[1]),
        "telling": [
            {
                "d_A": ring.d_A,
                "of": ring.of,
                "hkl": list(ring.hkl),
                "intensity": ring.intensity,
                "difference": ring.difference,
                "by": ring.by,
                "needs_relative_precision": ring.needs_relative_precision,
            }
            for ring in result.telling
        ],
    }


def comparison_text(result: Comparison, width: int = 80) -> str:
    """Return the answer, the rings it rests on, and what else would decide."""
    a, b = (phase_text(phase) for phase in result.phases)
    verdict = "can" if result.separable else "cannot"
    page = wrap(
        f"{a[0].upper()}{a[1:]} (A) and {b} (B) {verdict} be told apart by these rings: the right "
        f"one of the two would be favoured in {100 * min(result.confidence, 0.999):.3g} % of "
        f"measurements ({100 * SEPARABLE:.0f} % asked for).",
        width,
        indent="",
    )
    low, high = result.d_range_A
    page += wrap(
        f"{result.probe.label}, d from {low:.2f} to {high:.2f} Å, rings read to "
        f"{100 * result.reading_sigma:.2g} %, scale known to "
        f"{100 * result.probe.scale_sigma:.2g} % (one sigma)",
        width,
        indent="",
    )
    if result.telling:
        page += ["", "Telling rings", *table(_COLUMNS, _rows(result), width)]
        more = len(result.telling) - SHOWN
        if more > 0:
            page += wrap(f"and {more} more; --json lists them", width)
    else:
        page += ["", "Both show the same rings at the same places."]
    if not result.separable:
        page += ["", *wrap(_what_would_do(result), width, indent="")]
    return "\n".join(page) + "\n"


def _rows(result: Comparison) -> list[list[str]]:
    return [
        [
            f"{ring.d_A:.4f}",
            ring.of,
            hkl_text(ring.hkl),
            f"{ring.intensity:.0f}",
            "none near" if ring.difference is None else f"{100 * ring.difference:.2f} %",
            f"{100 * ring.needs_relative_precision:.2g} %",
            _BY[ring.by],
        ]
        for ring in result.telling[:SHOWN]
    ]


def _what_would_do(result: Comparison) -> str:
    hints = [
        f"{', '.join(own)} in an element analysis points to {name}"
        for own, name in zip(result.elements, ("A", "B"), strict=True)
        if own
    ]
    scale = [ring for ring in result.telling if ring.by == "scale"]
    if scale:
        need = max(_strong(scale), key=lambda ring: ring.needs_relative_precision)
        hints.insert(
            0,
            f"a scale good to {100 * need.needs_relative_precision:.2g} % would do: calibrate with "
            "an internal standard (phaseid calibrate)",
        )
    if not hints:
        hints.append("same elements and the same rings: use another method, or another probe")
    return "What would decide: " + "; ".join(hints) + "."


def _strong(rings: list[TellingRing]) -> list[TellingRing]:
    return [ring for ring in rings if ring.intensity >= 20] or rings
