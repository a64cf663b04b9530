"""The invented patterns of data/demo are what scripts/build_demo.py writes, and say so."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from phaseid.rings import read_rings

ROOT = Path(__file__).resolve().parents[2]
FILES = ("foil_electrons.csv", "foil_xrays.csv")


@pytest.fixture(scope="module")
def script() -> ModuleType:
    spec = importlib.util.spec_from_file_location("build_demo", ROOT / "scripts" / "build_demo.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_the_files_are_what_the_script_writes(script: ModuleType) -> None:
    rng = np.random.default_rng(script.SEED)
    texts = (script.foil_electrons(rng), script.foil_xrays(rng))
    for name, text in zip(FILES, texts, strict=True):
        assert (ROOT / "data" / "demo" / name).read_text(encoding="utf-8") == text


def test_the_heating_is_what_the_script_writes(script: ModuleType) -> None:
    texts = script.heating(np.random.default_rng(script.HEATING_SEED))
    folder = ROOT / "data" / "demo" / "heating"
    assert sorted(texts) == sorted(path.name for path in folder.iterdir())
    for name, text in texts.items():
        assert (folder / name).read_text(encoding="utf-8") == text


@pytest.mark.parametrize("name", [*FILES, "heating/powder_700.csv"])
def test_a_demonstration_says_that_it_is_invented(name: str) -> None:
    path = ROOT / "data" / "demo" / name
    assert "invented" in read_rings(path).title
    assert "nothing here was measured" in path.read_text(encoding="utf-8")


def test_the_scripts_multiplicities_are_those_of_int_tables(script: ModuleType) -> None:
    """m-3m has 8 {111}, 6 {200}, 12 {220}, 24 {311} (Int. Tables A, point group m-3m)."""
    d_A, strength = zip(*script.lines("elements/Al-aluminium.cif", electrons=True), strict=True)
    edge_A = 4.0496  # the table's cell
    for n, multiplicity in ((3, 8), (4, 6), (8, 12), (11, 24)):
        index = int(np.argmin(np.abs(np.array(d_A) - edge_A / n**0.5)))
        assert d_A[index] == pytest.approx(edge_A / n**0.5, rel=1e-6)
        s2 = 1 / (4 * d_A[index] ** 2)
        table = script.gemmi.Element("Al").c4322  # all four atoms scatter in phase
        amplitude = 4 * table.calculate_sf(s2) * np.exp(-script.B_ISO_A2 * s2)
        expected = multiplicity * amplitude**2 / edge_A**6
        assert strength[index] == pytest.approx(expected, rel=1e-4)
