"""Estimators of the true degree of polarisation from a measured one.

Each estimator is a published function of p / sigma for equal, uncorrelated errors. Under a general covariance
sigma becomes b, the error across the measured vector: the bias of p is b^2 / 2p to leading order whatever the
error along it, which is how Plaszczynski et al. (2014, MNRAS 439, 4048) generalise theirs; the others follow
the same rule here, so that all agree with sqrt(p^2 - b^2) at high signal.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike
from scipy.interpolate import CubicSpline
from scipy.special import chndtr, i0e, i1e

from hwpol.errors import InputError
from hwpol.statistics.moments import Array, geometry
from hwpol.statistics.tables import root

Method = Literal["modified-asymptotic", "mode", "mean", "median", "maximum-likelihood", "asymptotic"]
METHODS: tuple[str, ...] = get_args(Method)

# Measured p / sigma below which an estimator is zero (Simmons & Stewart 1985, A&A 142, 100, as 1.00, 1.18, 1.25, 1.41).
THRESHOLDS = {
    "asymptotic": 1.0,
    "mode": 1.0,
    "median": float(np.sqrt(2 * np.log(2))),
    "mean": float(np.sqrt(np.pi / 2)),
    "maximum-likelihood": float(np.sqrt(2)),
}

_NODES = 400
_SCALE = 1.5  # signal above threshold, in sigma, at which half of the table's nodes are spent
_FAR = 60.0  # sigma; beyond it 1/(8 p^3) is below 1e-6 and sqrt(p^2 - 1) serves for every method


def modified_asymptotic(p: ArrayLike, b: ArrayLike) -> Array:
    """p - b^2 [1 - exp(-p^2/b^2)] / 2p (Plaszczynski et al. 2014, MNRAS 439, 4048); 0 at p = 0.

    Parameters
    ----------
    p, b : array_like
        Measured degree of polarisation and the error across it.
    """
    p_, b_ = np.asarray(p, dtype=float), np.asarray(b, dtype=float)
    safe = np.where(p_ == 0, 1.0, p_)
    return np.where(p_ == 0, 0.0 * b_, p_ + b_ * (b_ / safe) * 0.5 * np.expm1(-np.minimum((safe / b_) ** 2, 700.0)))


def _mean(p0: Array) -> Array:
    half = 0.25 * p0**2
    return np.sqrt(np.pi / 2) * ((1 + 2 * half) * i0e(half) + 2 * half * i1e(half))


def _mode_slope(p: Array, p0: Array) -> Array:
    """d f(p | p0) / dp, up to a positive factor, at the measured p (Wardle & Kronberg 1974, ApJ 194, 249)."""
    return (1 - p**2) * i0e(p * p0) + p * p0 * i1e(p * p0)


def _above_median(p: Array, p0: Array) -> Array:
    return 0.5 - chndtr(p**2, 2, p0**2)


def _likelihood_slope(p: Array, p0: Array) -> Array:
    return p0 - p * i1e(p * p0) / i0e(p * p0)


_SOLVED: dict[str, Callable[[Array, Array], Array]] = {
    "mode": _mode_slope,
    "mean": lambda p, p0: _mean(p0) - p,
    "median": _above_median,
    "maximum-likelihood": _likelihood_slope,
}


def exact(p: Array, method: str) -> Array:
    """Estimate of p0 for unit errors by root finding: the slow road that the tables follow.

    Parameters
    ----------
    p : ndarray
        Measured values in units of sigma, finite, below 60.
    method : str
        "mode", "mean", "median" or "maximum-likelihood".
    """
    condition = _SOLVED[method]
    # p0 = 0 solves the likelihood equation at every p: the search starts just above it.
    start = np.full(p.shape, 1e-9 if method == "maximum-likelihood" else 0.0)
    found = root(lambda p0: condition(p, p0), start, p + 1.0)
    return np.where(p <= THRESHOLDS[method], 0.0, found)


@lru_cache(maxsize=8)
def _table(method: str) -> CubicSpline:
    """Ratio of the estimate to sqrt(p^2 - K^2) against x = s / (s + scale), s = sqrt(p - K): smooth from 0 to 1."""
    threshold = THRESHOLDS[method]
    x = np.linspace(0.0, 1.0, _NODES)[1:-1]
    s = _SCALE * x / (1 - x)
    p = threshold + s**2
    near = p < _FAR
    ratio = np.ones(x.size)
    ratio[near] = exact(p[near], method) / np.sqrt(p[near] ** 2 - threshold**2)
    ratio[~near] = np.sqrt((p[~near] ** 2 - 1) / (p[~near] ** 2 - threshold**2))
    return CubicSpline(np.append(x, 1.0), np.append(ratio, 1.0))


def estimate(p: ArrayLike, b: ArrayLike, method: str = "modified-asymptotic") -> Array:
    """De-biased p from p and the error b across it; see `debias`."""
    if method not in METHODS:
        raise InputError(f'method = "{method}": expected one of {", ".join(METHODS)}')
    if method == "modified-asymptotic":
        return modified_asymptotic(p, b)
    p_, b_ = np.broadcast_arrays(np.asarray(p, dtype=float), np.asarray(b, dtype=float))
    ratio = p_ / b_
    excess = ratio - THRESHOLDS[method]
    root_excess = np.sqrt(np.maximum(excess, 0.0))
    shape = np.sqrt(np.maximum(ratio + THRESHOLDS[method], 0.0)) * root_excess
    if method != "asymptotic":
        shape = shape * _table(method)(root_excess / (root_excess + _SCALE))
    return b_ * shape


def debias(q: ArrayLike, u: ArrayLike, covariance: ArrayLike, method: str = "modified-asymptotic") -> Array:
    """De-biased degree of polarisation.

    Parameters
    ----------
    q, u : array_like
        Normalised Stokes parameters.
    covariance : array_like, (..., 2, 2)
        Their covariance.
    method : str
        "modified-asymptotic" (Plaszczynski et al. 2014; never negative, smooth, zero only at p = 0),
        "mode" (Wardle & Kronberg 1974, solved exactly), "mean" (Serkowski's: the measured p is taken for the
        mean of its distribution), "median", "maximum-likelihood" (Simmons & Stewart 1985), "asymptotic"
        (sqrt(p^2 - b^2)).

    Returns
    -------
    ndarray
        p0 >= 0. All but the first are 0 below their threshold. NaN where an input is NaN or the covariance
        is not positive.

    Raises
    ------
    InputError
        Unknown method, or shapes that do not match.
    """
    g = geometry(q, u, covariance)
    return estimate(g.p, np.sqrt(g.across), method)
