"""Moments of q, u under a general covariance: p, its error, the error ellipse, the test against zero.

The geometry used by every other module of the folder is derived here once. With n the direction of the
measured vector in the (q, u) plane, the variance of p is the one along n and the bias of p comes from the
one across n (Montier et al. 2015, A&A 574, A135; formulas confirmed by Monte Carlo).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError

Array = NDArray[np.float64]

# A determinant below this part of the variances' product is lost in the rounding of the covariance itself.
SINGULAR = 1e-12


@dataclass(frozen=True)
class Geometry:
    """The measured vector and its covariance, as every estimator needs them.

    Attributes
    ----------
    p, phase : array
        Length, and direction atan2(u, q) in radians, of the measured vector.
    along, across : array
        Variance along and across the measured vector; at p = 0 both are the mean variance.
    unit : array
        Square root of the mean of the two eigenvalues.
    stretch : array
        Natural logarithm of the axial ratio of the error ellipse, 0 for equal uncorrelated errors.
    tilt : array
        Angle between the vector and the major axis, folded into [0, pi/2], radians.
    """

    p: Array
    phase: Array
    along: Array
    across: Array
    unit: Array
    stretch: Array
    tilt: Array

    def __getitem__(self, index: object) -> Geometry:
        return Geometry(**{name: getattr(self, name)[index] for name in self.__dataclass_fields__})


def components(q: ArrayLike, u: ArrayLike, covariance: ArrayLike) -> tuple[Array, Array, Array, Array, Array]:
    """Broadcast q, u, var(q), var(u), cov(q, u); all NaN where anything is NaN or the covariance is not positive."""
    matrix = np.asarray(covariance, dtype=float)
    if matrix.shape[-2:] != (2, 2):
        raise InputError(f"covariance has shape {matrix.shape}: expected (..., 2, 2)")
    try:
        parts = np.broadcast_arrays(
            np.asarray(q, dtype=float),
            np.asarray(u, dtype=float),
            matrix[..., 0, 0],
            matrix[..., 1, 1],
            0.5 * (matrix[..., 0, 1] + matrix[..., 1, 0]),
        )
    except ValueError:
        raise InputError(
            f"q {np.shape(q)}, u {np.shape(u)} and covariance {matrix.shape} do not match: "
            "expected one shape for q and u, and (..., 2, 2) for the covariance"
        ) from None
    finite = np.logical_and.reduce([np.isfinite(part) for part in parts])
    q_, u_, vq, vu, cov = (np.where(finite, part, np.nan) for part in parts)
    product = vq * vu
    good = (vq > 0) & (vu > 0) & (product - cov**2 > SINGULAR * product)
    q_, u_, vq, vu, cov = (np.where(good, part, np.nan) for part in (q_, u_, vq, vu, cov))
    return q_, u_, vq, vu, cov


def geometry(q: ArrayLike, u: ArrayLike, covariance: ArrayLike) -> Geometry:
    """Vector and covariance turned into the quantities the estimators work on."""
    q_, u_, vq, vu, cov = components(q, u, covariance)
    p = np.hypot(q_, u_)
    mean, half = 0.5 * (vq + vu), np.hypot(0.5 * (vq - vu), cov)
    phase = np.arctan2(u_, q_)
    projected = 0.5 * (vq - vu) * np.cos(2 * phase) + cov * np.sin(2 * phase)
    projected = np.where(p == 0, 0.0, projected)
    tilt = phase - 0.5 * np.arctan2(2 * cov, vq - vu)
    major = mean + half
    # The small eigenvalue as determinant over large one: the difference mean - half would cancel.
    minor = (vq * vu - cov**2) / major
    # A linear form on a nearly degenerate ellipse can round below its smallest value.
    return Geometry(
        p=p,
        phase=phase,
        along=np.maximum(mean + projected, minor),
        across=np.maximum(mean - projected, minor),
        unit=np.sqrt(mean),
        stretch=np.maximum(0.5 * np.log(major / minor), 0.0),
        tilt=np.arctan2(np.abs(np.sin(tilt)), np.abs(np.cos(tilt))),
    )


def p_and_error(q: ArrayLike, u: ArrayLike, covariance: ArrayLike) -> tuple[Array, Array]:
    """Degree of polarisation, not de-biased, and its standard error.

    Parameters
    ----------
    q, u : array_like
        Normalised Stokes parameters.
    covariance : array_like, (..., 2, 2)
        Their covariance.

    Returns
    -------
    p, p_err : ndarray
        sqrt(q^2 + u^2), and the square root of the variance along (q, u); at p = 0, where no direction is
        preferred, the root of the mean variance. NaN where an input is NaN or the covariance is not positive.
    """
    g = geometry(q, u, covariance)
    return g.p, np.sqrt(g.along)


def ellipse(q: ArrayLike, u: ArrayLike, covariance: ArrayLike) -> tuple[Array, Array, Array]:
    """Error ellipse of one standard deviation in the (q, u) plane.

    Returns
    -------
    major, minor : ndarray
        Semi-axes, in the unit of q (39.35 percent of a normal distribution lies inside).
    angle : ndarray
        Direction of the major axis from +q towards +u, degrees in [0, 180): an angle of the (q, u) plane,
        twice a position angle. 0 for a circle. NaN policy as `p_and_error`.
    """
    _, _, vq, vu, cov = components(q, u, covariance)
    mean, half = 0.5 * (vq + vu), np.hypot(0.5 * (vq - vu), cov)
    angle = np.mod(np.degrees(0.5 * np.arctan2(2 * cov, vq - vu)), 180.0)
    return np.sqrt(mean + half), np.sqrt((vq * vu - cov**2) / (mean + half)), np.where(angle == 180.0, 0.0, angle)


def null_p_value(q: ArrayLike, u: ArrayLike, covariance: ArrayLike) -> Array:
    """Probability that noise alone gives a vector this far from zero: exp(-z C^-1 z / 2).

    Equal errors: exp(-p^2 / 2 sigma^2), so that 0.05 is passed at p = 2.4477 sigma. NaN policy as `p_and_error`.
    """
    q_, u_, vq, vu, cov = components(q, u, covariance)
    distance = (q_**2 * vu + u_**2 * vq - 2 * q_ * u_ * cov) / (vq * vu - cov**2)
    return np.exp(-0.5 * distance)
