"""Lists of operations, whole and damaged, against gemmi's multiplication of each with each."""

from __future__ import annotations

import random

import gemmi
import numpy as np

from phaseid.crystal.closure import is_group

DEN = gemmi.Op.DEN


def closed(operations: list[gemmi.Op]) -> bool:
    listed = {op.triplet() for op in operations}
    return all((a * b).wrap().triplet() in listed for a in operations for b in operations)


def test_damaged_lists_are_told_from_groups() -> None:
    draw = random.Random(1)
    groups = [g for g in gemmi.spacegroup_table() if len(g.operations()) <= 48]
    outcomes = []
    for kind in range(200):
        operations = list(draw.choice(groups).operations())
        if kind % 4 == 1:
            operations = draw.sample(operations, draw.randint(1, len(operations)))
        elif kind % 4 == 2:
            shifted = draw.choice(operations)
            shifted.tran = [t + draw.choice([0, 6, 8, 12]) for t in shifted.tran]
            shifted.wrap()
        elif kind % 4 == 3:
            operations += draw.choice(groups).operations()
        operations = list({op.triplet(): op for op in operations}.values())
        rotations = [[[x // DEN for x in row] for row in op.rot] for op in operations]
        translations = [op.tran for op in operations]
        found = is_group(np.array(rotations), np.array(translations))
        assert found == closed(operations), [op.triplet() for op in operations]
        outcomes.append(found)
    assert 40 < sum(outcomes) < 160
