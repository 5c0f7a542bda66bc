"""Modulation: how much of Q, U and V each beam of each frame sees."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]


def modulation_rows(wave_plate: ArrayLike, analyser: ArrayLike, retardance: ArrayLike = 180.0) -> Array:
    """Return (a, b, c) of  f = T g / 2 [I + a Q + b U + c V]  for every frame and beam.

    Twice the first row of Analyser(alpha) . Retarder(delta, psi), instrument frame; for a perfect half-wave
    plate a = cos(4 psi - 2 alpha), b = sin(4 psi - 2 alpha), c = 0. The retarder matrix is that of Hecht,
    *Optics* (problem 8.82 of the 5th edition); the sign of c follows from it.

    Parameters
    ----------
    wave_plate : array_like, shape (frame,)
        psi (deg); NaN for no plate, then (a, b, c) = (cos 2 alpha, sin 2 alpha, 0).
    analyser : array_like, shape (frame, beam)
        alpha (deg).
    retardance : array_like, shape (frame,) or scalar
        delta (deg).

    Returns
    -------
    ndarray, shape (frame, beam, 3)
    """
    alpha = np.radians(2 * np.asarray(analyser, dtype=float))
    psi = np.asarray(wave_plate, dtype=float)
    bare = np.isnan(psi)
    angle = np.radians(2 * np.where(bare, 0.0, psi))[:, None]
    delta = np.radians(np.where(bare, 0.0, np.broadcast_to(np.asarray(retardance, dtype=float), psi.shape)))[:, None]
    mean, swing = (1 + np.cos(delta)) / 2, (1 - np.cos(delta)) / 2
    return np.stack(
        [
            mean * np.cos(alpha) + swing * np.cos(2 * angle - alpha),
            mean * np.sin(alpha) + swing * np.sin(2 * angle - alpha),
            np.sin(delta) * (np.cos(angle) * np.sin(alpha) - np.sin(angle) * np.cos(alpha)),
        ],
        axis=-1,
    )


def positions(wave_plate: ArrayLike, tolerance: float = 1.0, period: float = 180.0) -> Array:
    """Replace angles by the mean of the readings within `tolerance` (deg) of each other, modulo `period`."""
    psi = np.mod(np.asarray(wave_plate, dtype=float), period)
    result = psi.copy()
    order = np.argsort(psi)
    order = order[np.isfinite(psi[order])]
    if order.size == 0:
        return result
    sorted_psi = psi[order]
    group = np.concatenate([[0], np.cumsum(np.diff(sorted_psi) > tolerance)])
    if group[-1] > 0 and sorted_psi[0] + period - sorted_psi[-1] <= tolerance:
        last = group == group[-1]
        sorted_psi = np.where(last, sorted_psi - period, sorted_psi)
        group = np.where(last, 0, group)
    for number in np.unique(group):
        result[order[group == number]] = np.mean(sorted_psi[group == number])
    return result
