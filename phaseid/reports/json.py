"""An identification, and the phases and probes in it, as plain dictionaries for JSON.

The layouts are published in `phaseid/schemas/`; keys may be added, never changed or taken away.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from phaseid.library.phase import Phase
    from phaseid.matching.identification import Hypothesis, Identification, PhaseAnswer
    from phaseid.probes.probe import Probe
    from phaseid.rings.ringlist import RingList

SCHEMA = "phaseid.identification/1"
CELL_KEYS = ("a_A", "b_A", "c_A", "alpha_deg", "beta_deg", "gamma_deg")
LARGEST_LOG_ODDS = 700.0  # JSON has no infinity; exp(700) is near the largest float


def dumps(value: Mapping[str, Any]) -> str:
    """Write one JSON object: ASCII, two blanks of indent, NaN and infinity as null."""
    return json.dumps(_clean(value), indent=2, allow_nan=False)


def phase_dict(phase: Phase) -> dict[str, Any]:
    """Return a phase as every command shows it."""
    return {
        "phase_id": phase.phase_id,
        "name": phase.name,
        "formula": phase.formula,
        "elements": list(phase.elements),
        "space_group": {"number": phase.space_group_number, "symbol": phase.space_group_symbol},
        "cell": _cell_dict(phase.cell),
        "volume_A3": phase.volume_A3,
        "density_g_cm3": phase.density_g_cm3,
        "source": {
            "database": phase.source.database,
            "id": phase.source.id,
            "file": phase.source.file,
            "reference": phase.source.reference,
        },
        "quality": phase.quality,
        "findings": [{"code": f.code, "message": f.message} for f in phase.findings],
        "cautions": list(phase.cautions),
    }


def probe_dict(probe: Probe) -> dict[str, Any]:
    """Return a probe as every command shows it."""
    return {
        "kind": probe.kind,
        "wavelength_A": probe.wavelength_A,
        "scale_sigma": probe.scale_sigma,
        "label": probe.label,
        "geometry": probe.geometry,
        "remarks": list(probe.remarks),
    }


def identification_dict(answer: Identification) -> dict[str, Any]:
    """Return the identification as the object that `phaseid identify --json` prints.

    Raises RuntimeError where the identification contradicts itself: probabilities that sum to more
    than 1, a ring neither assigned nor unexplained, an index that points nowhere.
    """
    _verify(answer)
    return {
        "schema": SCHEMA,
        "verdict": answer.verdict,
        "patterns": [_pattern_dict(pattern) for pattern in answer.patterns],
        "hypotheses": [_hypothesis_dict(hypothesis) for hypothesis in answer.hypotheses],
        "unlisted_probability": answer.unlisted_probability,
        "type_matches": [
            {
                "type_name": match.type_name,
                "like": phase_dict(match.like),
                "a_A": match.a_A,
                "a_sigma_A": match.a_sigma_A,
                "probability": match.probability,
            }
            for match in answer.type_matches
        ],
        "library": {
            "path": answer.library.path,
            "phases": answer.library.phases,
            "digest": answer.library.digest,
        },
        "remarks": list(answer.remarks),
        "cautions": list(answer.cautions),
    }


def _pattern_dict(pattern: RingList) -> dict[str, Any]:
    return {
        "title": pattern.title,
        "source": pattern.source,
        "probe": probe_dict(pattern.probe),
        "metadata": dict(pattern.metadata),
        "position_column": pattern.position_column,
        "sigma_stated": pattern.sigma_stated,
        "rings": [
            {
                "index": index,
                "d_A": float(pattern.d_A[index]),
                "sigma_A": float(pattern.sigma_A[index]),
                "intensity": float(pattern.intensity[index]),
                "grade": pattern.grades[index] or None,
                "position": float(pattern.position[index]),
                "position_sigma": float(pattern.position_sigma[index]),
                "note": pattern.notes[index],
            }
            for index in range(len(pattern))
        ],
        "remarks": list(pattern.remarks),
    }


def _hypothesis_dict(hypothesis: Hypothesis) -> dict[str, Any]:
    return {
        "rank": hypothesis.rank,
        "probability": hypothesis.probability,
        "log_odds": max(-LARGEST_LOG_ODDS, min(LARGEST_LOG_ODDS, hypothesis.log_odds)),
        "phases": [_answer_dict(part) for part in hypothesis.phases],
        "scale": [
            {"pattern": s.pattern, "factor": s.factor, "sigma": s.sigma} for s in hypothesis.scale
        ],
        "assignments": [
            {
                "pattern": a.pattern,
                "ring": a.ring,
                "phase": a.phase,
                "hkl": list(a.hkl),
                "d_calc_A": a.d_calc_A,
                "residual_sigma": a.residual_sigma,
                "relative_intensity": a.relative_intensity,
            }
            for a in hypothesis.assignments
        ],
        "unexplained": [
            {"pattern": u.pattern, "ring": u.ring, "hint": u.hint} for u in hypothesis.unexplained
        ],
        "missing": [
            {
                "pattern": m.pattern,
                "phase": m.phase,
                "hkl": list(m.hkl),
                "d_calc_A": m.d_calc_A,
                "relative_intensity": m.relative_intensity,
            }
            for m in hypothesis.missing
        ],
    }


def _answer_dict(part: PhaseAnswer) -> dict[str, Any]:
    return {
        **phase_dict(part.phase),
        "share": part.share,
        "share_sigma": part.share_sigma,
        "indistinguishable": [
            phase_dict(phase)
            for phase in (*part.entries, *part.indistinguishable, *part.alike_entries)
        ],
        "entries": [_entry_dict(entry) for entry in part.entries],
        "refined_cell": None if part.cell is None else _cell_dict(part.cell),
        "refined_cell_sigma": None if part.cell_sigma is None else _cell_dict(part.cell_sigma),
        "fibre_axis": None if part.fibre_axis is None else list(part.fibre_axis),
        "separators": [{"phase_id": s.other.phase_id, "text": s.text} for s in part.separators],
    }


def _entry_dict(entry: Phase) -> dict[str, Any]:
    """Return another entry of a phase: what tells it from the one that stands for all."""
    from phaseid.library.marks import marks

    whole = phase_dict(entry)
    told = {key: whole[key] for key in ("phase_id", "name", "source", "cell")}
    return {**told, "marks": list(marks(finding.code for finding in entry.findings))}


def _cell_dict(cell: Sequence[float]) -> dict[str, float]:
    return dict(zip(CELL_KEYS, cell, strict=True))


def _verify(answer: Identification) -> None:
    total = sum(h.probability for h in answer.hypotheses) + answer.unlisted_probability
    _demand(total <= 1 + 1e-9, f"the probabilities sum to {total}")
    wanted = {
        (number, ring)
        for number, pattern in enumerate(answer.patterns)
        for ring in range(len(pattern))
    }
    for h in answer.hypotheses:
        _demand(0 <= h.probability <= 1, f"hypothesis {h.rank} has probability {h.probability}")
        assigned = {(a.pattern, a.ring) for a in h.assignments}
        unexplained = {(u.pattern, u.ring) for u in h.unexplained}
        _demand(assigned | unexplained == wanted, f"hypothesis {h.rank} loses or invents a ring")
        _demand(not assigned & unexplained, f"hypothesis {h.rank} explains a ring and denies it")
        phases = {a.phase for a in h.assignments} | {m.phase for m in h.missing}
        _demand(phases <= set(range(len(h.phases))), f"hypothesis {h.rank} names no such phase")


def _demand(condition: bool, otherwise: str) -> None:
    if not condition:
        raise RuntimeError(f"the identification contradicts itself: {otherwise}")


def _clean(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _clean(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_clean(item) for item in value]
    if hasattr(value, "tolist"):  # a numpy number or array
        return _clean(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
