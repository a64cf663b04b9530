"""How much trust an entry deserves, from what is known of it.

A prior for the reader and the search, not a measurement: 1 for a measured structure at ambient
conditions, multiplied by a factor for every doubt or mark among its findings.
Common practice, no source: the factors are ours.
"""

from __future__ import annotations

from phaseid.crystal.crystal import Crystal

# 1 ..  a measured structure at ambient conditions
FACTORS = {
    "hypothetical": 0.2,  # nobody has made it
    "theoretical": 0.4,  # computed, not measured: cells off by 1-3 %
    "high_pressure": 0.3,  # not met at ambient pressure as a rule
    "high_temperature": 0.5,  # sometimes quenched
    "metastable": 0.8,
    "formula_mismatch": 0.6,  # the sites do not hold what the formula says
    "density_mismatch": 0.6,
    "occupancy_above_one": 0.7,
    "sites_too_close": 0.7,
    "unknown_element": 0.6,
    "disorder": 0.9,
}
AMBIENT_GPA = 0.1
WARM_K = 700.0
LOWEST = 0.05


def quality(crystal: Crystal) -> float:
    """Return the trust in an entry, 0.05 to 1."""
    codes = {finding.code for finding in crystal.findings}
    if crystal.pressure_GPa is not None and crystal.pressure_GPa > AMBIENT_GPA:
        codes.add("high_pressure")
    if crystal.temperature_K is not None and crystal.temperature_K > WARM_K:
        codes.add("high_temperature")
    trust = 1.0
    for code in sorted(codes & FACTORS.keys()):  # a fixed order: the same product to the last bit
        trust *= FACTORS[code]
    return max(trust, LOWEST)
