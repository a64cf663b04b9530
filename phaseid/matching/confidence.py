"""From judged sets of phases to probabilities that mean something.

Every listed set competes with what is not in the library: an unlisted phase whose rings fall like
the crowd's, and unlisted relatives: phases of a listed structure type with another cell. A relative
of a phase in a mixture speaks for the mixture without that phase, its rings left open.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import exp, log

import numpy as np

from phaseid.matching.likelihood import nothing_listed
from phaseid.matching.search import Judged, Loosened, Members, Search
from phaseid.matching.settings import (
    RELATIVE_INTENSITY,
    RELATIVE_PRIOR,
    ROUGH,
    ROUGH_PRIOR,
    UNLISTED_PRIOR,
)

_LOOSENED = 24
_DISTANT = 24
_WORTH_LOOSENING = 12.0
_RELATIVES_TOLD = 5


@dataclass(frozen=True, slots=True)
class Relative:
    """An unlisted relative of candidate `phase`: its lengths are longer by `strain` (relative)."""

    phase: int
    strain: float
    strain_sigma: float
    probability: float


@dataclass(frozen=True, slots=True, eq=False)
class Standing:
    """The result: judged sets with their probabilities, best first, and the rest.

    `unlisted` is the probability that no listed phase is in the specimen. `relatives` are the
    likeliest unlisted relatives that make up part of it.
    """

    sets: tuple[tuple[Judged, float], ...]
    unlisted: float
    relatives: tuple[Relative, ...]


def weigh(search: Search) -> Standing:
    """Turn the search's judged sets into probabilities."""
    ranked = search.ranked()
    best = ranked[0].log_posterior if ranked else -np.inf
    weights: dict[Members, float] = {j.members: j.log_posterior for j in search.accepted()}
    near = [j for j in ranked[:_LOOSENED] if j.log_posterior > best - _WORTH_LOOSENING]
    for members, value in search.rough(near):
        if members in weights:
            rough = value + search.prior_of(members) + log(ROUGH_PRIOR / len(ROUGH))
            weights[members] = float(np.logaddexp(weights[members], rough))
    singles = {j.members for j in near if len(j.members) == 1}
    distant = [j for j in search.distant_relatives(_DISTANT) if j.members not in singles]

    outside = [log(UNLISTED_PRIOR) + nothing_listed(search.model)]
    relatives: list[tuple[float, Loosened]] = []
    flavour = log(RELATIVE_PRIOR / len(RELATIVE_INTENSITY))
    for loose in search.relatives([*near, *distant]):
        value = loose.log_likelihood + search.prior_of(loose.members) + flavour
        rest = loose.members[: loose.which] + loose.members[loose.which + 1 :]
        if rest in weights:
            weights[rest] = float(np.logaddexp(weights[rest], value))
        elif not rest:
            outside.append(value)
            relatives.append((value, loose))
    total = float(np.logaddexp.reduce([*weights.values(), *outside]))
    shown = [(search.judged[members], exp(value - total)) for members, value in weights.items()]
    shown.sort(key=lambda pair: (-pair[1], pair[0].members))
    relatives.sort(key=lambda pair: (-pair[0], pair[1].members))
    return Standing(
        sets=tuple(shown),
        unlisted=exp(float(np.logaddexp.reduce(outside)) - total),
        relatives=tuple(
            Relative(loose.members[0], loose.strain, loose.strain_sigma, exp(value - total))
            for value, loose in relatives[:_RELATIVES_TOLD]
        ),
    )
