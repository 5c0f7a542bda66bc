"""Exact posterior of the true degree of polarisation for a general covariance, by quadrature.

The likelihood of the true vector is integrated over its direction on the circle of radius p0, which gives
g(p0); the prior flat in p0 >= 0 (Vaillancourt 2006, PASP 118, 1340) makes g the posterior, the prior flat in
(q, u) (Quinn 2012, A&A 538, A65) makes it p0 g(p0). For equal errors these are the closed forms
exp(-(p^2 + p0^2) / 2) I0(p p0), with the factor p0 or without.

Arguments are flat arrays: p in the unit of `Geometry.unit`, stretch and tilt as there.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.polynomial import chebyshev

from hwpol.statistics.moments import Array
from hwpol.statistics.tables import root

FAR = 60.0  # signal beyond which the expansion in 1/p is used: what it drops is of order 1/p^2
_NODES = 128  # Chebyshev nodes over the window; a Gaussian of its smallest width there needs about 90
_GRID = 1025  # points on which the posterior is kept; cubic interpolation there is right to 1e-7
_CHUNK = 1_000_000  # array elements at a time


def variances(stretch: Array, tilt: Array) -> tuple[Array, Array, Array]:
    """Variance along and across the vector and their covariance, for a mean eigenvalue of 1."""
    e = np.tanh(stretch)
    along = 1 + e * np.cos(2 * tilt)
    # Written with the small eigenvalue so that long ellipses keep their digits.
    least = 1 - e
    return np.maximum(along, least), np.maximum(2 - along, least), e * np.sin(2 * tilt)


@lru_cache(maxsize=1)
def _transform() -> tuple[Array, Array, Array, Array]:
    """Chebyshev nodes, and matrices from values there to integral, value and slope on a uniform grid over [-1, 1]."""
    nodes = np.cos(np.pi * (np.arange(_NODES) + 0.5) / _NODES)
    matrix = 2.0 / _NODES * np.cos(np.outer(np.arange(_NODES), np.arccos(nodes)))
    matrix[0] *= 0.5
    grid = np.linspace(-1.0, 1.0, _GRID)
    series = (chebyshev.chebint(matrix, lbnd=-1), matrix, chebyshev.chebder(matrix))
    integral, value, slope = (np.asarray(chebyshev.chebvander(grid, part.shape[0] - 1) @ part).T for part in series)
    return nodes, integral, value, slope


def marginal(r: Array, p: Array, stretch: Array, tilt: Array, half: Array) -> Array:
    """g(r): the likelihood averaged over direction, up to a factor per row.

    Parameters
    ----------
    r : ndarray (n, m)
        Radii.
    p, stretch, tilt, half : ndarray (n,)
        Measured length, shape of the ellipse, and half the width of the window of radii.
    """
    along, across, cross = variances(stretch, tilt)
    major, minor = np.sqrt(1 + np.tanh(stretch)), np.sqrt(1 - np.tanh(stretch))
    det = along * across - cross**2
    det = np.where(det > 0, det, (major * minor) ** 2)
    # Directions that matter end 8.5 standard errors away; far from the origin that is a small part of the circle.
    window = np.minimum(np.pi, 8.5 * major / np.maximum(p - half, 1e-3))
    # A trapezoid with steps of 1.2 standard deviations of a Gaussian is right to 1e-6.
    steps = np.ceil(2 * window * (p + half) / (1.2 * minor)).astype(int) + 16
    out = np.empty_like(r)
    order = np.argsort(steps)
    start = 0
    while start < order.size:
        stop = start + 1
        while stop < order.size and (stop - start) * r.shape[1] * steps[order[stop]] < _CHUNK:
            stop += 1
        rows = order[start:stop]
        count = int(steps[rows[-1]])
        angle = window[rows, None] * (2 * (np.arange(count) + 0.5) / count - 1)
        x = r[rows, :, None] * np.cos(angle)[:, None, :] - p[rows, None, None]
        y = r[rows, :, None] * np.sin(angle)[:, None, :]
        a, b, c, d = (part[rows, None, None] for part in (across, along, cross, det))
        out[rows] = np.exp(-0.5 * (a * x * x - 2 * c * x * y + b * y * y) / d).mean(axis=-1)
        start = stop
    return out


class Posterior:
    """Posterior of p0 for every row: density and distribution function on a fine grid, with slopes.

    Parameters
    ----------
    p, stretch, tilt : ndarray (n,)
        Measured length (up to `FAR`) and shape of the ellipse.
    plane : bool
        Prior flat in (q, u) instead of flat in p0.
    """

    def __init__(self, p: Array, stretch: Array, tilt: Array, *, plane: bool) -> None:
        along, across, _ = variances(stretch, tilt)
        major = np.sqrt(1 + np.tanh(stretch))
        half = np.minimum(7.5 * major, 7.5 * np.sqrt(along) + 30 * across / np.maximum(p, 1e-3))
        self.low = np.maximum(p - half, 0.0)
        self.high = p + half
        nodes, *matrices = _transform()
        r = self.low[:, None] + 0.5 * (self.high - self.low)[:, None] * (nodes + 1)
        values = marginal(r, p, stretch, tilt, half) * (r if plane else 1.0)
        cumulative, density, slope = (values @ matrix for matrix in matrices)
        total = cumulative[:, -1:].copy()
        self._step = (self.high - self.low) / (cumulative.shape[1] - 1)
        # In the unit of one grid step throughout, as the Hermite polynomials want it.
        half_step = 1.0 / (cumulative.shape[1] - 1)
        self._cumulative = cumulative / total
        self._density = 2 * half_step * density / total
        self._slope = (2 * half_step) ** 2 * slope / total

    def _cell(self, r: Array) -> tuple[Array, Array]:
        place = np.clip((r - self.low) / self._step, 0.0, self._cumulative.shape[1] - 1.0)
        index = np.minimum(place.astype(int), self._cumulative.shape[1] - 2)
        return index, place - index

    def _hermite(self, values: Array, slopes: Array, r: Array) -> Array:
        index, t = self._cell(r)
        row = np.arange(r.size)
        left, right = values[row, index], values[row, index + 1]
        rise = right - left
        into, out = slopes[row, index] - rise, rise - slopes[row, index + 1]
        return left + t * (rise + (1 - t) * (into * (1 - t) + out * t))

    def density(self, r: Array) -> Array:
        """Density at one radius per row, per grid step."""
        return self._hermite(self._density, self._slope, r)

    def cumulative(self, r: Array) -> Array:
        """Probability below one radius per row."""
        return self._hermite(self._cumulative, self._density, r)

    def quantile(self, level: float | Array) -> Array:
        """Radius below which the probability ``level`` lies."""
        return root(lambda r: self.cumulative(r) - level, self.low, self.high)

    def shortest(self, level: float) -> tuple[Array, Array]:
        """Shortest interval with the probability ``level``; low is 0 where the density there is high enough.

        The posterior of a long ellipse can have two peaks; the shortest interval is searched over the whole range.
        """
        count = self._cumulative.shape[1]
        offset = 2.0 * np.arange(self.low.size)[:, None]
        index = np.arange(0, count, 4)
        wanted = np.minimum(self._cumulative[:, index] + level, 1.0)
        upper = np.searchsorted((self._cumulative + offset).ravel(), (wanted + offset).ravel()).reshape(wanted.shape)
        upper = np.clip(upper - count * np.arange(self.low.size)[:, None], 1, count - 1)
        row = np.arange(self.low.size)[:, None]
        left, right = self._cumulative[row, upper - 1], self._cumulative[row, upper]
        part = np.clip((wanted - left) / np.maximum(right - left, 1e-300), 0.0, 1.0)
        width = np.where(self._cumulative[:, index] + level < 1.0, upper - 1 + part - index, np.inf)
        best = index[np.argmin(width, axis=1)]
        start = self.low + self._step * np.maximum(best - 4, 0)
        stop = self.low + self._step * (best + 4)
        stop = np.minimum(stop, self.quantile(1.0 - level))

        def high(low: Array) -> Array:
            return self.quantile(self.cumulative(low) + level)

        low = root(lambda r: self.density(r) - self.density(high(r)), start, stop)
        return low, high(low)

    def excess_at_zero(self, level: float) -> Array:
        """Density at the one-sided quantile minus that at zero: the shortest interval leaves zero where positive."""
        return self.density(self.quantile(level)) - self.density(np.zeros_like(self.low))
