"""A screening as text and as JSON."""

from __future__ import annotations

from typing import Any

from phaseid.matching.limits import Limit
from phaseid.matching.screen import Candidate, Screening
from phaseid.reports.json import phase_dict, probe_dict
from phaseid.reports.plain import (
    Column,
    hkl_text,
    phase_text,
    probability_text,
    safe,
    signed_text,
    table,
    wrap,
)

SCHEMA = "phaseid.screening/1"
SHOWN_CANDIDATES, SHOWN_LIMITS = 3, 12
_RINGS = (
    Column("ring"),
    Column("d\nÅ"),
    Column("I"),
    Column("prob."),
    Column("phase", "left", flexible=True),
    Column("how it gets there", "left", flexible=True),
)
_LIMITS = (
    Column("95 %"),
    Column("50 %"),
    Column("phase", "left", flexible=True),
    Column("seen by"),
)


def screening_dict(result: Screening) -> dict[str, Any]:
    """Return the object that `phaseid screen --json` prints."""
    return {
        "schema": SCHEMA,
        "verdict": result.verdict,
        "probe": probe_dict(result.patterns[0].probe),
        "scale": _scale(result, 0),
        "patterns": [
            {
                "title": rings.title,
                "source": rings.source,
                "probe": probe_dict(rings.probe),
                "rings": len(rings),
                "scale": _scale(result, number),
                "weakest_percent": result.weakest_percent[number],
            }
            for number, rings in enumerate(result.patterns)
        ],
        "expected": [
            {
                "phase": phase_dict(part.phase),
                "seen": part.seen,
                "rings": [
                    {
                        "pattern": ring.pattern,
                        "ring": ring.ring,
                        "hkl": list(ring.hkl),
                        "d_calc_A": ring.d_calc_A,
                        "residual_sigma": ring.residual_sigma,
                    }
                    for ring in part.rings
                ],
            }
            for part in result.expected
        ],
        "foreign": [
            {
                "pattern": ring.pattern,
                "ring": ring.ring,
                "d_A": ring.d_A,
                "candidates": [_candidate(candidate) for candidate in ring.candidates],
            }
            for ring in result.foreign
        ],
        "found": [_candidate(candidate) for candidate in result.found],
        "limits": [
            {
                "phase": phase_dict(limit.phase),
                "share": limit.share,
                "share_even": limit.share_even,
                "pattern": None if limit.hidden else limit.pattern,
                "hkl": None if limit.hidden else list(limit.hkl),
                "d_A": None if limit.hidden else limit.d_A,
                "hidden": limit.hidden,
            }
            for limit in result.limits
        ],
        "weakest_percent": result.weakest_percent[0],
        "remarks": list(result.remarks),
    }


def screening_text(result: Screening, width: int = 80) -> str:
    """Return the verdict, what is there, what is foreign, and what could hide."""
    page = wrap(_headline(result), width, indent="")
    if len(result.patterns) > 1:
        for number, rings in enumerate(result.patterns, start=1):
            name = safe(rings.title or rings.source)
            page += wrap(f"pattern {number}: {name}, {safe(rings.probe.label)}", width)
    page += ["", "Expected"]
    for part in result.expected:
        named = ", ".join(_ring_text(result, ring.pattern, ring.ring) for ring in part.rings)
        worst = max((abs(ring.residual_sigma) for ring in part.rings), default=0.0)
        state = (
            f"seen in rings {named} (off by {signed_text(worst).lstrip('+')} sigma at most)"
            if part.seen
            else "not seen: no ring needs it"
        )
        page += wrap(f"{phase_text(part.phase)}: {state}", width, first="  ", indent="    ")
    if result.foreign:
        page += ["", "Foreign rings", *table(_RINGS, _foreign_rows(result), width)]
        page += wrap("phaseid identify searches for what these rings are on their own", width)
    page += _limits(result, width)
    if result.remarks:
        page += ["", "Remarks"]
        for remark in result.remarks:
            page += wrap(remark, width, first="  ", indent="    ")
    return "\n".join(page) + "\n"


def _scale(result: Screening, number: int) -> dict[str, float]:
    factor, sigma = result.scales[number]
    return {"factor": factor, "sigma": sigma}


def _ring_text(result: Screening, pattern: int, ring: int) -> str:
    """A ring counted from 1; in several patterns, pattern and ring: "2.5"."""
    return str(ring + 1) if len(result.patterns) == 1 else f"{pattern + 1}.{ring + 1}"


def _candidate(candidate: Candidate) -> dict[str, Any]:
    return {
        "phase": phase_dict(candidate.phase),
        "probability": candidate.probability,
        "lists": list(candidate.lists),
        "why": list(candidate.why),
    }


def _headline(result: Screening) -> str:
    count = sum(len(rings) for rings in result.patterns)
    if result.verdict == "clean":
        seen = [limit.share for limit in result.limits if not limit.hidden]
        worth = (
            f" Of the watch list, {len(seen)} phases would have been seen from the shares below."
            if seen
            else ""
        )
        return f"Clean: what is expected explains all {count} rings.{worth}"
    found = ", ".join(phase_text(candidate.phase) for candidate in result.found)
    names = f" Likely {found}." if found else " No phase of the watch list stands out."
    verb = "ring is" if len(result.foreign) == 1 else "rings are"
    return f"{len(result.foreign)} of {count} {verb} foreign to what is expected.{names}"


def _foreign_rows(result: Screening) -> list[list[str]]:
    rows = []
    for ring in result.foreign:
        rings = result.patterns[ring.pattern]
        level = rings.intensity[ring.ring]
        intensity = rings.grades[ring.ring] or (f"{level:.0f}" if level == level else "")
        where = _ring_text(result, ring.pattern, ring.ring)
        head = [where, f"{ring.d_A:.4f}", intensity]
        if not ring.candidates:
            rows.append([*head, "", "nothing in the library", ""])
        for candidate in ring.candidates[:SHOWN_CANDIDATES]:
            rows.append(
                [
                    *head,
                    probability_text(candidate.probability),
                    phase_text(candidate.phase),
                    safe(candidate.why[0] if candidate.why else ""),
                ]
            )
            head = ["", "", ""]
    return rows


def _limits(result: Screening, width: int) -> list[str]:
    """The limits of what was not found: the lowest of them, and what hides."""
    seen = [limit for limit in result.limits if not limit.hidden]
    hidden = [limit for limit in result.limits if limit.hidden]
    page: list[str] = []
    if seen:
        heading = "Not found; the share by weight above which it is, in 95 % and in 50 % of cases"
        page += ["", *wrap(heading, width, first="", indent="")]
        shown = seen if len(seen) <= SHOWN_LIMITS else seen[: SHOWN_LIMITS // 2]
        last = [] if len(seen) <= SHOWN_LIMITS else seen[-(SHOWN_LIMITS // 2) :]
        many = len(result.patterns) > 1
        rows = [_limit_row(limit, many) for limit in shown]
        if last:
            rows.append(["…", "…", f"{len(seen) - SHOWN_LIMITS} more (--json)", ""])
            rows += [_limit_row(limit, many) for limit in last]
        page += table(_LIMITS, rows, width)
    if hidden:
        names = ", ".join(phase_text(limit.phase) for limit in hidden)
        page += ["", *wrap(f"Would hide behind the rings that are there: {names}", width, first="")]
    return page


def _limit_row(limit: Limit, many: bool) -> list[str]:
    where = f", pattern {limit.pattern + 1}" if many else ""
    return [
        _share_text(limit.share),
        _share_text(limit.share_even),
        phase_text(limit.phase),
        f"{hkl_text(limit.hkl)} at {limit.d_A:.3f} Å{where}",
    ]


def _share_text(share: float) -> str:
    return f"{100 * share:.2g} %" if share < 0.995 else "100 %"
