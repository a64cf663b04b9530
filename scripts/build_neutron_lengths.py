#!/usr/bin/env python3
"""Write the table of neutron lengths from gemmi (elements) and periodictable (isotopes)."""

from __future__ import annotations

from pathlib import Path

import gemmi
import periodictable

TARGET = Path(__file__).resolve().parent.parent / "phaseid/crystal/tables/neutron_lengths.csv"
PLUTONIUM = ("Pu", 7.7, "periodictable 239Pu")
HEAD = f"""\
# Bound coherent scattering lengths, real part, fm.
# Elements of natural composition, and D: V. F. Sears 1992, Neutron News 3(3), 26-37, as carried by
# gemmi {gemmi.__version__}; Pu, which has no natural composition, is given as 239Pu.
# Isotopes: evaluations carried by periodictable {periodictable.__version__} (public domain).
# An element absent here has no measured length. Written by scripts/build_neutron_lengths.py.
"""


def rows() -> list[tuple[str, float, str]]:
    found: list[tuple[str, float, str]] = []
    for number in range(1, 104):
        element = gemmi.Element(number)
        length = element.neutron92.get_coefs()[0]
        if length:
            found.append((element.name, round(length, 5), "Sears 1992"))
    found.append(("D", gemmi.Element("D").neutron92.get_coefs()[0], "Sears 1992"))
    found.append(PLUTONIUM)
    for element in periodictable.elements:
        if element.number < 1:
            continue
        for mass in element.isotopes:
            length = element[mass].neutron.b_c
            if length is not None and (element.number, mass) not in {(1, 2)}:
                found.append((f"{mass}{element.symbol}", length, "periodictable"))
    return found


if __name__ == "__main__":
    lines = [f"{name},{length:g},{source}\n" for name, length, source in rows()]
    TARGET.write_text(HEAD + "nuclide,b_fm,source\n" + "".join(lines), encoding="utf-8")
