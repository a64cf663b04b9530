"""Formulas read as chemists and mineralogists write them."""

from __future__ import annotations

import re
from dataclasses import replace

import gemmi
import pytest

from phaseid.crystal.cif import read_cif, read_cif_file
from phaseid.crystal.cif_writer import crystal_to_cif
from phaseid.crystal.elements import ELEMENTS, parse_formula
from phaseid.crystal.formula import chemical_formula, hill_formula
from phaseid.resources import data_path

# IUPAC, Nomenclature of Inorganic Chemistry (2005), table VI and section IR-4.4: from memory
BY_THE_TABLE = (
    "NaCl TiO2 MgO Al2O3 CaCO3 TiN SiC WC0.61 B4C H2O D2O NH3 NH4Cl CaSO4 NiAl TiAl CuAl2 Fe3C "
    "SmCo5 GaAs InP ZnS Mg2Si CaH4SO6 Ca5P3O12F XeF2 MgAl2O4 CaMgSi2O6 KAlSi3O8 La2CuO4"
)
# The names of textbooks and of the trade: common practice, no single source
BY_CUSTOM = (
    "PbTiO3 BiFeO3 FeTiO3 CuFeS2 ZnFe2O4 NiFe2O4 CoFe2O4 MnFe2O4 FeCr2O4 FeAl2O4 PbZrO3 Cu2ZnSnS4 "
    "CuInSe2 AgGaS2 Cu5FeS4 FeWO4 BiVO4 TiNb2O7 Al2TiO5 PbWO4 Fe3Al2Si3O12 LiFePO4 Cs2AgBiBr6 "
    "NaHCO3 KH2PO4 Pb3H2C2O8 MgNH16PO10 NaNO3 Al2H4Si2O9 "
    "LiNi0.8Co0.15Al0.05O2 CsPbBr3 NiMn2O4 BeAl2O4 ZrSiO4 FeAsS CdIn2S4"
)


@pytest.mark.parametrize("text", [*BY_THE_TABLE.split(), *BY_CUSTOM.split()])
def test_a_formula_reads_as_it_is_written(text: str) -> None:
    amounts = parse_formula(text)
    assert amounts is not None
    for order in (sorted(amounts), sorted(amounts, reverse=True)):
        assert chemical_formula({symbol: amounts[symbol] for symbol in order}) == text


def test_every_element_has_a_place_of_its_own() -> None:
    # beyond lawrencium no element is met in a diffraction pattern
    known = [symbol for symbol in [*ELEMENTS, "D"] if gemmi.Element(symbol).atomic_number <= 103]
    for anion in ("O", "N"):
        pairs = [chemical_formula({symbol: 1, anion: 2}) for symbol in known if symbol != anion]
        written = {pair.replace(f"{anion}2", "", 1) for pair in pairs}
        assert written == set(known) - {anion}
    oxides = [chemical_formula({symbol: 1, "O": 2}) for symbol in known if symbol not in "OF"]
    late = {"Cl", "Br", "I", "At"}  # table VI puts oxygen before these
    assert {o for o in oxides if not o.endswith("O2")} == {f"O2{symbol}" for symbol in late}


def test_hill_order() -> None:
    # Hill (1900), J. Am. Chem. Soc. 22, 478
    assert hill_formula({"O": 6, "H": 12, "C": 6}) == "C6H12O6"
    assert hill_formula({"O": 4, "S": 1, "H": 2}) == "H2O4S"
    assert hill_formula({"Na": 1, "Cl": 1}) == "ClNa"
    assert hill_formula({"Fe": 0.947, "O": 1}, " ") == "Fe0.947 O"


def test_a_written_cif_states_the_sum_formula_in_hill_order() -> None:
    # _chemical_formula_sum, CIF core dictionary: C, H, then the alphabet
    calcite = read_cif_file(data_path("starter", "carbonates", "CaCO3-calcite.cif")).crystals[0]
    text = crystal_to_cif(calcite)
    assert re.search(r"^_chemical_formula_sum 'C Ca O3'$", text, re.MULTILINE)
    again = read_cif(text.encode(), "calcite.cif").crystals[0]
    assert again.formula == "CaCO3"
    assert replace(again, source=calcite.source, findings=calcite.findings) == calcite
