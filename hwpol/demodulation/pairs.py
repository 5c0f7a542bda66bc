"""Double difference and double ratio: frames whose wave-plate angles lie 45 deg apart swap the two beams.

With o, e the two beams and F = (o - e)/(o + e), a pair (1, 2) gives the modulation m of its first angle as

    difference   m = (F1 - F2) / 2
    ratio        m = (R - 1) / (R + 1),   R^2 = (o1 / e1) / (o2 / e2)

(Tinbergen 1996, *Astronomical Polarimetry*; the ratio form as in the ISIS polarimetry manual of Tinbergen &
Rutten, Isaac Newton Group). The ratio is exact for any constant gain; the difference comes out as
m (1 - eps^2) / (1 - eps^2 m^2) for gain ratio g, eps = (g - 1)/(g + 1).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation.modulation import positions
from hwpol.errors import InputError
from hwpol.linear import solve
from hwpol.stokes import angle_difference

Array = NDArray[np.float64]


def find_pairs(wave_plate: Array, tolerance: float = 1.0) -> list[tuple[NDArray[np.int_], NDArray[np.int_]]]:
    """Group frames by position and pair the positions 45 deg apart; psi and psi + 90 are kept apart if both pair."""
    centres = positions(wave_plate, tolerance, 360.0)
    places = np.unique(np.round(centres, 9))
    members = {place: np.flatnonzero(np.abs(centres - place) < 1e-6) for place in places}
    taken: set[float] = set()
    pairs = []
    for place in places:
        if place in taken:
            continue
        for wanted in (45.0, 135.0, 225.0, 315.0):
            partner = next(
                (
                    other
                    for other in places
                    if other not in taken
                    and other != place
                    and abs((other - place - wanted + 180) % 360 - 180) <= tolerance
                ),
                None,
            )
            if partner is not None:
                taken |= {place, partner}
                pairs.append((members[place], members[partner]))
                break
    return pairs


def check_beams(analyser: Array) -> None:
    """Refuse anything but two beams with perpendicular analysers, the same in every frame."""
    if analyser.shape[1] != 2:
        raise InputError(
            f"method: the pair methods need two beams, found {analyser.shape[1]}; use method = 'least-squares'"
        )
    if np.any(np.abs(np.abs(angle_difference(analyser[:, 0], analyser[:, 1])) - 90.0) > 1e-6):
        raise InputError(
            "method: the pair methods need analysers 90 deg apart; use method = 'least-squares' for others"
        )


def solve_pairs(
    flux: Array, variance: Array, rows: Array, wave_plate: Array, method: str, tolerance: float = 1.0
) -> tuple[Array, Array, Array, NDArray[np.int_]]:
    """Solve q, u of S sources from pairs.

    Parameters
    ----------
    flux, variance : ndarray, shape (S, K, 2)
    rows : ndarray, shape (K, 2, 3)
        From `modulation_rows`; half the difference of the first beam's rows within a pair is what m measures.
    wave_plate : ndarray, shape (K,)
    method : {"double-difference", "double-ratio"}

    Returns
    -------
    z (S, 2), covariance (S, 2, 2), chi2 (S,), dof (S,)
        NaN where the pairs do not determine q and u.

    Raises
    ------
    InputError
        When no two positions lie 45 deg apart.
    """
    pairs = find_pairs(wave_plate, tolerance)
    if not pairs:
        raise InputError(
            f"method = {method!r}: no two wave-plate positions lie 45 deg apart; use method = 'least-squares'"
        )
    measured, noise, design = [], [], []
    for first, second in pairs:
        total, spread = [], []
        for members in (first, second):
            counts, errors = flux[:, members], variance[:, members]
            kept = np.all(np.isfinite(counts) & np.isfinite(errors), axis=2, keepdims=True)
            some = kept.any(axis=(1, 2))[:, None]
            total.append(np.where(some, np.sum(np.where(kept, counts, 0.0), axis=1), np.nan))
            spread.append(np.where(some, np.sum(np.where(kept, errors, 0.0), axis=1), np.nan))
        with np.errstate(invalid="ignore", divide="ignore"):
            m, v = _pair_value(total, spread, method)
        measured.append(m)
        noise.append(v)
        design.append((rows[first, 0, :2].mean(axis=0) - rows[second, 0, :2].mean(axis=0)) / 2)
    values, errors = np.stack(measured, axis=1), np.stack(noise, axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        weights = np.where(np.isfinite(values) & (errors > 0), 1 / errors, 0.0)
    fit = solve(np.asarray(design), values, weights)
    return fit.parameters, fit.covariance, fit.chi2, fit.dof


def _pair_value(total: list[Array], spread: list[Array], method: str) -> tuple[Array, Array]:
    if method == "double-ratio":
        (o1, e1), (o2, e2) = total[0].T, total[1].T
        ratio = np.sqrt((o1 / e1) / (o2 / e2))
        m = (ratio - 1) / (ratio + 1)
        relative = sum(s.T[b] / t.T[b] ** 2 for s, t in zip(spread, total, strict=True) for b in (0, 1))
        positive = (o1 > 0) & (e1 > 0) & (o2 > 0) & (e2 > 0)
        return np.where(positive, m, np.nan), (1 - m**2) ** 2 / 16 * relative
    normalised, noise = [], []
    for t, s in zip(total, spread, strict=True):
        o, e = t.T
        normalised.append((o - e) / (o + e))
        noise.append(4 * (e**2 * s.T[0] + o**2 * s.T[1]) / (o + e) ** 4)
    return (normalised[0] - normalised[1]) / 2, (noise[0] + noise[1]) / 4
