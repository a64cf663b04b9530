"""How much trust an entry deserves, from what is known of it.

A prior for the reader and the search, not a measurement: 1 for a measured structure at ambient
conditions, multiplied by a factor for every doubt or mark among its findings.
Common practice, no source: the factors are ours.
"""

from __future__ import annotations

from math import prod

from phaseid.crystal.crystal import Crystal

# 1 ..  a measured structure at ambient conditions
FACTORS = {
    "hypothetical": 0.2,  # nobody is known to have made it
    "theoretical": 0.4,  # computed, not measured: cells off by 1-3 %
    "high_pressure": 0.3,  # not met at ambient pressure as a rule
    "high_temperature": 0.5,  # sometimes quenched
    "low_temperature": 0.6,
    "metastable": 0.8,
    "formula_mismatch": 0.6,  # the sites do not hold what the source's formula says
    "density_mismatch": 0.6,
    "unknown_element": 0.6,
    "volume_mismatch": 0.7,
    "overlapping_atoms": 0.7,
    "bad_occupancy": 0.7,
    "hm_ops_conflict": 0.8,  # symbol and operations contradict each other
    "setting_assumed": 0.8,
    "z_mismatch": 0.9,
    "hydrogen_missing": 0.9,
}
LOWEST = 0.05


def quality(crystal: Crystal) -> float:
    """Return the trust in an entry, 0.05 to 1."""
    codes = {finding.code for finding in crystal.findings}
    # a fixed order, so that the product is the same to the last bit
    return max(prod(FACTORS[code] for code in sorted(codes & FACTORS.keys())), LOWEST)
