"""Safety sentences: there where work can hurt, and only there."""

from __future__ import annotations

import tomllib

import pytest

from phaseid.library.cautions import cautions_for
from phaseid.library.formulas import formula_keys
from phaseid.resources import data_path

# What the sentence must name. The six regulated asbestos minerals and erionite, silica, beryllium,
# arsenic and radioactive elements: IARC Monographs 100C (2012) and 100D (2012), from memory.
EXPECTED = [
    ("Chrysotile", "H4Mg3O9Si2", "H Mg O Si", 12, "asbestos"),
    ("lizardite", "Mg3Si2O5(OH)4", "H Mg O Si", 157, "asbestos"),
    ("Riebeckite (crocidolite)", "Na2Fe5Si8O24H2", "Fe H Na O Si", 12, "asbestos"),
    ("Grunerite", "Fe7Si8O24H2", "Fe H O Si", 12, "asbestos"),
    ("", "Ca2Mg5Si8O22(OH)2", "Ca H Mg O Si", 12, "asbestos"),
    ("Anthophyllite", "Mg7Si8O24H2", "H Mg O Si", 62, "asbestos"),
    ("Erionite-K", "K2NaCa1.5Mg0.5Al8Si28O72", "Al Ca K Mg Na O Si", 194, "mesothelioma"),
    ("Quartz low", "O2Si", "O Si", 154, "silicosis"),
    ("", "SiO2", "O Si", 152, "silicosis"),
    ("Cristobalite", "O2Si", "O Si", 92, "silicosis"),
    ("Beryl", "Al2Be3O18Si6", "Al Be O Si", 192, "Beryllium"),
    ("gallium arsenide", "AsGa", "As Ga", 216, "Arsenic"),
    ("galena", "PbS", "Pb S", 225, "Lead"),
    ("cinnabar", "HgS", "Hg S", 152, "Mercury"),
    ("greenockite", "CdS", "Cd S", 186, "Cadmium"),
    ("", "Tl2O3", "O Tl", 206, "Thallium"),
    ("uraninite", "O2U", "O U", 225, "Radioactive"),
    ("thorianite", "O2Th", "O Th", 225, "Radioactive"),
    ("crocoite", "CrO4Pb", "Cr O Pb", 14, "Chromium(VI)"),
    ("", "CrO3", "Cr O", 40, "Chromium(VI)"),
    ("bunsenite", "NiO", "Ni O", 225, "Nickel"),
]


def _cautions(name: str, formula: str, elements: str, number: int) -> tuple[str, ...]:
    (key,) = formula_keys(formula)
    return cautions_for(name, key, elements.split(), number)


@pytest.mark.parametrize(("name", "formula", "elements", "number", "word"), EXPECTED)
def test_a_caution_is_given(name: str, formula: str, elements: str, number: int, word: str) -> None:
    said = _cautions(name, formula, elements, number)
    assert any(word in sentence for sentence in said), said


@pytest.mark.parametrize(
    ("name", "formula", "elements", "number"),
    [
        ("aluminium", "Al", "Al", 225),
        ("corundum", "Al2O3", "Al O", 167),
        ("stishovite", "O2Si", "O Si", 136),
        ("eskolaite", "Cr2O3", "Cr O", 167),
        ("forsterite", "Mg2O4Si", "Mg O Si", 62),
        ("gold", "Au", "Au", 225),
    ],
)
def test_no_caution_without_cause(name: str, formula: str, elements: str, number: int) -> None:
    assert _cautions(name, formula, elements, number) == ()


def test_every_rule_defers_to_local_rules_and_has_a_condition() -> None:
    with data_path("cautions.toml").open("rb") as file:
        rules = tomllib.load(file)["rule"]
    known = {"caution", "elements", "with", "formula", "space_group", "name"}
    for rule in rules:
        assert set(rule) <= known
        assert set(rule) & {"elements", "formula", "name"}
        assert "rules" in rule["caution"]


@pytest.mark.parametrize(
    ("name", "formula", "elements", "number"),
    [  # each meets two rules: by its name, and by its formula or another element
        ("quartz", "SiO2", "O Si", 152),
        ("chrysotile", "Mg3Si2O5(OH)4", "H Mg O Si", 12),
        ("tremolite", "Ca2Mg5Si8O22(OH)2", "Ca H Mg O Si", 12),
        ("crocoite", "PbCrO4", "Cr O", 14),
        ("retgersite", "NiSO4", "Ni O S", 92),
    ],
)
def test_a_hazard_is_told_once(name: str, formula: str, elements: str, number: int) -> None:
    assert len(_cautions(name, formula, elements, number)) == 1


def test_nickel_and_its_compounds_share_one_sentence() -> None:
    assert _cautions("", "Ni", "Ni", 225) == _cautions("bunsenite", "NiO", "Ni O", 225)
