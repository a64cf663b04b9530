"""Judging phases by the likelihood before the search: alone, and beside a phase that leaves rings.

A shortlist asks what the likeliest phases leave unexplained; for that it needs the likelihood of a
few phases and pairs, none of the search's second thoughts.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from phaseid.matching.candidates import best_shift, make_ruler, scan
from phaseid.matching.patterns import Floats
from phaseid.matching.search import Judged, Search
from phaseid.matching.settings import STRAIN


def judged_alone(search: Search) -> list[Judged]:
    """Judge every phase of a search by itself; the best first."""
    offsets = _offsets(search, None)
    search.judge(((c,), offsets[c : c + 1]) for c in range(len(offsets)))
    return search.ranked()


def judged_beside(
    search: Search, bases: Sequence[Judged], further: Sequence[Sequence[int]]
) -> list[Judged]:
    """Judge each of `bases`, sets of one phase, with each of its `further` phases; best first."""
    pairs = []
    for base, others in zip(bases, further, strict=True):
        offsets = _offsets(search, base)
        pairs += [
            ((*base.members, c), np.vstack([base.offset, offsets[c : c + 1]]))
            for c in others
            if c not in base.members
        ]
    search.judge(pairs)
    return search.ranked()


def _offsets(search: Search, base: Judged | None) -> Floats:
    """Shifts (c, K) at which phases explain the rings best, or those that a set leaves."""
    shifts = []
    for i, (pattern, lines) in enumerate(
        zip(search.model.patterns, search.model.lines, strict=True)
    ):
        if base is None:
            centre, spread, wanted = 0.0, search.spread(i, STRAIN), None
            reach, strongest = max(3.5 * spread, 0.004), 0.0
        else:
            wanted = ~base.claimed[i]
            known = wanted & np.isfinite(pattern.intensity_sd)
            strongest = float(pattern.ln_intensity[known].max()) if known.any() else 0.0
            centre = float(base.scale[i])
            spread = float(np.hypot(base.scale_sd[i], 1.5 * STRAIN))
            reach = 3.0 * spread
        ruler = make_ruler(pattern, centre=centre, reach=reach, wanted=wanted)
        score = scan(lines, pattern, ruler, strongest)
        shifts.append(best_shift(score, ruler.u, spread, centre)[1])
    return np.stack(shifts, axis=1)
