"""Weighted linear least squares for many small systems at once, with covariance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError

Array = NDArray[np.float64]

#: Ratio of the smallest to the largest eigenvalue of a scaled normal matrix below which its parameters are
#: taken as undetermined: rounding leaves about 1e-16 of it, a useful experiment far more than this.
RANK_LIMIT = 1e-10


@dataclass(frozen=True)
class LinearFit:
    """Result of `solve`.

    Attributes
    ----------
    parameters : ndarray, shape (..., p)
    covariance : ndarray, shape (..., p, p)
        From the weights alone (not scaled by chi2).
    chi2 : ndarray, shape (...)
    dof : ndarray, shape (...), int
    """

    parameters: Array
    covariance: Array
    chi2: Array
    dof: NDArray[np.int_]


def invert(matrix: ArrayLike) -> Array:
    """Invert symmetric positive matrices, shape (..., p, p); NaN where they are (nearly) singular.

    Rows and columns are scaled to a unit diagonal before the eigenvalues are
    judged, so that the units of the parameters do not matter.
    """
    normal = np.asarray(matrix, dtype=float)
    diagonal = np.einsum("...ii->...i", normal)
    good = np.all(np.isfinite(normal), axis=(-1, -2)) & np.all(diagonal > 0, axis=-1)
    scale = np.where(good[..., None] & (diagonal > 0), 1 / np.sqrt(np.where(diagonal > 0, diagonal, 1)), 1.0)
    scaled = normal * scale[..., :, None] * scale[..., None, :]
    identity = np.eye(normal.shape[-1])
    scaled = np.where(good[..., None, None], scaled, identity)
    values, vectors = np.linalg.eigh(scaled)
    good = good & (values[..., 0] > RANK_LIMIT * values[..., -1])
    safe = np.where(good[..., None], values, 1.0)
    inverse = np.einsum("...ij,...j,...kj->...ik", vectors, 1 / safe, vectors)
    inverse = inverse * scale[..., :, None] * scale[..., None, :]
    return np.where(good[..., None, None], inverse, np.nan)


def solve(design: ArrayLike, values: ArrayLike, weights: ArrayLike) -> LinearFit:
    """Solve  values = design . parameters  by weighted least squares.

    Parameters
    ----------
    design : array_like, shape (..., n, p)
    values : array_like, shape (..., n)
    weights : array_like, shape (..., n)
        One over the variance; 0 (or a NaN value) leaves a datum out.

    Returns
    -------
    LinearFit
        NaN where the data do not determine the parameters.

    Raises
    ------
    InputError
        When shapes do not fit or a weight is negative.
    """
    matrix, data, weight = (np.asarray(a, dtype=float) for a in (design, values, weights))
    if matrix.ndim < 2 or matrix.shape[-2] != data.shape[-1]:
        raise InputError(f"design of shape {matrix.shape} does not fit values of shape {data.shape}")
    used = np.isfinite(data) & np.isfinite(weight) & (weight != 0)
    if np.any(weight[np.broadcast_to(np.isfinite(weight), weight.shape)] < 0):
        raise InputError("weights: negative, expected one over a variance")
    weight = np.where(used, weight, 0.0)
    data = np.where(used, data, 0.0)
    normal = np.einsum("...np,...n,...nr->...pr", matrix, weight, matrix)
    right = np.einsum("...np,...n->...p", matrix, weight * data)
    covariance = invert(normal)
    parameters = np.einsum("...pr,...r->...p", covariance, right)
    residual = data - np.einsum("...np,...p->...n", matrix, parameters)
    chi2 = np.sum(weight * residual**2, axis=-1)
    return LinearFit(parameters, covariance, chi2, np.sum(used, axis=-1) - matrix.shape[-1])
