"""Formulas as chemists write them: TiN, NaCl, MgAl2O4, whatever order the record keeps."""

from __future__ import annotations

import re

# From the most to the least electronegative: the element sequence of IUPAC, Nomenclature of
# Inorganic Chemistry (2005), table VI, group by group; from memory. Formulas run the other way.
_SEQUENCE = (
    "F Cl Br I At O S Se Te Po H D N P As Sb Bi C Si Ge Sn Pb B Al Ga In Tl Zn Cd Hg Cu Ag Au "
    "Ni Pd Pt Co Rh Ir Fe Ru Os Mn Tc Re Cr Mo W V Nb Ta Ti Zr Hf Sc Y "
    "Lu Yb Tm Er Ho Dy Tb Gd Eu Sm Pm Nd Pr Ce La Lr No Md Fm Es Cf Bk Cm Am Pu Np U Pa Th Ac "
    "Be Mg Ca Sr Ba Ra Li Na K Rb Cs Fr He Ne Ar Kr Xe Rn"
)
_PLACE = {symbol: place for place, symbol in enumerate(_SEQUENCE.split())}
_PART = re.compile(r"([A-Z][a-z]?)([\d.]*)")


def formula_text(formula: str) -> str:
    """Write a plain formula with the most electropositive element first.

    What is not a plain sequence of elements and numbers is returned as it came.

    >>> formula_text("NTi"), formula_text("Al2MgO4"), formula_text("CCaO3")
    ('TiN', 'MgAl2O4', 'CaCO3')
    """
    parts = _PART.findall(formula)
    if "".join(map("".join, parts)) != formula or any(s not in _PLACE for s, _ in parts):
        return formula
    parts.sort(key=lambda part: -_PLACE[part[0]])
    return "".join(map("".join, parts))
