"""Frames that do not fit their wave-plate angle: a plate that did not move, or a mislabelled one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc, fdtrc

from hwpol.demodulation.demodulate import fit_counts
from hwpol.demodulation.modulation import modulation_rows, positions
from hwpol.fluxes import Fluxes
from hwpol.stokes import ROTATION_LIMIT

Array = NDArray[np.float64]

#: False alarms allowed per cycle.
FALSE_ALARMS = 5e-4
#: Cycles without which a bad frame cannot be told from its twins.
LEAST_CYCLES = 3
#: Brightest sources that take part: more add little and cost time.
MOST_SOURCES = 60
#: The largest share of the frames that may be suspected; beyond it the model itself is in doubt.
MOST_SUSPECTS = 0.25
#: chi2 per degree of freedom within which a position of the visit counts as the one a frame was really taken at.
ALIKE = 9.0


@dataclass(frozen=True)
class Suspect:
    """A frame that does not fit its angle.

    `frame` is its number, `chance` the probability of so large a misfit by noise, `position` the position of the
    visit (deg) that it fits instead; NaN where none does.
    """

    frame: int
    chance: float
    position: float


def plate_suspects(fluxes: Fluxes, *, gain: str = "visit", calibration: Any = None) -> list[Suspect]:
    """Find frames whose counts, all sources together, contradict the angle they are labelled with.

    Every frame is compared with what the others predict for it. The misfit of normalised brightness, summed over
    the sources, is chi square distributed; it is divided by the median misfit of the frames where that exceeds the
    errors, so that a night that scatters does not accuse its plate.

    Parameters
    ----------
    fluxes : Fluxes
        One visit with two or more beams.
    calibration : Calibration, optional
        Needed where the field turns.

    Returns
    -------
    list of Suspect
        Worst first; empty where fewer than three cycles leave the culprit open.
    """
    cycles = np.unique(fluxes.cycle)
    turning = calibration is None and np.ptp(fluxes.position_angle) > ROTATION_LIMIT
    if fluxes.shape[2] < 2 or len(cycles) < LEAST_CYCLES or turning or np.isnan(fluxes.wave_plate).any():
        return []
    chosen = _brightest(fluxes)
    per_cycle = max(fluxes.shape[1] / len(cycles), 1.0)
    suspects: list[Suspect] = []
    kept = np.ones(chosen.shape[1], dtype=bool)
    while kept.sum() > (1 - MOST_SUSPECTS) * len(kept):
        misfit, dof = _misfits(chosen, kept, gain, calibration)
        tested = kept & (dof > 0)
        if not tested.any():
            break
        worst = int(np.argmin(np.where(tested, chdtrc(np.maximum(dof, 1), misfit), 1.0)))
        if chdtrc(dof[worst], misfit[worst]) >= FALSE_ALARMS / per_cycle:
            break
        # What is typical must be told without the frame in question, which spoils the prediction of all others.
        without = kept.copy()
        without[worst] = False
        rest, rest_dof = _misfits(chosen, without, gain, calibration)
        chance = _chance(misfit[worst], int(dof[worst]), rest, rest_dof)
        if chance >= FALSE_ALARMS / per_cycle:
            break
        kept = without
        suspects.append(Suspect(worst, chance, _likely(chosen, kept, worst, gain, calibration)))
    return suspects if kept.sum() > (1 - MOST_SUSPECTS) * len(kept) else []


def _chance(misfit: float, dof: int, rest: Array, rest_dof: NDArray[np.int_]) -> float:
    """Probability of a misfit by noise; where the other frames scatter beyond their errors, by that scatter.

    A median of n squares is worth about 0.6 n of them (its efficiency is 2/pi).
    """
    used = rest_dof > 0
    if not used.any():
        return float(chdtrc(dof, misfit))
    usual = float(np.median(rest_dof[used]))
    typical = float(np.median(rest[used] / rest_dof[used])) / (1 - 2 / (9 * usual)) ** 3
    worth = max(0.6 * (used.sum() - 3), 1.0) * usual
    if typical <= 1:
        return float(chdtrc(dof, misfit))
    return float(fdtrc(dof, worth, misfit / dof / typical))


def _brightest(fluxes: Fluxes) -> Fluxes:
    total = np.nansum(fluxes.flux, axis=(1, 2))
    return fluxes.take_sources(np.argsort(-total, kind="stable")[:MOST_SOURCES])


def _misfits(fluxes: Fluxes, kept: NDArray[np.bool_], gain: str, calibration: Any) -> tuple[Array, NDArray[np.int_]]:
    """Misfit (K,) of each frame to the prediction of the other kept ones, and its degrees of freedom."""
    frames = fluxes.shape[1]
    misfit, dof = np.zeros(frames), np.zeros(frames, dtype=int)
    for k in map(int, np.flatnonzero(kept)):
        others = kept.copy()
        others[k] = False
        misfit[k], dof[k] = _misfit(fluxes, others, k, gain, calibration, None)
    return misfit, dof


def _misfit(
    fluxes: Fluxes, others: NDArray[np.bool_], k: int, gain: str, calibration: Any, psi: float | None
) -> tuple[float, int]:
    """Misfit of frame k, taken at `psi` instead of its label where given."""
    solution = fit_counts(fluxes.take_frames(others), gain=gain, calibration=calibration)
    one = fluxes.take_frames([k])
    rows = modulation_rows(one.wave_plate if psi is None else [psi], one.analyser, one.retardance)[0, :, :2]
    z, covariance = solution.fit.z[:, :2], solution.fit.covariance[:, :2, :2]
    if calibration is not None:
        z, covariance = _observed(one, z, covariance, calibration)
    throughput = np.where(np.isfinite(solution.gain), solution.gain, 1.0)
    expected = throughput * (1 + z @ rows.T)
    counts, variance = one.flux[:, 0], one.variance[:, 0]
    weight = np.where(np.isfinite(counts) & np.isfinite(variance), 1 / variance, 0.0)
    norm = np.sum(weight * expected**2, axis=1)
    scale = np.nansum(weight * expected * np.nan_to_num(counts), axis=1) / np.where(norm > 0, norm, 1.0)
    used = (weight > 0).sum(axis=1) - 1
    good = (used > 0) & np.isfinite(z).all(axis=1) & (scale > 0)
    # The prediction's own error, in z and in the gain, counts as error of the frame's counts.
    spread = np.einsum("bi,sij,bj->sb", rows, covariance, rows) / np.maximum(1 + z @ rows.T, 1e-3) ** 2
    spread = spread + (np.nan_to_num(solution.gain_err) / throughput) ** 2
    model = scale[:, None] * expected
    with np.errstate(invalid="ignore", divide="ignore"):
        pull = (np.nan_to_num(counts) - model) ** 2 * weight
        grown = 1 + spread * model**2 * weight
        misfit = np.where(weight > 0, pull / grown, 0.0).sum(axis=1)
    return float(misfit[good].sum()), int(used[good].sum())


def _observed(one: Fluxes, z: Array, covariance: Array, calibration: Any) -> tuple[Array, Array]:
    from hwpol.stokes import (
        carry,
        instrument_from_sky,
        observed_from_instrument,
        observed_slopes,
        real_slopes,
        sky_slopes,
    )

    chi, eta, sense = one.position_angle, one.parallactic, one.sense
    ip, amplitude = calibration.terms(one.filter, one.x, one.y, chi, eta, sense, one.mjd)
    inside = instrument_from_sky(z[:, :1] + 1j * z[:, 1:], chi, sense)
    observed = observed_from_instrument(inside, ip, amplitude)[:, 0]
    slopes = real_slopes(*observed_slopes(inside, ip, amplitude))[:, 0]
    slopes = slopes @ np.linalg.inv(real_slopes(*sky_slopes(chi, sense)))[0]
    return np.stack([observed.real, observed.imag], axis=-1), carry(covariance, slopes)


def _likely(fluxes: Fluxes, kept: NDArray[np.bool_], k: int, gain: str, calibration: Any) -> float:
    """Position of the visit that frame k fits, the one before it first; NaN where none fits."""
    places = positions(fluxes.wave_plate)
    before = [places[k - 1]] if k > 0 else []
    for place in [*before, *np.unique(np.round(places, 6))]:
        if abs((place - places[k] + 45) % 90 - 45) < 1e-6:
            continue
        misfit, dof = _misfit(fluxes, kept, k, gain, calibration, float(place))
        if dof > 0 and misfit < ALIKE * dof:
            return float(place)
    return float("nan")
