"""Combination of repeated measurements, in q and u only, and the tests that go with it.

p and theta of an average are those of the averaged q and u: p is never averaged, for its bias does not average out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import chdtrc

from hwpol.errors import InputError
from hwpol.statistics.moments import Array, components

FALSE_ALARM = 0.005  # probability that a set without outliers, whatever its scatter, loses a member
# Probability of chi2 below which the repeats are believed rather than the counts. A scatter of 2.5 times the
# counts' errors passes it in 84 percent of sets of 4 repeats and in 99 of 8 (73 and 97 at 0.001), while clean data
# pay with errors too large by half a percent on the average.
EXCESS = 0.01
_MEDIAN = float(np.sqrt(2 * np.log(2)))  # median distance from the centre of a bivariate normal, in sigma
_ITERATIONS = 20
_CORE = 0.05  # sigma; distance below which a point no longer draws the spatial median onto itself


@dataclass(frozen=True)
class Combined:
    """Weighted mean of repeats of (q, u).

    Attributes
    ----------
    q, u : ndarray (...)
        Inverse-covariance weighted mean of the repeats kept.
    covariance : ndarray (..., 2, 2)
        Internal: what the covariances of the repeats (the counts) imply.
    chi2, dof : ndarray (...)
        Of the repeats kept about the mean; dof = 2 (kept - 1).
    scatter_covariance : ndarray (..., 2, 2)
        External: what the scatter of the repeats kept implies, unbiased for any number of them
        (of rank one for two). NaN for fewer than two.
    kept : ndarray of bool (..., N)
        False for repeats set aside as outliers, and for those that are NaN or have no positive covariance.
    """

    q: Array
    u: Array
    covariance: Array
    chi2: Array
    dof: NDArray[np.int64]
    scatter_covariance: Array
    kept: NDArray[np.bool_]


@dataclass(frozen=True)
class Variability:
    """Test of a constant (q, u): chi2 about the best constant, degrees of freedom, and chance of a larger chi2."""

    chi2: float
    dof: int
    p_value: float


def _times(matrix: Array, vector: Array) -> Array:
    """Products of 2 x 2 matrices and vectors, written out: einsum is several times slower on many small ones."""
    x, y = vector[..., 0], vector[..., 1]
    return np.stack([matrix[..., 0, 0] * x + matrix[..., 0, 1] * y, matrix[..., 1, 0] * x + matrix[..., 1, 1] * y], -1)


def _centre(vectors: Array, weights: Array) -> Array:
    """Weighted mean (m, 2) of vectors (m, n, 2) with weights (m, n, 2, 2)."""
    return _times(_inverse(weights.sum(axis=1)), _times(weights, vectors).sum(axis=1))


def _inverse(matrix: Array) -> Array:
    """Inverse of symmetric 2 x 2 matrices; NaN where not positive."""
    a, b, d = matrix[..., 0, 0], matrix[..., 0, 1], matrix[..., 1, 1]
    det = a * d - b * b
    det = np.where(det > 0, det, np.nan)
    return np.stack([np.stack([d, -b], axis=-1), np.stack([-b, a], axis=-1)], axis=-2) / det[..., None, None]


def _inverse_root(matrix: Array) -> Array:
    """Symmetric inverse square root of positive 2 x 2 matrices; NaN where rounding has left none."""
    det = matrix[..., 0, 0] * matrix[..., 1, 1] - matrix[..., 0, 1] ** 2
    trace = np.trace(matrix, axis1=-2, axis2=-1)
    positive = (det > 0) & (trace > 0)
    scale = np.sqrt(np.where(positive, det, np.nan))[..., None, None]
    norm = np.sqrt(np.where(positive, trace, np.nan)[..., None, None] + 2 * scale)
    return _inverse((matrix + scale * np.eye(2)) / norm)


def _distance(vectors: Array, centre: Array, weights: Array) -> Array:
    residual = vectors - centre[:, None, :]
    return np.sqrt(np.maximum((residual * _times(weights, residual)).sum(axis=-1), 0.0))


def _scatter(vectors: Array, mean: Array, weights: Array, kept: NDArray[np.bool_], internal: Array) -> Array:
    """Covariance of the weighted mean from the residuals alone.

    Residuals are smaller than the errors by the part each repeat has in the mean; undoing that one by one makes
    the sum unbiased for any number of repeats wherever their covariances are right up to a common factor.
    """
    enough = kept & (kept.sum(axis=1) > 1)[:, None]
    half = np.linalg.cholesky(np.where(enough[..., None, None], weights, np.eye(2)))
    turned = np.swapaxes(half, -1, -2)
    left = np.eye(2) - turned @ internal[:, None] @ half
    left = np.where(enough[..., None, None], left, np.eye(2))
    white = _times(turned, np.where(enough[..., None], vectors - mean[:, None, :], 0.0))
    pulled = _times(half, _times(_inverse_root(left), white))
    spread = (pulled[..., :, None] * pulled[..., None, :]).sum(axis=1)
    return np.where(enough.any(axis=1)[:, None, None], internal @ spread @ internal, np.nan)


def _outliers(vectors: Array, weights: Array, valid: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Repeats too far from the spatial median, in units of the larger of their own error and the set's scatter.

    The limit sqrt(2 ln(n / FALSE_ALARM)) is that of n known normal errors; 20 / n, from simulation, allows for a
    scatter estimated from few repeats. Sets of three or fewer are left alone: they cannot tell which is wrong.
    """
    count = valid.sum(axis=1)
    shown = np.where(valid[..., None], vectors, np.nan)
    sets = np.flatnonzero(count > 3)
    out = np.zeros_like(valid)
    if not sets.size:
        return out
    vectors, weights, valid, count = vectors[sets], weights[sets], valid[sets], count[sets]
    centre = np.nanmedian(shown[sets], axis=1)
    for _ in range(_ITERATIONS):
        pull = 1.0 / np.maximum(_distance(vectors, centre, weights), _CORE)
        centre = _centre(vectors, weights * pull[..., None, None])
    distance = np.where(valid, _distance(vectors, centre, weights), np.nan)
    scale = np.maximum(np.nanmedian(distance, axis=1) / _MEDIAN, 1.0)
    limit = scale * (np.sqrt(2 * np.log(count / FALSE_ALARM)) + 20.0 / count)
    out[sets] = distance > limit[:, None]
    return out


def combine(q: ArrayLike, u: ArrayLike, covariance: ArrayLike) -> Combined:
    """Robust mean of repeated measurements over the last axis.

    Parameters
    ----------
    q, u : array_like (..., N)
        Repeats of the normalised Stokes parameters, with independent errors.
    covariance : array_like (..., N, 2, 2)
        Their covariances.

    Returns
    -------
    Combined
        Arrays of the leading shape. One outlier among many is set aside if it lies beyond about five
        standard errors (16 repeats) or nine (4 repeats), counted in the set's own scatter where that exceeds
        the errors, so that an overall excess rejects nothing. All NaN where no repeat can be used.

    Raises
    ------
    InputError
        No last axis, or shapes that do not match.
    """
    q_, u_, vq, vu, cov = components(q, u, covariance)
    if q_.ndim == 0:
        raise InputError("q has no axis of repeats: expected arrays (..., N)")
    lead, number = q_.shape[:-1], q_.shape[-1]
    sets = int(np.prod(lead))  # -1 would not do where there are no repeats at all
    valid = np.isfinite(q_).reshape(sets, number)
    vectors = np.stack([q_, u_], axis=-1).reshape(sets, number, 2)
    matrices = np.stack([np.stack([vq, cov], axis=-1), np.stack([cov, vu], axis=-1)], axis=-2).reshape(
        sets, number, 2, 2
    )
    # Unusable repeats take part as zeros of no weight, so that the sums stay free of NaN.
    weights = np.where(valid[..., None, None], _inverse(matrices), 0.0)
    vectors = np.where(valid[..., None], vectors, 0.0)
    kept = valid & ~_outliers(vectors, weights, valid)
    weights = np.where(kept[..., None, None], weights, 0.0)
    mean = _centre(vectors, weights)
    internal = _inverse(weights.sum(axis=1))
    count = kept.sum(axis=1)
    chi2 = np.where(count > 0, (np.where(kept, _distance(vectors, mean, weights), 0.0) ** 2).sum(axis=1), np.nan)
    scatter = _scatter(vectors, mean, weights, kept, internal)
    return Combined(
        q=mean[:, 0].reshape(lead),
        u=mean[:, 1].reshape(lead),
        covariance=internal.reshape(*lead, 2, 2),
        chi2=chi2.reshape(lead),
        dof=(2 * np.maximum(count - 1, 0)).reshape(lead),
        scatter_covariance=scatter.reshape(*lead, 2, 2),
        kept=kept.reshape(*lead, number),
    )


def adopt(
    count_covariance: ArrayLike, scatter_covariance: ArrayLike, chi2: ArrayLike, dof: ArrayLike, limit: float = EXCESS
) -> tuple[Array, NDArray[np.bool_]]:
    """Covariance to quote for a mean: from the counts, or from the repeats where they demand it.

    Parameters
    ----------
    count_covariance, scatter_covariance : array_like (..., 2, 2)
        Internal and external covariance of the mean, as in `Combined`.
    chi2, dof : array_like (...)
        As in `Combined`.
    limit : float
        The repeats are believed where a chi2 so large has a chance below this.

    Returns
    -------
    covariance : ndarray (..., 2, 2)
        Never below the counts' in any direction. A scatter matrix from few repeats is itself uncertain: it is
        drawn towards the counts' one scaled by chi2 / dof, with the weight of two repeats.
    from_scatter : ndarray of bool (...)
        Where the repeats were believed. Never with less than two of them.
    """
    counts, scatter = np.asarray(count_covariance, dtype=float), np.asarray(scatter_covariance, dtype=float)
    chi2_, dof_ = np.asarray(chi2, dtype=float), np.asarray(dof, dtype=float)
    lead = np.broadcast_shapes(counts.shape[:-2], scatter.shape[:-2], chi2_.shape, dof_.shape)
    counts, scatter = (np.broadcast_to(part, (*lead, 2, 2)) for part in (counts, scatter))
    chi2_, dof_ = np.broadcast_to(chi2_, lead), np.broadcast_to(dof_, lead)
    usable = (dof_ > 0) & np.isfinite(chi2_) & np.isfinite(scatter).all(axis=(-1, -2))
    usable &= np.isfinite(counts).all(axis=(-1, -2)) & (counts[..., 0, 0] > 0)
    usable &= counts[..., 0, 0] * counts[..., 1, 1] > counts[..., 0, 1] * counts[..., 1, 0]
    chance = chdtrc(np.where(usable, dof_, 1.0), np.where(usable, chi2_, 0.0))
    believed = usable & (chance < limit)
    root = np.linalg.cholesky(np.where(believed[..., None, None], counts, np.eye(2)))
    inverse = np.linalg.inv(root)
    flipped = np.swapaxes(inverse, -1, -2)
    ratio = inverse @ np.where(believed[..., None, None], scatter, np.eye(2)) @ flipped
    degrees = np.where(believed, 0.5 * dof_, 1.0)[..., None]
    factor = np.where(believed, chi2_ / np.where(dof_ > 0, dof_, 1.0), 1.0)[..., None]
    values, vectors = np.linalg.eigh(0.5 * (ratio + np.swapaxes(ratio, -1, -2)))
    values = np.maximum((degrees * values + 2.0 * factor) / (degrees + 2.0), 1.0)
    grown = root @ (vectors * values[..., None, :]) @ np.swapaxes(vectors, -1, -2) @ np.swapaxes(root, -1, -2)
    return np.where(believed[..., None, None], grown, counts), believed


def variability(
    q: ArrayLike,
    u: ArrayLike,
    covariance: ArrayLike,
    shared: ArrayLike | None = None,
    group: ArrayLike | None = None,
) -> Variability:
    """Test a time series of (q, u) against a constant, with the full covariance.

    Parameters
    ----------
    q, u : array_like (N,)
        The series. NaN entries, and those without a positive covariance, are left out.
    covariance : array_like (N, 2, 2)
        Covariance of the independent errors of each.
    shared : array_like (G, 2, 2), optional
        Covariance of an error that all members of a group have in common, such as a night's calibration.
    group : array_like of int (N,), optional
        Index into ``shared`` for each entry.

    Returns
    -------
    Variability
        p_value is NaN with fewer than two entries.

    Raises
    ------
    InputError
        Shapes that do not match, or only one of ``shared`` and ``group``.
    """
    q_, u_, vq, vu, cov = components(q, u, covariance)
    if q_.ndim != 1:
        raise InputError(f"q has shape {q_.shape}: expected one series (N,)")
    if (shared is None) != (group is None):
        raise InputError("shared and group belong together: one of them is missing")
    good = np.isfinite(q_)
    number = int(good.sum())
    if number < 2:
        return Variability(0.0, 0, np.nan)
    own = np.stack([np.stack([vq, cov], axis=-1), np.stack([cov, vu], axis=-1)], axis=-2)[good]
    full = np.zeros((number, 2, number, 2))
    full[np.arange(number), :, np.arange(number), :] = own
    if shared is not None:
        common, index = np.asarray(shared, dtype=float), np.asarray(group)
        if common.ndim != 3 or common.shape[1:] != (2, 2) or index.shape != q_.shape:
            raise InputError(f"shared {common.shape} and group {index.shape}: expected (G, 2, 2) and {q_.shape}")
        index = index[good]
        if index.min() < 0 or index.max() >= len(common):
            raise InputError(f"group holds {index.min()} to {index.max()}: expected 0 to {len(common) - 1}")
        same = index[:, None] == index[None, :]
        full += np.where(same[:, None, :, None], common[index][:, :, None, :], 0.0)
    matrix = full.reshape(2 * number, 2 * number)
    values = np.stack([q_, u_], axis=-1)[good].ravel()
    constant = np.tile(np.eye(2), (number, 1))
    lower = np.linalg.cholesky(matrix)
    white, design = np.linalg.solve(lower, values), np.linalg.solve(lower, constant)
    best = np.linalg.lstsq(design, white, rcond=None)[0]
    chi2 = float(((white - design @ best) ** 2).sum())
    dof = 2 * number - 2
    return Variability(chi2, dof, float(chdtrc(dof, chi2)))
