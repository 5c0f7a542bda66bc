"""Master flats, and the polarisation of the lamp that the flats themselves betray.

Each flat is divided by its own level in each beam's strip before it is combined, so that lamp drifts, and a polarised
lamp's unequal beams, leave no trace in the mean. A strip's flat has median 1: the throughput ratio of the beams stays
in the data, where the demodulation fits it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from hwpol.frames.combine import combine_frames
from hwpol.frames.masters import SAMPLE, Master
from hwpol.instrument.description import Section
from hwpol.pixels import Box, PixelMask

LIT_FRACTION = 0.2
"""Pixels below this part of a strip's median level are taken as not illuminated."""
GAP = 5
"""Dark areas that hold a square of so many pixels are gaps between strips; smaller ones are bad pixels."""
LEAST_ELECTRONS = 1000.0
"""A flat with fewer electrons a pixel is underexposed: it would add more than 3 percent noise (common practice)."""
LEAST_LEVEL = 0.2
"""... or with less than this part of the median level of the flats."""
MOST_SATURATED = 0.05
SIGNIFICANT = 5.0


@dataclass(frozen=True)
class FlatFrame:
    """One flat: `psi` deg (NaN unknown), `exposure` s, `gain` electron/adu."""

    file: str
    exposure: float
    psi: float
    gain: float


@dataclass(frozen=True)
class Lamp:
    """Polarisation of the flat-field lamp in the instrument frame, fractions; NaN where the flats cannot tell.

    `q_err, u_err` include the flats' own scatter about the fit; `significance` is the square root of chi-square of
    (q, u) against zero.
    """

    q: float
    u: float
    q_err: float
    u_err: float
    significance: float

    @property
    def p(self) -> float:
        """Degree of polarisation."""
        return float(np.hypot(self.q, self.u))


def strip_level(image: NDArray[np.float32]) -> tuple[float, int, float]:
    """Level of the illuminated part of a strip.

    Returns
    -------
    level : float
        Mean of the illuminated pixels without their lowest and highest 5 percent; scales exactly with the image.
    number : int
        Pixels that made it.
    lost : float
        Part of the strip without a value.
    """
    step = max(1, int(np.sqrt(image.size / SAMPLE)))
    sample = image[::step, ::step]
    values = sample[np.isfinite(sample)]
    lost = 1.0 - values.size / max(sample.size, 1)
    if values.size == 0:
        return float("nan"), 0, lost
    reference = np.percentile(values, 95)
    for _ in range(2):
        lit = values[values > LIT_FRACTION * reference]
        if lit.size == 0:
            return float("nan"), 0, lost
        reference = np.median(lit)
    low, high = np.percentile(lit, (5, 95))
    middle = lit[(lit >= low) & (lit <= high)]
    return float(middle.mean(dtype=float)), int(middle.size), lost


def usable_flats(
    flats: Sequence[FlatFrame],
    image: Callable[[FlatFrame, Box | None], NDArray[np.float32]],
    strips: Sequence[Section],
) -> tuple[list[FlatFrame], dict[str, list[tuple[float, float]]], list[str]]:
    """Measure the level of each flat in each strip and leave out what cannot serve.

    Parameters
    ----------
    flats : sequence of FlatFrame
    image : callable
        ``image(flat, box)``: adu without bias and dark, NaN where saturated or blank.
    strips : sequence of Section

    Returns
    -------
    kept : list of FlatFrame
    levels : dict
        File to (level in adu, its relative photon variance) in each strip, for the flats kept.
    left_out : list of str
        A sentence for each flat left out.
    """
    measured: dict[str, list[tuple[float, float]]] = {}
    reasons: dict[str, str] = {}
    for flat in flats:
        whole = image(flat, None)
        rows = [strip_level(whole[s.y0 : s.y1, s.x0 : s.x1]) for s in strips]
        lost = max(row[2] for row in rows)
        level = min(row[0] for row in rows)
        if lost > MOST_SATURATED:
            reasons[flat.file] = f"saturated or without a value in {100 * lost:.0f} percent of a strip"
        elif not level * flat.gain > LEAST_ELECTRONS:
            reasons[flat.file] = (
                f"underexposed: {level * flat.gain:.0f} electrons a pixel, {LEAST_ELECTRONS:.0f} wanted"
            )
        measured[flat.file] = [(v, 1.0 / max(v * flat.gain * n, 1.0)) for v, n, _ in rows]
    good = [flat for flat in flats if flat.file not in reasons]
    if good:
        typical = np.median([[v for v, _ in measured[flat.file]] for flat in good], axis=0)
        for flat in good:
            ratio = min(v / t for (v, _), t in zip(measured[flat.file], typical, strict=True))
            if ratio < LEAST_LEVEL:
                reasons[flat.file] = f"underexposed: {100 * ratio:.0f} percent of the typical level of the flats"
    kept = [flat for flat in flats if flat.file not in reasons]
    left_out = [f"flat {file} left out: {reason}" for file, reason in reasons.items()]
    return kept, {flat.file: measured[flat.file] for flat in kept}, left_out


def combine_flats(
    flats: Sequence[FlatFrame],
    image: Callable[[FlatFrame, Box | None], NDArray[np.float32]],
    strips: Sequence[Section],
    levels: dict[str, list[tuple[float, float]]],
    shape: tuple[int, int],
    key: str,
) -> Master:
    """Combine flats into a master with median 1 over the illuminated area of each strip.

    Pixels without light (below 0.2 of the strip's median) get flat 1, and mask OUTSIDE where they form a gap, BAD
    where they stand alone. Pixels in no strip get flat 1 and no mask: the beams' sections rule there.
    """
    nx = shape[1]

    def load(i: int, y0: int, y1: int) -> NDArray[np.float32]:
        adu = image(flats[i], Box(0, y0, nx, y1))
        scaled = np.full_like(adu, np.nan)
        for strip, (level, _) in zip(strips, levels[flats[i].file], strict=True):
            rows, columns = slice(max(strip.y0 - y0, 0), max(strip.y1 - y0, 0)), slice(strip.x0, strip.x1)
            scaled[rows, columns] = adu[rows, columns] / np.float32(level)
        return scaled

    result = combine_frames(load, len(flats), shape)
    layers = np.zeros((3, *shape), np.float32)
    layers[0] = 1.0
    for number, strip in enumerate(strips):
        photons = sum(1.0 / (flat.gain * levels[flat.file][number][0]) for flat in flats) / len(flats) ** 2
        cut = (slice(strip.y0, strip.y1), slice(strip.x0, strip.x1))
        mean, variance = result.mean[cut], result.variance[cut]
        reference = np.nanmedian(mean[mean > LIT_FRACTION]) if (mean > LIT_FRACTION).any() else 1.0
        dark = ~(mean > LIT_FRACTION * reference)
        gap = ndimage.binary_opening(dark, np.ones((GAP, GAP), bool))
        layers[0][cut] = np.where(dark, 1.0, mean / reference)
        known = np.where(np.isfinite(variance), variance, np.float32(photons) * mean)
        layers[1][cut] = np.where(dark, 0.0, known / reference**2)
        layers[2][cut] = np.where(gap, PixelMask.OUTSIDE, np.where(dark, PixelMask.BAD, 0))
    return Master(layers, key)


def lamp_polarisation(
    levels: NDArray[np.float64],
    relative_variance: NDArray[np.float64],
    psi: NDArray[np.float64],
    analysers: Sequence[float],
    retardance: float = 180.0,
) -> Lamp:
    """Polarisation of the lamp from the levels of flats taken at several wave-plate angles.

    For a pair of beams with crossed analysers, half the logarithm of the ratio of their levels is a constant (their
    gain ratio) plus artanh(a q + b u), with a = (1 + cos d)/2 cos 2 alpha + (1 - cos d)/2 cos(4 psi - 2 alpha), b the
    same with sines, d the retardance, alpha the analyser of the first of the pair.

    Parameters
    ----------
    levels, relative_variance : ndarray, shape (flat, beam)
        Level of each beam's strip in one unit, and variance / level**2 from the photons.
    psi : ndarray, shape (flat,)
        Angle of the wave plate's fast axis, instrument frame, deg.
    analysers : sequence of float
        Angle of each beam's analyser, deg.
    retardance : float
        deg.

    Returns
    -------
    Lamp
        Errors are the photons', or the scatter about the fit where that is larger. NaN without a crossed pair, or
        when the angles do not determine q, u and the constants.
    """
    nan = float("nan")
    unknown = Lamp(nan, nan, nan, nan, nan)
    used = np.isfinite(psi) & np.all(levels > 0.0, axis=1)
    pairs = [
        (i, j)
        for i in range(len(analysers))
        for j in range(i + 1, len(analysers))
        if abs((analysers[i] - analysers[j]) % 180.0 - 90.0) < 1.0
    ]
    if not pairs or used.sum() < 3:
        return unknown
    levels, relative_variance, angle = levels[used], relative_variance[used], np.deg2rad(psi[used])
    constant, turning = 0.5 * (1 + np.cos(np.deg2rad(retardance))), 0.5 * (1 - np.cos(np.deg2rad(retardance)))
    rows, values, variances = [], [], []
    for number, (i, j) in enumerate(pairs):
        alpha = np.deg2rad(analysers[i])
        row = np.zeros((len(angle), 2 + len(pairs)))
        row[:, 0] = constant * np.cos(2 * alpha) + turning * np.cos(4 * angle - 2 * alpha)
        row[:, 1] = constant * np.sin(2 * alpha) + turning * np.sin(4 * angle - 2 * alpha)
        row[:, 2 + number] = 1.0
        rows.append(row)
        values.append(0.5 * np.log(levels[:, i] / levels[:, j]))
        variances.append(0.25 * (relative_variance[:, i] + relative_variance[:, j]))
    matrix, value, variance = np.concatenate(rows), np.concatenate(values), np.concatenate(variances)
    if np.linalg.matrix_rank(matrix, tol=1e-3) < matrix.shape[1]:
        return unknown
    weight = 1.0 / np.sqrt(variance)
    normalised = matrix * weight[:, None]
    solution: NDArray[Any] = np.zeros(matrix.shape[1])
    # artanh(s) - s is of third order: a few rounds settle it for any lamp in use.
    for _ in range(20):
        s = np.clip(matrix[:, :2] @ solution[:2], -0.99, 0.99)
        solution = np.linalg.lstsq(normalised, (value - np.arctanh(s) + s) * weight, rcond=None)[0]
    s = np.clip(matrix[:, :2] @ solution[:2], -0.99, 0.99)
    residual = (value - np.arctanh(s) + s - matrix @ solution) * weight
    dof = len(value) - matrix.shape[1]
    excess = max(1.0, float(residual @ residual) / dof) if dof > 0 else 1.0
    covariance = np.linalg.inv(normalised.T @ normalised)[:2, :2] * excess
    q, u = solution[:2]
    significance = float(np.sqrt(solution[:2] @ np.linalg.solve(covariance, solution[:2])))
    q_err, u_err = np.sqrt(np.diag(covariance))
    return Lamp(float(q), float(u), float(q_err), float(u_err), significance)
