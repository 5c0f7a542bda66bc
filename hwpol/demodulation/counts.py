"""The exact model solved on counts: many sources at once, any angles, any gains, any p.

    f_kb = S_k g_b [1 + x_kb(z)],    x_kb linear in the observed z, for many (k, b)

S_k (brightness of the source in frame k) is eliminated analytically; the
logarithms of the gains and z are found by Gauss-Newton steps. Ratios of
counts are never formed, so that faint and negative fluxes do no harm.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.linear import invert

Array = NDArray[np.float64]
Integers = NDArray[np.int_]

#: x (S, K, B) and its slopes (S, K, B, P) at z (S, P).
Modulation = Callable[[Array], tuple[Array, Array]]

#: A Gauss-Newton step below this changes nothing that float64 counts can carry.
CONVERGED = 1e-12
#: Largest step in z and in ln g at once: a step of one half keeps the first steps of strongly polarised
#: sources inside the physical region.
LARGEST_STEP = 0.5
#: Share of the given variance below which the model's own photon noise may not push it.
LOWEST_SHARE = 0.05
#: Information on q or u, per frame and relative to an ideal set of angles, below which they are not determined
#: (an error thirty times the ideal one).
LEAST_INFORMATION = 1e-3
MAX_STEPS = 60


@dataclass(frozen=True)
class Gains:
    """Which gain parameter each datum has.

    Attributes
    ----------
    index : ndarray of int, shape (K, B)
        0 for none, else 1 + the number of the parameter.
    number : int
    fixed : ndarray, shape (K, B)
        Known ln g that is added to whatever is fitted.
    prior, prior_variance : ndarray, shape (S or 1, number)
        Gaussian prior of each ln g (variance inf: none).
    """

    index: Integers
    number: int
    fixed: Array
    prior: Array
    prior_variance: Array


@dataclass(frozen=True)
class CountFit:
    """Result of `solve_counts`; S sources, P of z, G gains.

    `residual` (S, K, B) is (observed - model) / sigma, NaN where unused; `scale` (S, K) is S_k.
    """

    z: Array
    covariance: Array
    log_gain: Array
    log_gain_variance: Array
    scale: Array
    residual: Array
    chi2: Array
    dof: Integers


def _expand(values: Array, index: Integers) -> Array:
    """Gain parameters (S, G) as (S, K, B); 0 where a datum has none."""
    padded = np.concatenate([np.zeros((values.shape[0], 1)), values], axis=1)
    return padded[:, index]


def _design(slopes: Array, below: Array, gains: Gains) -> Array:
    """Slopes of ln(model) with respect to (z, ln g), shape (S, K, B, P + G), times the model elsewhere."""
    sources, frames, beams, size = slopes.shape
    design = np.zeros((sources, frames, beams, size + gains.number))
    design[..., :size] = slopes
    for k in range(gains.number):
        design[..., size + k] = np.where(gains.index == k + 1, below, 0.0)
    return design


def _information(weight: Array, shape: Array, design: Array) -> tuple[Array, Array]:
    """Normal matrix with S_k eliminated, and sum_b w h^2, for unit S_k."""
    cross = np.einsum("skb,skb,skbp->skp", weight, shape, design)
    norm = np.einsum("skb,skb->sk", weight, shape**2)
    safe = np.where(norm > 0, norm, 1.0)
    full = np.einsum("skb,skbp,skbr->skpr", weight, design, design)
    return full - cross[..., :, None] * cross[..., None, :] / safe[..., None, None], norm


def information(valid: NDArray[np.bool_], slopes: Array, gains: Gains) -> Array:
    """Information on z per frame, shape (S, P, P), of unit-weight data at z = 0: what the angles alone can do."""
    weight = valid.astype(float)
    ones = np.ones_like(weight)
    matrix, norm = _information(weight, ones, _design(slopes, ones, gains))
    total = matrix.sum(axis=1)
    size = slopes.shape[-1]
    if gains.number:
        inner = total[:, size:, size:] + np.eye(gains.number) * np.where(
            np.isfinite(gains.prior_variance), 1e12, 0.0
        ).reshape(-1, gains.number, 1)
        empty = np.einsum("sgg->sg", inner) < 1e-9
        inner = inner + np.einsum("sg,gh->sgh", empty.astype(float), np.eye(gains.number))
        cross = total[:, :size, size:]
        inverse = invert(inner)
        inverse = np.where(np.isfinite(inverse), inverse, 0.0)
        reduced = total[:, :size, :size] - cross @ inverse @ np.swapaxes(cross, -1, -2)
    else:
        reduced = total
    used = np.maximum((norm > 0).sum(axis=1), 1)
    return reduced / used[:, None, None]


def solve_counts(flux: Array, variance: Array, modulation: Modulation, size: int, gains: Gains) -> CountFit:
    """Fit z, the gains and the brightness of each frame to counts.

    Parameters
    ----------
    flux, variance : ndarray, shape (S, K, B)
        Electrons; data that are not finite take no part.
    modulation : callable
        z (S, size) -> x (S, K, B) and dx/dz (S, K, B, size).
    size : int
        2 for (q, u), 3 for (q, u, v).
    gains : Gains

    Returns
    -------
    CountFit
        NaN where the data do not determine z.

    Notes
    -----
    Weights use the variance that the model predicts, var + min(1, var / f) (model - f), so that a downward
    fluctuation does not gain weight: with weights from the counts themselves z would be biased at low counts.
    """
    sources = flux.shape[0]
    valid = np.isfinite(flux) & np.isfinite(variance) & (variance > 0)
    data = np.where(valid, flux, 0.0)
    noise = np.where(valid, variance, 1.0)
    with np.errstate(over="ignore"):
        share = np.where(data > noise, noise / np.where(data > noise, data, 1.0), 1.0)
    prior_weight = np.where(np.isfinite(gains.prior_variance), 1 / gains.prior_variance, 0.0)
    prior_weight = np.broadcast_to(prior_weight, (sources, gains.number))
    prior = np.broadcast_to(gains.prior, (sources, gains.number))

    z = np.zeros((sources, size))
    log_gain = _first_gains(data, valid, gains, prior, prior_weight)
    predicted = noise
    for step in range(MAX_STEPS):
        x, slopes = modulation(z)
        below = 1 + x
        throughput = np.exp(gains.fixed + _expand(log_gain, gains.index))
        shape = throughput * below
        for _ in range(1 if step else 2):
            weight = np.where(valid, 1 / predicted, 0.0)
            norm = np.einsum("skb,skb->sk", weight, shape**2)
            scale = np.einsum("skb,skb,skb->sk", weight, shape, data) / np.where(norm > 0, norm, 1.0)
            model = scale[..., None] * shape
            predicted = np.where(valid, np.maximum(noise + share * (model - data), LOWEST_SHARE * noise), 1.0)
        weight = np.where(valid, 1 / predicted, 0.0)
        norm = np.einsum("skb,skb->sk", weight, shape**2)
        scale = np.einsum("skb,skb,skb->sk", weight, shape, data) / np.where(norm > 0, norm, 1.0)
        model = scale[..., None] * shape
        design = _design(slopes * throughput[..., None], shape, gains)
        matrix, _ = _information(weight, shape, design)
        normal = np.einsum("sk,skpr->spr", scale**2, matrix)
        gradient = np.einsum("skb,sk,skbp,skb->sp", weight, scale, design, data - model)
        if gains.number:
            diagonal = np.einsum("spp->sp", normal)[:, size:]
            idle = (diagonal <= 0) & (prior_weight == 0)
            normal[:, size:, size:] += np.einsum("sg,gh->sgh", prior_weight + idle, np.eye(gains.number))
            gradient[:, size:] += prior_weight * (prior - log_gain)
        covariance = invert(normal)
        move = np.einsum("spr,sr->sp", np.where(np.isfinite(covariance), covariance, 0.0), gradient)
        longest = np.max(np.abs(move), axis=1, initial=0.0)
        move *= np.minimum(1.0, LARGEST_STEP / np.maximum(longest, LARGEST_STEP))[:, None]
        z = z + move[:, :size]
        log_gain = log_gain + move[:, size:]
        if step > 2 and np.all(longest < CONVERGED * (1 + np.max(np.abs(z), axis=1, initial=0.0))):
            break

    residual = np.where(valid, (data - model) / np.sqrt(predicted), np.nan)
    chi2 = np.nansum(residual**2, axis=(1, 2))
    used = valid.sum(axis=(1, 2)) - (norm > 0).sum(axis=1)
    free = np.sum((prior_weight == 0) & ~idle, axis=1) if gains.number else 0
    solved = np.all(np.isfinite(covariance), axis=(1, 2))
    return CountFit(
        z=np.where(solved[:, None], z, np.nan),
        covariance=covariance[:, :size, :size],
        log_gain=np.where(solved[:, None], log_gain, np.nan),
        log_gain_variance=np.einsum("spp->sp", covariance)[:, size:],
        scale=scale,
        residual=residual,
        chi2=np.where(solved, chi2, np.nan),
        dof=np.asarray(used - size - free, dtype=int),
    )


def explain_counts(
    flux: Array, variance: Array, modulation: Modulation, z: Array, log_gain: Array, gains: Gains
) -> tuple[Array, Array]:
    """Brightness S_k (S, K) and residuals (S, K, B) of counts for a given z and given gains."""
    valid = np.isfinite(flux) & np.isfinite(variance) & (variance > 0)
    x, _ = modulation(z)
    shape = np.exp(gains.fixed + _expand(log_gain, gains.index)) * (1 + x)
    weight = np.where(valid, 1 / np.where(valid, variance, 1.0), 0.0)
    norm = np.einsum("skb,skb->sk", weight, shape**2)
    scale = np.einsum("skb,skb,skb->sk", weight, shape, np.where(valid, flux, 0.0)) / np.where(norm > 0, norm, 1.0)
    residual = np.where(valid, (flux - scale[..., None] * shape) * np.sqrt(weight), np.nan)
    return scale, residual


def _first_gains(data: Array, valid: NDArray[np.bool_], gains: Gains, prior: Array, prior_weight: Array) -> Array:
    """Start values of ln g from the sums of counts where both the first beam and this one were counted."""
    start = np.where(prior_weight > 0, prior, 0.0)
    both = valid & valid[..., :1]
    for k in range(gains.number):
        here = (gains.index == k + 1) & both
        own = np.sum(np.where(here, data, 0.0), axis=(1, 2))
        first = np.sum(np.where(here, data[..., :1], 0.0), axis=(1, 2))
        known = (own > 0) & (first > 0) & (prior_weight[:, k] == 0)
        start[:, k] = np.where(known, np.log(np.where(known, own / np.where(first > 0, first, 1.0), 1.0)), start[:, k])
    return start
