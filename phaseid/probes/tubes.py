"""Characteristic X-ray lines of the usual anodes, in metre-based Å.

Source: International Tables for Crystallography C, Table 4.2.2.1 (Hölzer et al. 1997, Phys. Rev. A
56, 4554 for Cr, Fe, Co, Cu; Deslattes & Kessler 1985 and Deslattes et al. 2003, Rev. Mod. Phys. 75,
35 for Mo, Ag, W) and Table 4.2.2.6. From memory, not re-read: Ag Kβ1, W Kα2, W Kβ1, W Lα1.
Older tables (Bearden 1967) are in Å*, 15 to 24 ppm longer units, so their numbers are smaller.
"""

from __future__ import annotations

from typing import NamedTuple


class KLines(NamedTuple):
    """Kα1, Kα2 and Kβ1 wavelengths (Å) of one anode."""

    Ka1_A: float
    Ka2_A: float
    Kb1_A: float

    @property
    def Ka_A(self) -> float:
        """The unresolved doublet: Kα1 and Kα2 in their intensity ratio 2 : 1."""
        return (2.0 * self.Ka1_A + self.Ka2_A) / 3.0


ANODES: dict[str, KLines] = {
    "Cr": KLines(2.289726, 2.293651, 2.084881),
    "Fe": KLines(1.936041, 1.939973, 1.756604),
    "Co": KLines(1.788996, 1.792835, 1.620826),
    "Cu": KLines(1.5405929, 1.5444274, 1.392234),
    "Mo": KLines(0.70931715, 0.713607, 0.632303),
    "Ag": KLines(0.55942178, 0.5638131, 0.4970817),
    "W": KLines(0.20901314, 0.21383304, 0.18437768),
}

W_LA1_A = 1.47631  # tungsten of the filament, deposited on the anode of an ageing tube

# Spacings (Å) of usual monochromator crystals: graphite 002, Ge 111, Si 111, quartz 101;
# handbook cells a(Ge) = 5.658, a(Si) = 5.4310, quartz 4.913/5.405, graphite c = 6.708
MONOCHROMATORS: dict[str, float] = {
    "graphite": 3.354,
    "germanium": 3.2666,
    "silicon": 3.1356,
    "quartz": 3.3435,
}


def ghosts(anode: str, line: str) -> tuple[tuple[str, float], ...]:
    """Other lines (name, Å) of a tube without crystal monochromator: Kβ, W Lα, Kα2 beside Kα1."""
    k = ANODES[anode]
    found = [(f"{anode} Kβ", k.Kb1_A)] if line != "Kβ" else []
    if line == "Kα1":
        found.append((f"{anode} Kα2", k.Ka2_A))
    if anode != "W":
        found.append(("W Lα", W_LA1_A))
    return tuple(found)
