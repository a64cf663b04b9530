"""All ring positions of a hypothesis as one linear Gaussian model, marginalised in closed form."""

from __future__ import annotations

from math import log

import numpy as np

from phaseid.matching.laying import HALF_LOG_2PI, PatternWork, Shift
from phaseid.matching.model import Looseness
from phaseid.matching.patterns import Floats
from phaseid.matching.settings import ODD_POSITION_SHARE, SIGMA_INFLATION

AXES = 3
"""Axial strains of a phase, one an edge of its cell."""


class Positions:
    """The linear Gaussian model of all positions together.

    Nuisances in order: those of each pattern, the strain of each phase, three axial strains of each
    phase where any phase has them.
    """

    def __init__(self, works: list[PatternWork], loose: Looseness) -> None:
        self.works = works
        self.loose = loose
        self.widths = [work.pattern.nuisance.shape[1] for work in works]
        self.strains = sum(self.widths)
        self.axials = self.strains + works[0].k
        self.size = self.axials + (0 if loose.axial is None else AXES * works[0].k)

    def _design(self) -> Floats:
        blocks = []
        start = 0
        for work, width in zip(self.works, self.widths, strict=True):
            block = np.zeros((work.b, work.m, self.size))
            block[:, :, start : start + width] = work.pattern.nuisance
            strain = np.einsum("bkm,bk->bmk", work.share, self.loose.strain)
            block[:, :, self.strains : self.axials] = strain
            if work.axial is not None:
                lever = np.einsum("bkm,bkma->bmka", work.share, work.lever)
                block[:, :, self.axials :] = lever.reshape(work.b, work.m, -1)
            blocks.append(block)
            start += width
        return np.concatenate(blocks, axis=1)

    def solve(self, targets: list[Floats], factor: float) -> tuple[Floats, Floats, Floats]:
        """Posterior mean (b, q) and covariance (b, q, q) of the nuisances, and ln marginal (b,).

        `targets` are measured − calculated at zero nuisance, per pattern; `factor` inflates sigmas.
        Rings not claimed carry no weight.
        """
        design = self._design()
        target = np.concatenate(targets, axis=1)
        claimed = np.concatenate([work.claimed for work in self.works], axis=1)
        variance = np.concatenate([work.variance() for work in self.works], axis=1) * factor**2
        weight = np.where(claimed, 1.0 / variance, 0.0)
        weighted = design * weight[:, :, None]
        information = np.einsum("bmq,bmr->bqr", weighted, design) + np.eye(self.size)
        projected = np.einsum("bmq,bm->bq", weighted, target)
        covariance = np.linalg.inv(information)
        mean = np.einsum("bqr,br->bq", covariance, projected)
        _, log_det = np.linalg.slogdet(information)
        square = (weight * target**2).sum(axis=1) - np.einsum("bq,bq->b", mean, projected)
        norm = np.where(claimed, 0.5 * np.log(variance) + HALF_LOG_2PI, 0.0).sum(axis=1)
        return mean, covariance, -0.5 * square - norm - 0.5 * log_det

    def marginal(self, targets: list[Floats]) -> Floats:
        """(b,) ln marginal likelihood of the positions, sigma inflation marginalised."""
        terms = [log(prior) + self.solve(targets, factor)[2] for factor, prior in SIGMA_INFLATION]
        odd = sum((work.odd_position & work.claimed).sum(axis=1) for work in self.works)
        plain = sum((~work.odd_position & work.claimed).sum(axis=1) for work in self.works)
        result: Floats = np.logaddexp.reduce(terms, axis=0)
        result += odd * log(ODD_POSITION_SHARE) + plain * log(1.0 - ODD_POSITION_SHARE)
        return result

    def place(self, mean: Floats) -> list[Shift]:
        """What the nuisances `mean` (b, q) do in each pattern."""
        strain = mean[:, self.strains : self.axials] * self.loose.strain
        axial = mean[:, self.axials :].reshape(len(mean), -1, AXES)
        shifts = []
        start = 0
        for work, width in zip(self.works, self.widths, strict=True):
            own = mean[:, start : start + width]
            offset = strain + own[:, :1] * work.pattern.nuisance[0, 0]
            shifts.append(Shift(offset, own[:, 1:] @ work.pattern.nuisance[:, 1:].T, axial))
            start += width
        return shifts
