"""Frequentist confidence belt for the true degree of polarisation under a general covariance.

The test of a value p0 is its likelihood ratio with the angle profiled out: the distance, in standard errors,
of the measured vector from the circle of radius p0. p0 is accepted where the distance stays under c(p0), set
so that the truth is accepted with the probability wanted: exactly, for equal errors, where the distance is
|p - p0| / sigma and the distribution of p is Rice's; on the average over the true angle, otherwise. This is
Neyman's construction with the ordering of Feldman & Cousins (1998, Phys. Rev. D 57, 3873); no interval is
empty, all hold the measured p, and zero is left out just where the test of the vector against zero rejects it.

Arguments are flat arrays: p in the unit of `Geometry.unit`, stretch and tilt as there.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.interpolate import CubicSpline, RectBivariateSpline
from scipy.special import chndtr, ndtri

from hwpol.statistics.moments import Array
from hwpol.statistics.posterior import FAR
from hwpol.statistics.tables import ROUND, root

_SCALE = 2.0  # p0 = scale x / (1 - x): x in [0, 1] covers every signal
_LONGEST = float(np.log(5.0))  # longest ellipse for which c(p0) is tabulated
_DRAWS = 4096  # quasi-random draws behind c(p0): their error in probability is below 1e-3


def normal_half_width(level: float) -> float:
    """Standard errors either side that hold ``level`` of a normal distribution."""
    return float(ndtri(0.5 + 0.5 * level))


def null_radius(level: float) -> float:
    """Standard errors from zero within which ``level`` of a bivariate normal distribution lies."""
    return float(np.sqrt(-2 * np.log1p(-level)))


def distance(x: Array, y: Array, p0: Array, major: Array, minor: Array) -> Array:
    """Standard errors between the vector (x, y), in the ellipse's own axes, and the circle of radius p0.

    All arguments broadcast. The nearest point is searched on a quarter circle, where it must lie, and refined.
    """
    x, y = np.abs(x), np.abs(y)
    shape = np.broadcast_shapes(*(np.shape(part) for part in (x, y, p0, major, minor)))
    best, where = np.full(shape, np.inf), np.zeros(shape)
    for angle in np.linspace(0.0, 0.5 * np.pi, 25):
        trial = ((p0 * np.cos(angle) - x) / major) ** 2 + ((p0 * np.sin(angle) - y) / minor) ** 2
        better = trial < best
        best, where = np.where(better, trial, best), np.where(better, angle, where)
    step = 0.5 * np.pi / 24
    for _ in range(5):
        c, s = np.cos(where), np.sin(where)
        dx, dy = p0 * c - x, p0 * s - y
        slope = p0 * (-dx * s / major**2 + dy * c / minor**2)
        bend = p0 * ((p0 * s * s - dx * c) / major**2 + (p0 * c * c - dy * s) / minor**2)
        move = np.where(bend > 0, -slope / np.where(bend > 0, bend, 1.0), -np.sign(slope) * step)
        where = np.clip(where + np.clip(move, -step, step), 0.0, 0.5 * np.pi)
    refined = ((p0 * np.cos(where) - x) / major) ** 2 + ((p0 * np.sin(where) - y) / minor) ** 2
    return np.sqrt(np.minimum(best, refined))


def axes(stretch: Array) -> tuple[Array, Array]:
    """Semi-axes of the ellipse for a mean eigenvalue of 1."""
    e = np.tanh(stretch)
    return np.sqrt(1 + e), np.sqrt(1 - e)


@lru_cache(maxsize=1)
def _sorted_distances() -> tuple[Array, Array, Array]:
    """Distances (x of p0, stretch, draw), sorted, of measured vectors from their own true circle."""
    from scipy.stats import qmc  # slow to load, and needed for unequal errors alone

    cube = qmc.Sobol(3, scramble=True, rng=np.random.default_rng(20)).random(_DRAWS)
    angle, first, second = 0.5 * np.pi * cube[:, 0], ndtri(cube[:, 1]), ndtri(cube[:, 2])
    x, stretch = np.linspace(0.0, 1.0, 21)[1:-1], np.linspace(0.0, _LONGEST, 9)
    p0 = (_SCALE * x / (1 - x))[:, None, None]
    major, minor = axes(stretch[None, :, None])
    found = distance(p0 * np.cos(angle) + major * first, p0 * np.sin(angle) + minor * second, p0, major, minor)
    return x, stretch, np.sort(found, axis=-1)


@dataclass(frozen=True)
class Belt:
    """c(p0, stretch) for one level."""

    level: float
    circle: CubicSpline
    general: RectBivariateSpline

    @classmethod
    def build(cls, level: float) -> Belt:
        ends = null_radius(level), normal_half_width(level)
        x = np.linspace(0.0, 1.0, 401)[1:-1]
        p0 = _SCALE * x / (1 - x)
        near = p0 < FAR

        def surplus(c: Array) -> Array:
            high, low = p0[near] + c, np.maximum(p0[near] - c, 0.0)
            return chndtr(high**2, 2, p0[near] ** 2) - chndtr(low**2, 2, p0[near] ** 2) - level

        start = np.full(int(near.sum()), 0.5 * ends[1])
        width = np.full(x.size, ends[1])
        width[near] = root(surplus, start, start + ends[0])
        circle = CubicSpline(np.concatenate([[0.0], x, [1.0]]), np.concatenate([ends[:1], width, ends[1:]]))
        coarse, stretch, distances = _sorted_distances()
        rank = (np.arange(_DRAWS) + 0.5) / _DRAWS
        quantile = np.array([[np.interp(level, rank, row) for row in rows] for rows in distances])
        # Both ends are known whatever the shape; what the draws miss at equal errors is taken off everywhere.
        quantile += (circle(coarse) - quantile[:, 0])[:, None]
        rows = [np.full((1, stretch.size), ends[0]), quantile, np.full((1, stretch.size), ends[1])]
        nodes = np.concatenate([[0.0], coarse, [1.0]])
        return cls(level, circle, RectBivariateSpline(nodes, stretch, np.concatenate(rows)))

    def width(self, p0: Array, stretch: Array) -> Array:
        """Distance within which p0 is accepted; for ellipses longer than the table's, that of its longest."""
        x = p0 / (p0 + _SCALE)
        return np.where(stretch < ROUND, self.circle(x), self.general.ev(x, np.minimum(stretch, _LONGEST)))

    def interval(self, p: Array, stretch: Array, tilt: Array) -> tuple[Array, Array]:
        """Ends of the interval of accepted p0."""
        major, minor = axes(stretch)
        x, y = p * np.cos(tilt), p * np.sin(tilt)

        def excess(p0: Array) -> Array:
            return distance(x, y, p0, major, minor) - self.width(p0, stretch)

        low = root(lambda p0: -excess(p0), np.zeros_like(p), p)
        reach = (null_radius(self.level) + 1.0) * major
        return low, root(excess, p, p + reach)
