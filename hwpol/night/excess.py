"""Scatter beyond the counts that a whole night shows, even where no single visit can prove it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import chdtrc, chdtri

from hwpol.flags import Flag
from hwpol.night.solve import VisitSolution

#: Chance of the night's chi2 by noise below which its excess is believed.
CERTAIN = 1e-4
#: Visits with repeats that a night needs to speak for itself.
LEAST_VISITS = 4


@dataclass(frozen=True)
class Excess:
    """Variance of the repeats over that of the counts (1: none), and the chance of so much by noise."""

    factor: float
    chance: float


def night_excess(solutions: Sequence[VisitSolution]) -> Excess:
    """Typical excess of the visits' repeats over their counts, first targets alone.

    The factor is the median over the visits of chi2 over its median expectation, so that a few variable stars or bad
    visits do not speak for the night; it is believed where the sum of chi2 up to that median excess is improbable.
    """
    pairs = [
        (float(s.chi2[0]), int(s.dof[0]))
        for s in solutions
        if s.kept[0].sum() > 1 and np.isfinite(s.chi2[0]) and s.dof[0] > 0
    ]
    if len(pairs) < LEAST_VISITS:
        return Excess(1.0, 1.0)
    chi2, dof = np.asarray(pairs, dtype=float).T
    ratio = chi2 / chdtri(dof, 0.5)
    factor = float(np.median(ratio))
    # Visits beyond three times the typical excess are left to their own flags.
    typical = ratio <= 3 * max(factor, 1.0)
    chance = float(chdtrc(dof[typical].sum(), chi2[typical].sum()))
    return Excess(factor, chance) if factor > 1 and chance < CERTAIN else Excess(1.0, chance)


def with_excess(solution: VisitSolution, excess: Excess) -> VisitSolution:
    """Errors of a visit not below those of the counts times the night's excess; flagged where that enlarges them."""
    if excess.factor <= 1:
        return solution
    least = excess.factor * solution.count_covariance
    adopted = solution.stokes.covariance
    smaller = np.einsum("sii->s", adopted[:, :2, :2]) < np.einsum("sii->s", least)
    covariance = adopted.copy()
    covariance[:, :2, :2] = np.where(smaller[:, None, None], least, adopted[:, :2, :2])
    flags = solution.flags | np.where(smaller, int(Flag.EXCESS_SCATTER), 0)
    return replace(solution, flags=flags, stokes=replace(solution.stokes, covariance=covariance, flags=flags))
