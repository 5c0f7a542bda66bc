"""Errors and intervals of the polarisation angle, from its exact distribution.

For a true vector of length p0 the direction of the measured one has a closed distribution, found by integrating
the bivariate normal over its length (Naghizadeh-Khouei & Clarke 1993, A&A 274, 968, for equal errors; the same
integral holds for any covariance). theta is half that direction.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr

from hwpol.errors import InputError
from hwpol.statistics.belt import normal_half_width
from hwpol.statistics.debias import estimate
from hwpol.statistics.intervals import LONGEST_EXACT
from hwpol.statistics.moments import Array, Geometry, geometry, null_p_value
from hwpol.statistics.posterior import variances
from hwpol.statistics.tables import ROUND, Table, not_tabulated, root

UNIFORM = 180.0 / np.sqrt(12.0)  # standard deviation of an angle of which nothing is known, degrees
_SCALE = 2.0  # p0 = scale x / (1 - x)
_LINE, _BULK = 241, 41
_NODES = 400  # Gauss-Legendre nodes over the directions that matter
_PANELS, _PANEL_NODES = 64, 6
_CHUNK = 2_000

_Both = Callable[[Array], Array]


def density(direction: Array, p0: Array, stretch: Array, tilt: Array) -> Array:
    """Density, per radian of the (q, u) plane, of the measured direction about the true one.

    Parameters
    ----------
    direction : ndarray
        Radians in [-pi, pi], twice the error of theta.
    p0, stretch, tilt : ndarray
        True length and shape of the ellipse, as `posterior`; all broadcast. For equal errors this is, with
        theta the error of the position angle, half of G(theta; P0) as published, which is per radian of theta.
    """
    along, across, cross = variances(stretch, tilt)
    det = along * across - cross**2
    det = np.where(stretch < ROUND, 1.0, np.maximum(det, 1.0 - np.tanh(stretch) ** 2))
    c, s = np.cos(direction), np.sin(direction)
    a = (across * c * c - 2 * cross * c * s + along * s * s) / det
    d = p0**2 * across / det
    t = p0 * (across * c - cross * s) / det / np.sqrt(a)
    main = np.sqrt(2 * np.pi) * t * ndtr(t) * np.exp(0.5 * np.minimum(t * t - d, 0.0))
    return (np.exp(-0.5 * d) + main) / (2 * np.pi * a * np.sqrt(det))


@lru_cache(maxsize=1)
def _legendre() -> tuple[Array, Array]:
    return np.polynomial.legendre.leggauss(_NODES)


def _window(p0: Array, stretch: Array) -> Array:
    """Half the range of directions that matter, radians: the circle until its far side is e^-32 down."""
    signal = p0 / np.sqrt(1 + np.tanh(stretch))
    return np.where(signal < 8.0, np.pi, 12.0 / np.maximum(signal, 8.0))


def spread(p0: Array, stretch: Array, tilt: Array) -> Array:
    """Root mean square error of theta, degrees, by quadrature; flat arrays, p0 finite."""
    nodes, weights = _legendre()
    out = np.empty_like(p0)
    for start in range(0, p0.size, _CHUNK):
        part = slice(start, start + _CHUNK)
        direction = _window(p0[part], stretch[part])[:, None] * nodes
        mass = density(direction, p0[part, None], stretch[part, None], tilt[part, None]) * weights
        out[part] = np.sqrt((mass * direction**2).sum(axis=1) / mass.sum(axis=1))
    return np.degrees(0.5 * out)


def half_width(p0: Array, stretch: Array, tilt: Array, level: float) -> Array:
    """Error of theta, degrees, that holds ``level`` of the distribution either side of the truth; flat arrays."""
    nodes, weights = np.polynomial.legendre.leggauss(_PANEL_NODES)
    fractions = 0.5 * (nodes + 1)
    out = np.empty_like(p0)
    for start in range(0, p0.size, _CHUNK):
        part = slice(start, start + _CHUNK)
        shape = p0[part, None], stretch[part, None], tilt[part, None]
        panel = _window(p0[part], stretch[part]) / _PANELS

        def both(direction: Array, shape: tuple[Array, Array, Array] = shape) -> Array:
            return density(direction, *shape) + density(-direction, *shape)

        places = (np.arange(_PANELS)[:, None] + fractions).ravel()
        mass = (both(panel[:, None] * places).reshape(-1, _PANELS, _PANEL_NODES) @ weights).cumsum(axis=1)
        mass = np.concatenate([np.zeros((mass.shape[0], 1)), mass], axis=1)
        wanted = level * mass[:, -1]
        first = np.minimum((mass[:, 1:] < wanted[:, None]).sum(axis=1), _PANELS - 1)
        missing = wanted - mass[np.arange(first.size), first]

        def surplus(
            x: Array, first: Array = first, panel: Array = panel, missing: Array = missing, both: _Both = both
        ) -> Array:
            return x * (both(panel[:, None] * (first[:, None] + x[:, None] * fractions)) @ weights) - missing

        out[part] = panel * (first + root(surplus, np.zeros(first.size), np.ones(first.size), exact=1e-9))
    return np.degrees(0.5 * out)


def _scaled(x: Array, stretch: Array, tilt: Array, level: float | None) -> Array:
    """Error times sqrt(1 + p0^2) over the error across, finite from no signal to infinite signal."""
    across = np.sqrt(variances(stretch, tilt)[1])
    normal = 1.0 if level is None else normal_half_width(level)
    out = np.full(x.shape, np.degrees(0.5) * normal)
    finite = x < 1
    p0 = _SCALE * x[finite] / (1 - x[finite])
    shape = p0, stretch[finite], tilt[finite]
    value = spread(*shape) if level is None else half_width(*shape, level)
    out[finite] = value * np.hypot(1.0, p0) / across[finite]
    return out


@lru_cache(maxsize=32)
def _table(level: float | None) -> Table:
    return Table(lambda x, stretch, tilt: _scaled(x, stretch, tilt, level), _LINE, _BULK)


def _evaluate(g: Geometry, p0: Array, level: float | None) -> Array:
    """Standard deviation (level None) or half-width of theta at the true length p0; NaN where g is."""
    out = np.full(g.p.shape, np.nan)
    good = np.isfinite(g.p)
    stretch, tilt = np.minimum(g.stretch[good], LONGEST_EXACT), g.tilt[good]
    tilt = np.where(stretch < ROUND, 0.0, tilt)
    signal = p0[good] / g.unit[good]
    exact = not_tabulated(stretch)
    value = np.empty_like(signal)
    if exact.any():
        shape = signal[exact], stretch[exact], tilt[exact]
        value[exact] = spread(*shape) if level is None else half_width(*shape, level)
    if not exact.all():
        rest = signal[~exact], stretch[~exact], tilt[~exact]
        tabulated = _table(level)(rest[0] / (rest[0] + _SCALE), *rest[1:])
        value[~exact] = tabulated * np.sqrt(variances(*rest[1:])[1]) / np.hypot(1.0, rest[0])
    out[good] = value
    return out


def theta_error(q: ArrayLike, u: ArrayLike, covariance: ArrayLike, method: str = "modified-asymptotic") -> Array:
    """Standard error of the polarisation angle.

    Parameters
    ----------
    q, u : array_like
        Normalised Stokes parameters.
    covariance : array_like, (..., 2, 2)
        Their covariance.
    method : str
        The estimator of `debias` that gives the signal.

    Returns
    -------
    ndarray
        Degrees: root mean square deviation of the angle about the truth, which is taken along (q, u) at the
        de-biased length. 180/sqrt(12) = 51.96 where that is zero, and never more; 28.65 sigma / p at high
        signal. NaN where an input is NaN or the covariance is not positive.
    """
    g = geometry(q, u, covariance)
    p0 = estimate(g.p, np.sqrt(g.across), method)
    return np.where(p0 == 0, UNIFORM, np.minimum(_evaluate(g, p0, None), UNIFORM))


def theta_interval(
    q: ArrayLike, u: ArrayLike, covariance: ArrayLike, level: float = 0.6827, method: str = "modified-asymptotic"
) -> tuple[Array, Array]:
    """Interval of the polarisation angle, symmetric about the measured one.

    Parameters
    ----------
    q, u, covariance, method
        As `theta_error`.
    level : float
        Probability content, between 0 and 1.

    Returns
    -------
    low, high : ndarray
        Degrees; low may be negative and high above 180, so that low <= theta <= high with theta in [0, 180).
        The full range theta - 90, theta + 90 where the angle is undetermined at this level: where the vector
        does not differ from zero with this confidence, so that no direction can be excluded. NaN policy as
        `theta_error`.
    """
    if not 0.0 < level < 1.0:
        raise InputError(f"level = {level}: expected a probability between 0 and 1, such as 0.6827")
    g = geometry(q, u, covariance)
    p0 = estimate(g.p, np.sqrt(g.across), method)
    undetermined = (null_p_value(q, u, covariance) >= 1 - level) | (p0 == 0)
    half = np.where(undetermined, 90.0, _evaluate(g, p0, float(level)))
    theta = np.mod(np.degrees(0.5 * g.phase), 180.0)
    theta = np.where(theta == 180.0, 0.0, theta)
    return theta - half, theta + half


def unwrap_theta(theta: ArrayLike) -> Array:
    """Angles along the last axis with jumps of 180 degrees removed: for display, never for averages.

    Parameters
    ----------
    theta : array_like
        Degrees, any range; NaN entries stay and are stepped over.
    """
    angle = np.array(theta, dtype=float)
    flat = angle.reshape(-1, angle.shape[-1]) if angle.size else angle
    for row in flat if angle.size else ():
        known = np.isfinite(row)
        row[known] = np.unwrap(row[known], period=180.0)
    return angle
