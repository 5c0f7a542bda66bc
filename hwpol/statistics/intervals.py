"""Intervals and upper limits for the true degree of polarisation, at any level, for a general covariance.

Every kind is computed exactly elsewhere (`posterior`, `belt`) and tabulated here once per level, in
coordinates in which its ends are smooth, so that a million values take about a second.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtri

from hwpol.errors import InputError
from hwpol.statistics.belt import Belt, axes, normal_half_width, null_radius
from hwpol.statistics.moments import Array, geometry
from hwpol.statistics.posterior import FAR, Posterior, variances
from hwpol.statistics.tables import ROUND, Table, not_tabulated, root

Kind = Literal["bayes", "bayes-qu", "frequentist"]
KINDS: tuple[str, ...] = get_args(Kind)

# Axial ratio above which the small axis of the ellipse is taken as this part of the large one: the interval can
# only grow by it, and the quadrature stays affordable.
LONGEST_EXACT = float(np.log(30.0))
_SCALE = 1.5
_LINE, _BULK = 361, 29
_CHUNK = 2_000
_CLIPPED = ("bayes", "frequentist")  # kinds whose lower end is zero below an onset, and grows from there


def solve(kind: str, level: float, p: Array, stretch: Array, tilt: Array) -> tuple[Array, Array]:
    """Exact ends (low, high) in the unit of p; kind "upper" gives (0, one-sided limit, flat in p).

    Flat arrays, p in the unit of `Geometry.unit`; p may be infinite if the result is read as `_scaled`.
    """
    along, across, _ = variances(stretch, tilt)
    error = np.sqrt(along)
    far = p > FAR
    low, high = np.empty_like(p), np.empty_like(p)
    # To first order in 1/p the posterior is normal, shifted by the bias its prior leaves in.
    shift = {"bayes": -0.5, "upper": -0.5, "bayes-qu": 0.5, "frequentist": 0.0}[kind] * across[far] / p[far]
    z = float(ndtri(level)) if kind == "upper" else normal_half_width(level)
    low[far], high[far] = p[far] + shift - z * error[far], p[far] + shift + z * error[far]
    near = np.flatnonzero(~far)
    for start in range(0, near.size, _CHUNK):
        rows = near[start : start + _CHUNK]
        shape = p[rows], stretch[rows], tilt[rows]
        if kind == "frequentist":
            low[rows], high[rows] = _belt(level).interval(*shape)
        elif kind == "upper":
            high[rows] = Posterior(*shape, plane=False).quantile(level)
        else:
            low[rows], high[rows] = Posterior(*shape, plane=kind == "bayes-qu").shortest(level)
    return (np.zeros_like(p) if kind == "upper" else low), high


@lru_cache(maxsize=32)
def _belt(level: float) -> Belt:
    return Belt.build(level)


def onset(kind: str, level: float, stretch: Array, tilt: Array) -> Array:
    """Measured p, in the unit of `Geometry.unit`, at which the lower end leaves zero."""
    major, minor = axes(stretch)
    if kind == "frequentist":
        return null_radius(level) / np.hypot(np.cos(tilt) / major, np.sin(tilt) / minor)
    if kind != "bayes":
        return np.zeros_like(stretch)

    def excess(p: Array) -> Array:
        return Posterior(p, stretch, tilt, plane=False).excess_at_zero(level)

    return root(excess, np.full_like(stretch, 1e-3), (normal_half_width(level) + 4.0) * major, exact=1e-8)


@dataclass(frozen=True)
class _Ends:
    """Ends of one kind and level, by tables: apart below and above the onset of the lower end."""

    kind: str
    level: float

    @cached_property
    def _threshold(self) -> Table:
        def at_onset(x: Array, stretch: Array, tilt: Array) -> Array:
            # Constant in x, so solved once for every shape.
            pairs, back = np.unique(np.stack([stretch, tilt]), axis=1, return_inverse=True)
            return onset(self.kind, self.level, pairs[0], pairs[1])[back.ravel()]

        return Table(at_onset, 4, 4)

    def _onset(self, stretch: Array, tilt: Array) -> Array:
        if self.kind == "bayes":
            return self._threshold(np.zeros_like(stretch), stretch, tilt)
        return onset(self.kind, self.level, stretch, tilt)

    @cached_property
    def _below(self) -> Table:
        def high(x: Array, stretch: Array, tilt: Array) -> Array:
            return solve(self.kind, self.level, x * self._onset(stretch, tilt), stretch, tilt)[1]

        return Table(high, _LINE // 4, _BULK // 3)

    @cached_property
    def _above(self) -> Table:
        def scaled(x: Array, stretch: Array, tilt: Array) -> Array:
            s = _SCALE * x / np.maximum(1 - x, 1e-9)
            p = self._onset(stretch, tilt) + (s**2 if self.kind in _CLIPPED else s)
            error = np.sqrt(variances(stretch, tilt)[0])
            z = float(ndtri(self.level)) if self.kind == "upper" else normal_half_width(self.level)
            ends = np.tile([-z, z], (x.size, 1))
            finite = x < 1
            found = solve(self.kind, self.level, p[finite], stretch[finite], tilt[finite])
            ends[finite] = ((np.stack(found) - p[finite]) / error[finite]).T
            return ends

        return Table(scaled, _LINE, _BULK)

    def __call__(self, p: Array, stretch: Array, tilt: Array) -> tuple[Array, Array]:
        error = np.sqrt(variances(stretch, tilt)[0])
        start = self._onset(stretch, tilt)
        over = np.maximum(p - start, 0.0)
        s = np.sqrt(over) if self.kind in _CLIPPED else over
        low, high = p + error * self._above(s / (s + _SCALE), stretch, tilt).T
        if self.kind == "upper":
            return np.zeros_like(p), high
        low = np.maximum(low, 0.0)
        if self.kind in _CLIPPED:
            under = p < start
            low[under] = 0.0
            high[under] = self._below(p[under] / start[under], stretch[under], tilt[under])
        return low, high


_ends: Callable[[str, float], _Ends] = lru_cache(maxsize=32)(_Ends)


def _evaluate(kind: str, level: float, q: ArrayLike, u: ArrayLike, covariance: ArrayLike) -> tuple[Array, Array]:
    if not 0.0 < level < 1.0:
        raise InputError(f"level = {level}: expected a probability between 0 and 1, such as 0.6827")
    g = geometry(q, u, covariance)
    low, high = np.full(g.p.shape, np.nan), np.full(g.p.shape, np.nan)
    good = np.isfinite(g.p)
    unit, stretch, tilt = g.unit[good], np.minimum(g.stretch[good], LONGEST_EXACT), g.tilt[good]
    p = g.p[good] / unit
    tilt = np.where(stretch < ROUND, 0.0, tilt)
    exact = not_tabulated(stretch)
    ends = np.empty((2, p.size))
    if exact.any():
        ends[:, exact] = solve(kind, float(level), p[exact], stretch[exact], tilt[exact])
    if not exact.all():
        rest = p[~exact], stretch[~exact], tilt[~exact]
        ends[:, ~exact] = np.stack(_ends(kind, float(level))(*rest))
    low[good], high[good] = ends * unit
    return low, high


def interval(
    q: ArrayLike, u: ArrayLike, covariance: ArrayLike, level: float = 0.6827, kind: str = "bayes"
) -> tuple[Array, Array]:
    """Interval for the true degree of polarisation.

    Parameters
    ----------
    q, u : array_like
        Normalised Stokes parameters.
    covariance : array_like, (..., 2, 2)
        Their covariance.
    level : float
        Probability content, between 0 and 1.
    kind : str
        "bayes": shortest, prior flat in p >= 0 (Vaillancourt 2006); "bayes-qu": shortest, prior flat in (q, u)
        (Quinn 2012); "frequentist": covers the truth with this probability whatever it is, for equal errors,
        and on the average over its angle for general ones (Feldman & Cousins 1998; see `belt`).

    Returns
    -------
    low, high : ndarray
        Fractions >= 0, as q. NaN where an input is NaN or the covariance is not positive. An error ellipse
        longer than 30:1 is treated as one of 30:1 with the same major axis.

    Raises
    ------
    InputError
        Unknown kind, level outside (0, 1), or shapes that do not match.
    """
    if kind not in KINDS:
        raise InputError(f'kind = "{kind}": expected one of {", ".join(KINDS)}')
    return _evaluate(kind, level, q, u, covariance)


def upper_limit(q: ArrayLike, u: ArrayLike, covariance: ArrayLike, level: float = 0.95) -> Array:
    """One-sided upper limit: the true p is below it with probability ``level``, prior flat in p >= 0.

    NaN policy and errors as `interval`. At p = 0 with equal errors the 95 percent limit is 1.9600 sigma.
    """
    return _evaluate("upper", level, q, u, covariance)[1]
