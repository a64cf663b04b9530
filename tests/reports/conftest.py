"""A hand-made identification: aluminium with a little MgO, one foreign ring, electrons.

Spacings follow from a / sqrt(h² + k² + l²) with a(Al) = 4.0495 Å and a(MgO) = 4.2112 Å (both from
memory of handbook tables; only their use, not their value, matters here).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from phaseid.crystal.crystal import Finding, Source
from phaseid.library.phase import Phase
from phaseid.matching.identification import (
    Assignment,
    Hypothesis,
    Identification,
    LibraryStamp,
    Missing,
    PhaseAnswer,
    Scale,
    Separator,
    Unexplained,
)
from phaseid.probes.probe import Probe
from phaseid.rings.measuring.disc import Disc
from phaseid.rings.ringlist import RingList

CAUTIONS = ("Fine powders: avoid dust; follow the local rules.",)
A_AL, A_MGO = 4.0495, 4.2112
RINGS = [  # hkl, phase, intensity
    ((2, 0, 0), 1, 60.0),
    ((1, 1, 1), 0, 100.0),
    ((2, 0, 0), 0, 45.0),
    ((2, 2, 0), 0, 30.0),
]


def _cubic_phase(phase_id: str, name: str, formula: str, a_A: float, file: str) -> Phase:
    return Phase(
        phase_id=phase_id,
        name=name,
        formula=formula,
        elements=tuple(sorted({"Al", "Mg", "O", "Ag"} & {formula[:2], formula[2:]})),
        space_group_number=225,
        space_group_symbol="Fm-3m",
        cell=(a_A, a_A, a_A, 90.0, 90.0, 90.0),
        volume_A3=a_A**3,
        density_g_cm3=2.7,
        source=Source("COD", "0000001", file, "Made up for a test"),
    )


def _spacing(a_A: float, hkl: tuple[int, int, int]) -> float:
    return a_A / math.sqrt(sum(index**2 for index in hkl))


@pytest.fixture
def answer() -> Identification:
    aluminium = _cubic_phase("Al-aaaa", "aluminium", "Al", A_AL, "al.cif")
    periclase = replace(
        _cubic_phase("MgO-bbbb", "periclase", "MgO", A_MGO, "mgo.cif"),
        findings=(Finding("theoretical", "A computed cell, not a measured one."),),
        cautions=CAUTIONS,
    )
    silver = _cubic_phase("Ag-cccc", "silver", "Ag", 4.0862, "ag.cif")
    cells = (A_AL, A_MGO)
    d_calc = [_spacing(cells[phase], hkl) for hkl, phase, _ in RINGS]
    d_A = np.array([*(1.003 * d for d in d_calc), 1.9])
    sigma_A = 0.005 * d_A
    intensity = np.array([*(strength for *_, strength in RINGS), np.nan])
    pattern = RingList(
        title="Foil A",
        probe=Probe("electron", 0.025079, 0.01, "electron 200 kV", "ring"),
        position_column="d_A",
        position=d_A,
        position_sigma=sigma_A,
        d_A=d_A,
        sigma_A=sigma_A,
        intensity=intensity,
        intensity_range=np.stack([intensity, intensity], axis=1),
        grades=("", "vs", "", "", ""),
        notes=("",) * 5,
        sigma_stated=False,
        source="foil_a.csv",
        remarks=("No sigma column: 0.5 % of each spacing is assumed.",),
    )
    best = Hypothesis(
        rank=1,
        probability=0.94,
        log_odds=math.log(0.94 / 0.06),
        phases=(
            PhaseAnswer(
                aluminium,
                0.8,
                0.05,
                indistinguishable=(silver,),
                cell=(4.0501, 4.0501, 4.0501, 90.0, 90.0, 90.0),
                cell_sigma=(0.002, 0.002, 0.002, 0.0, 0.0, 0.0),
                fibre_axis=(1, 1, 1),
                separators=(Separator(silver, "calibrate the camera constant to 0.4 %"),),
            ),
            PhaseAnswer(periclase, None, None),
        ),
        scale=(Scale(0, 1.0031, 0.0007),),
        assignments=tuple(
            Assignment(0, ring, phase, hkl, d_calc[ring], (-1) ** ring * 0.3, strength)
            for ring, (hkl, phase, strength) in enumerate(RINGS)
        ),
        unexplained=(Unexplained(0, 4, "close to the 110 ring of ice"),),
        missing=(Missing(0, 0, (3, 1, 1), _spacing(A_AL, (3, 1, 1)), 25.0),),
    )
    second = Hypothesis(
        rank=2,
        probability=0.02,
        log_odds=math.log(0.02 / 0.98),
        phases=(PhaseAnswer(silver, 1.0, None),),
        scale=(Scale(0, 0.99, 0.001),),
        assignments=(Assignment(0, 1, 0, (1, 1, 1), 2.36, 1.5, 100.0),),
        unexplained=tuple(Unexplained(0, ring) for ring in (0, 2, 3, 4)),
        missing=(),
    )
    return Identification(
        verdict="identified",
        patterns=(pattern,),
        hypotheses=(best, second),
        unlisted_probability=0.03,
        library=LibraryStamp("/data/starter.sqlite", 120, "0123456789abcdef"),
        remarks=("Only phases of Al, Mg, O and Ag were considered.",),
        cautions=CAUTIONS,
    )


CONSTANT = 980.0  # Å px
SIDE = 401
PX = 4.1


def _with_image(answer: Identification, *, left_only: bool = False) -> Identification:
    """The rings of the answer, drawn on an image one pixel of which is `PX` px."""
    pattern = answer.patterns[0]
    steps = (np.arange(SIDE) - (SIDE - 1) / 2) * PX
    x, y = np.meshgrid(steps, steps)
    radius = np.hypot(x, y)
    grey = np.zeros((SIDE, SIDE))
    for d_A in pattern.d_A[:4]:
        grey += 255 * np.exp(-(((radius - CONSTANT / d_A) / 6.0) ** 2))
    if left_only:
        grey[x > 0] = 0
    image = Disc(np.clip(grey, 0, 255).astype(np.uint8), np.ones((SIDE, SIDE), dtype=bool), PX)
    rings = replace(
        pattern,
        position_column="radius_px",
        position=CONSTANT / pattern.d_A,
        disc=image,
    )
    return replace(answer, patterns=(rings,))


@pytest.fixture
def on_image() -> Callable[..., Identification]:
    """Give an answer's pattern the image it was measured on."""
    return _with_image
