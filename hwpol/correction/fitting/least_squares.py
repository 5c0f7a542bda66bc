"""Generalised least squares over standard stars whose catalogue errors are common to their visits.

Every standard star carries one error of its catalogue value, common to all its visits, so that the covariance of the
observations is

    C = diag(measurement) + G (K_star + tau^2) G^T   (blocks, one a star),

G the slopes of the observed with the sky value. Since stars are independent, sums over stars (normal matrix, right
hand, square) give any fit that leaves stars out at once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2 as chi2_distribution

from hwpol.correction.model import AMPLITUDE, Array, Complex, Setting, basis, real_pair
from hwpol.linear import invert
from hwpol.stokes import instrument_from_sky, observed_slopes, real_slopes, sky_slopes


@dataclass(frozen=True)
class Data:
    """Observations (n) and stars (s) of one filter.

    Attributes
    ----------
    z : Complex, shape (n,)
        Observed, instrument frame.
    covariance : Array, shape (n, 2, 2)
    star : shape (n,), int
        Number of the star of each observation.
    where : Setting
    sky : Complex, shape (s,)
        Catalogue value on the sky, 0 for zero-polarised stars.
    sky_covariance : Array, shape (s, 2, 2)
    """

    z: Complex
    covariance: Array
    star: NDArray[np.int_]
    where: Setting
    sky: Complex
    sky_covariance: Array

    @property
    def polarised(self) -> NDArray[np.bool_]:
        """Which stars are polarised standards, shape (s,)."""
        return np.abs(self.sky) > 0


@dataclass(frozen=True)
class Linear:
    """Design (n, 2, p), values (n, 2) and slopes with the star's sky value (n, 2, 2), about a current ip and A."""

    design: Array
    values: Array
    slopes: Array


@dataclass(frozen=True)
class Sums:
    """Per star: normal matrix (s, p, p), right hand (s, p), square, log determinant (s,) and number of values (s,)."""

    normal: Array
    right: Array
    square: Array
    logdet: Array
    count: NDArray[np.int_]


@dataclass(frozen=True)
class Frame:
    """Which parameters are free: theta = start + turn . gamma, gamma free."""

    start: Array
    turn: Array


@dataclass(frozen=True)
class Solution:
    """Parameters (p,), covariance (p, p), chi2, dof; NaN parameters where the data do not determine them."""

    theta: Array
    covariance: Array
    chi2: float
    dof: int

    @property
    def determined(self) -> bool:
        """Whether the data determine all free parameters."""
        return bool(np.all(np.isfinite(self.theta)))

    @property
    def chance(self) -> float:
        """Chance of a chi2 at least as large."""
        return float(chi2_distribution.sf(self.chi2, self.dof)) if self.dof > 0 else 1.0


def linearise(data: Data, names: tuple[str, ...], ip: Complex, amplitude: complex) -> Linear:
    """Linear form of the model about current values: only the denominator and the slopes depend on them."""
    z = instrument_from_sky(data.sky[data.star], data.where.chi, data.where.sense)
    below = 1 + np.real(np.conj(ip / amplitude) * z)
    factors = basis(names, data.where)
    steps = {"a_re": z, "a_im": 1j * z}
    columns = np.array([steps.get(name, factor) for name, factor in zip(names, factors, strict=True)])
    design = np.moveaxis(real_pair(columns / below), 0, -1)
    to_sky = real_slopes(*sky_slopes(data.where.chi, data.where.sense))
    slopes = real_slopes(*observed_slopes(z, ip, amplitude)) @ np.linalg.inv(to_sky)
    return Linear(design, real_pair(data.z), slopes)


def add_up(data: Data, linear: Linear, scatter: tuple[float, float]) -> Sums:
    """Sums of every star, with the intrinsic scatter of (zero-polarised, polarised) stars in the weights."""
    stars, parameters = len(data.sky), linear.design.shape[-1]
    extra = np.where(data.polarised, scatter[1], scatter[0]) ** 2
    own = data.sky_covariance + extra[:, None, None] * np.eye(2)
    count = np.bincount(data.star, minlength=stars)
    out = Sums(
        np.zeros((stars, parameters, parameters)), np.zeros((stars, parameters)), np.zeros(stars), np.zeros(stars),
        2 * count,
    )  # fmt: skip
    for visits in np.unique(count[count > 0]):
        chosen = np.flatnonzero(count == visits)
        rows = np.array([np.flatnonzero(data.star == s) for s in chosen]) if visits > 1 else _singles(data.star, chosen)
        size = 2 * int(visits)
        slopes = linear.slopes[rows].reshape(len(chosen), size, 2)
        block = slopes @ own[chosen] @ np.swapaxes(slopes, -1, -2)
        for k in range(int(visits)):
            block[:, 2 * k : 2 * k + 2, 2 * k : 2 * k + 2] += data.covariance[rows[:, k]]
        weight = np.linalg.inv(block)
        design = linear.design[rows].reshape(len(chosen), size, parameters)
        values = linear.values[rows].reshape(len(chosen), size)
        weighted = weight @ design
        out.normal[chosen] = np.swapaxes(design, -1, -2) @ weighted
        out.right[chosen] = np.einsum("sip,si->sp", weighted, values)
        out.square[chosen] = np.einsum("si,sij,sj->s", values, weight, values)
        out.logdet[chosen] = np.linalg.slogdet(block)[1]
    return out


def _singles(star: NDArray[np.int_], chosen: NDArray[np.int_]) -> NDArray[np.int_]:
    place = np.empty(int(star.max()) + 1, dtype=int)
    place[star] = np.arange(len(star))
    return place[chosen][:, None]


def solve(sums: Sums, frame: Frame, kept: NDArray[np.bool_]) -> Solution:
    """Fit the free parameters to the stars kept."""
    return _solve(sums.normal[kept].sum(axis=0), sums.right[kept].sum(axis=0), float(sums.square[kept].sum()),
                  int(sums.count[kept].sum()), frame)  # fmt: skip


def _solve(normal: Array, right: Array, square: float, count: int, frame: Frame) -> Solution:
    turn, start = frame.turn, frame.start
    free = turn.shape[1]
    inner = turn.T @ normal @ turn
    inverse = invert(inner) if free else np.zeros((0, 0))
    gamma = inverse @ (turn.T @ (right - normal @ start))
    theta = start + turn @ gamma
    chi2 = square - 2 * theta @ right + theta @ normal @ theta
    return Solution(theta, turn @ inverse @ turn.T, max(float(chi2), 0.0), count - free)


@dataclass(frozen=True)
class Alone:
    """Fits without each star in turn: parameters (s, p), chi2, dof (s,) and whether the others determine them (s,)."""

    theta: Array
    chi2: Array
    dof: NDArray[np.int_]
    determined: NDArray[np.bool_]


def leave_one_out(sums: Sums, frame: Frame, kept: NDArray[np.bool_]) -> Alone:
    """Fits to the stars kept without each star in turn; a star not kept leaves them as they are."""
    share = kept.astype(float)
    normal = sums.normal[kept].sum(axis=0) - share[:, None, None] * sums.normal
    right = sums.right[kept].sum(axis=0) - share[:, None] * sums.right
    square = sums.square[kept].sum() - share * sums.square
    count = sums.count[kept].sum() - kept * sums.count
    turn, start = frame.turn, frame.start
    free = turn.shape[1]
    theta = np.broadcast_to(start, right.shape)
    if free:
        inverse = invert(turn.T @ normal @ turn)
        theta = start + np.einsum("pf,sfg,sg->sp", turn, inverse, (right - normal @ start) @ turn)
    chi2 = square - 2 * np.sum(theta * right, axis=-1) + np.einsum("si,sij,sj->s", theta, normal, theta)
    return Alone(theta, np.maximum(chi2, 0.0), count - free, np.isfinite(theta).all(axis=-1) & (count > 0))


def free_frame(names: tuple[str, ...], active: set[str], amplitude: complex, mode: str) -> Frame:
    """Which parameters are free: the ip terms in `active`, and A as `mode` says.

    "fit": both parts; "angle": its angle alone, |A| kept; "held": none.
    """
    start = np.zeros(len(names))
    start[-2:] = amplitude.real, amplitude.imag
    columns = [np.eye(len(names))[k] for k, name in enumerate(names) if name in active and name not in AMPLITUDE]
    if mode == "fit":
        columns += [np.eye(len(names))[-2], np.eye(len(names))[-1]]
        start[-2:] = 0.0
    elif mode == "angle":
        tangent = np.zeros(len(names))
        tangent[-2:] = -amplitude.imag, amplitude.real
        columns.append(tangent)
    return Frame(start, np.array(columns).T.reshape(len(names), len(columns)))
