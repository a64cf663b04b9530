"""Formulas in the chemist's order, TiN, MgAl2O4, CuFeS2, and in Hill's.

The chemist's order is the element sequence of IUPAC, Nomenclature of Inorganic Chemistry (2005),
table VI, run from its electropositive end. In oxides, chalcogenides and halides the custom of the
trade refines it: the metals beyond the alkalis, alkaline earths and rare earths come by rising
charge, of equal charge the heavier first (PbTiO3, BiFeO3, ZnFe2O4, Cu2ZnSnS4, where the table alone
would say TiPbO3). The hydrogen of oxides and their salts stands behind the metals, ammonium with
it (NaHCO3, KH2PO4), before carbon or phosphorus.
"""

from __future__ import annotations

from collections.abc import Mapping, Set

# Table VI, group by group from the most electropositive end; from memory.
_SEQUENCE = (
    "Rn Xe Kr Ar Ne He Fr Cs Rb K Na Li Ra Ba Sr Ca Mg Be "
    "Ac Th Pa U Np Pu Am Cm Bk Cf Es Fm Md No Lr La Ce Pr Nd Pm Sm Eu Gd Tb Dy Ho Er Tm Yb Lu Y Sc "
    "Hf Zr Ti Ta Nb V W Mo Cr Re Tc Mn Os Ru Fe Ir Rh Co Pt Pd Ni Au Ag Cu Hg Cd Zn Tl In Ga Al B "
    "Pb Sn Ge Si C Bi Sb As P N D H Po Te Se S O At I Br Cl F"
)
_PLACE = {symbol: float(place) for place, symbol in enumerate(_SEQUENCE.split())}

# The charge each metal has most often beside O, S or a halogen, heavier first; common practice.
_USUAL_CHARGES = (
    "Tl Ag Cu",
    "Pb Hg Pd Cd Zn Ni Co Mn",
    "Bi Au In Rh Ga Fe Cr Al",
    "Pu Np U Th Pt Ir Os Hf Sn Ru Zr Ti",
    "Pa Ta Nb V",
    "W Mo",
    "Re Tc",
)
_SALT_PLACE = _PLACE | {
    symbol: _PLACE["Sc"] + (place + 1) / 1000
    for place, symbol in enumerate(" ".join(_USUAL_CHARGES).split())
}
_HYDROUS_PLACE = _SALT_PLACE | {
    symbol: _PLACE["B"] + (place - 4) / 10 for place, symbol in enumerate(["N", "D", "H"])
}
_METALS = frozenset(
    symbol for symbol, place in _SALT_PLACE.items() if _PLACE["He"] < place < _PLACE["B"]
)
_SALT_FORMERS = frozenset({"O", "S", "Se", "Te", "F", "Cl", "Br", "I"})


def chemical_formula(amounts: Mapping[str, float]) -> str:
    """Write amounts as chemists do; to three decimals, 1 is left out.

    >>> chemical_formula({"O": 3, "Ti": 1, "Pb": 1}), chemical_formula({"Al": 1, "Ti": 1})
    ('PbTiO3', 'TiAl')
    """
    place = _places(amounts.keys())
    order = sorted(amounts, key=lambda symbol: (place.get(symbol, -1.0), symbol))
    return "".join(symbol + _amount(amounts[symbol]) for symbol in order)


def _places(symbols: Set[str]) -> Mapping[str, float]:
    if _SALT_FORMERS.isdisjoint(symbols):
        return _PLACE
    hydrous = "O" in symbols and bool(symbols & {"H", "D"}) and bool(symbols & _METALS)
    return _HYDROUS_PLACE if hydrous else _SALT_PLACE


def hill_formula(amounts: Mapping[str, float], separator: str = "") -> str:
    """Write amounts in Hill order: C, then H, then the alphabet; without C the alphabet alone.

    Hill (1900), J. Am. Chem. Soc. 22, 478. Amounts are written as in `chemical_formula`.
    """
    carbon = "C" in amounts
    order = sorted(amounts, key=lambda el: (carbon and el not in ("C", "H"), el))
    return separator.join(el + _amount(amounts[el]) for el in order)


def _amount(value: float) -> str:
    text = f"{value:.3f}".rstrip("0").rstrip(".")
    return "" if text == "1" else text
