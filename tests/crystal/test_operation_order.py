"""The order in which a file lists its symmetry operations says nothing."""

from __future__ import annotations

import random
from dataclasses import replace

import pytest

from phaseid.crystal.lines import compute_lines
from phaseid.library.starter import shipped_crystal

# of all lattices and Laue groups; the International Tables list the identity first, files need not
STEMS = [
    "PbSO4-anglesite", "ZrO2-baddeleyite", "Al2O3-corundum", "MgO-periclase", "TiO2-anatase",
    "SiO2-quartz", "ZnS-wurtzite",
]  # fmt: skip


@pytest.mark.parametrize("stem", STEMS)
def test_lines_do_not_depend_on_it(stem: str) -> None:
    crystal = shipped_crystal(stem)
    straight = compute_lines(crystal)
    operations = list(crystal.operations)
    for seed in range(4):
        random.Random(seed).shuffle(operations)
        mixed = compute_lines(replace(crystal, operations=tuple(operations)))
        assert mixed.d_A == pytest.approx(straight.d_A, rel=1e-9)
        assert mixed.multiplicity.tolist() == straight.multiplicity.tolist()
        assert mixed.f2_xray == pytest.approx(straight.f2_xray, rel=1e-4, abs=1e-3)
        assert mixed.hkl.tolist() == straight.hkl.tolist()
