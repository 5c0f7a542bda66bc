"""From the fluxes of one visit to its adopted Stokes parameters: cycles, outliers, errors, nulls, photon limit."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation import (
    Suspect,
    demodulate,
    fit_counts,
    half_turn_null,
    photon_covariance,
    plate_suspects,
)
from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.fluxes import Fluxes
from hwpol.statistics import adopt, combine, null_p_value
from hwpol.stokes import Stokes

Array = NDArray[np.float64]

#: Chance below which repeats are said to differ (variability, nulls): one in a thousand visits of clean data.
DOUBT = 1e-3


@dataclass(frozen=True)
class VisitSolution:
    """What one visit says, for S sources and C cycles.

    Attributes
    ----------
    stokes : Stokes, shape (S,)
        Adopted values and random covariance, on the sky where calibrated.
    observed : Stokes, shape (S,)
        Instrument frame, uncalibrated, from the counts.
    cycles, observed_cycles : Stokes, shape (S, C)
        On the sky where calibrated; instrument frame, uncalibrated.
    kept : ndarray of bool, shape (S, C)
        Cycles that took part.
    count_covariance, scatter_covariance : ndarray, shape (S, 2, 2)
    null : ndarray, shape (S, 2)
    null_covariance : ndarray, shape (S, 2, 2)
    photon_covariance : ndarray, shape (S, 2, 2)
        Of the observed (q, u), from source photons alone.
    chi2, dof : ndarray, shape (S,)
    gain, gain_err : ndarray, shape (S, B)
    frames_used : ndarray of int, shape (S,)
    flags : ndarray of int, shape (S,)
    suspects : tuple of Suspect
        Frames left out because they do not fit their wave-plate angle.
    """

    stokes: Stokes
    observed: Stokes
    cycles: Stokes
    observed_cycles: Stokes
    kept: NDArray[np.bool_]
    count_covariance: Array
    scatter_covariance: Array
    null: Array
    null_covariance: Array
    photon_covariance: Array
    chi2: Array
    dof: NDArray[np.int_]
    gain: Array
    gain_err: Array
    frames_used: NDArray[np.int_]
    flags: NDArray[np.int_]
    suspects: tuple[Suspect, ...] = ()


def solve_visit(
    fluxes: Fluxes,
    *,
    method: str = "least-squares",
    gain: str = "visit",
    circular: bool = False,
    calibration: Any = None,
) -> VisitSolution:
    """Solve one visit: every cycle, the outliers among them, and all kept cycles together.

    Parameters
    ----------
    fluxes : Fluxes
    method, gain, circular, calibration
        As `hwpol.demodulate`.
    """
    options: dict[str, Any] = {"method": method, "gain": gain, "circular": circular}
    suspects = plate_suspects(fluxes, gain=gain, calibration=calibration)
    bad = np.isin(np.arange(fluxes.shape[1]), [suspect.frame for suspect in suspects])
    fluxes = replace(fluxes, flux=np.where(bad[:, None], np.nan, fluxes.flux))
    cycles = demodulate(fluxes, per="cycle", calibration=calibration, **options)
    combined = combine(cycles.q, cycles.u, cycles.random_covariance)
    solvable = np.isfinite(cycles.q)
    set_aside = solvable & ~combined.kept & (np.sum(solvable, axis=1) > 3)[:, None]
    numbers = np.unique(fluxes.cycle)
    dropped = set_aside[:, np.searchsorted(numbers, fluxes.cycle)]
    used = replace(fluxes, flux=np.where(dropped[:, :, None], np.nan, fluxes.flux))

    stokes = demodulate(used, calibration=calibration, **options)
    observed = stokes if calibration is None else demodulate(used, **options)
    count = stokes.random_covariance
    scatter = combined.scatter_covariance
    repeats = combined.dof > 0
    adopted, excess = adopt(count, scatter, combined.chi2, combined.dof)
    covariance = stokes.covariance.copy()
    covariance[..., :2, :2] = np.where(repeats[:, None, None], adopted, count)

    null, null_covariance, photon, ratio, ratio_err = _diagnose(used, gain, calibration, circular)
    flags = stokes.flags.copy()
    complete = _complete_cycles(fluxes)
    flags |= np.where(complete.all(), 0, int(Flag.INCOMPLETE_CYCLE))
    flags |= np.where(set_aside.any(axis=1), int(Flag.CYCLE_SET_ASIDE), 0)
    flags |= np.where(excess, int(Flag.EXCESS_SCATTER), 0)
    flags |= int(Flag.PLATE_SUSPECT) if suspects else 0
    flags |= np.where(repeats, 0, int(Flag.NO_REPEATS))
    with np.errstate(invalid="ignore"):
        flags |= np.where(_null_probability(null, null_covariance) < DOUBT, int(Flag.NULL_FAILED), 0)
        flags |= np.where(_trend(cycles, solvable & ~set_aside) < DOUBT, int(Flag.CYCLE_VARIABLE), 0)
    dof = np.where(repeats, combined.dof, np.broadcast_to(stokes.dof, repeats.shape)).astype(int)
    dof = np.where(np.isfinite(stokes.q), dof, -1)
    return VisitSolution(
        stokes=replace(stokes, covariance=covariance, flags=flags),
        observed=observed,
        cycles=cycles,
        observed_cycles=cycles if calibration is None else demodulate(fluxes, per="cycle", **options),
        kept=solvable & ~set_aside,
        count_covariance=count,
        scatter_covariance=np.where(repeats[:, None, None], scatter, np.nan),
        null=null,
        null_covariance=null_covariance,
        photon_covariance=photon,
        chi2=np.where(repeats, combined.chi2, np.broadcast_to(stokes.chi2, repeats.shape)),
        dof=dof,
        gain=ratio,
        gain_err=ratio_err,
        frames_used=np.isfinite(used.flux).any(axis=2).sum(axis=1),
        flags=flags,
        suspects=tuple(suspects),
    )


def _diagnose(fluxes: Fluxes, gain: str, calibration: Any, circular: bool) -> tuple[Array, Array, Array, Array, Array]:
    sources, _, beams = fluxes.shape
    try:
        solution = fit_counts(fluxes, gain=gain)
    except InputError:
        nothing, matrix = np.full((sources, 2), np.nan), np.full((sources, 2, 2), np.nan)
        return nothing, matrix, matrix, np.full((sources, beams), np.nan), np.full((sources, beams), np.nan)
    null, null_covariance = half_turn_null(fluxes, gain=gain, calibration=calibration, circular=circular)
    return null, null_covariance, photon_covariance(fluxes, solution, gain=gain), solution.gain, solution.gain_err


def _trend(cycles: Stokes, kept: NDArray[np.bool_]) -> Array:
    """Chance that noise makes the second half of the kept cycles differ so much from the first, shape (S,)."""
    number = np.cumsum(kept, axis=1)
    total = number[:, -1:]
    halves = []
    for half in (kept & (2 * number <= total), kept & (2 * number > total)):
        part = combine(np.where(half, cycles.q, np.nan), np.where(half, cycles.u, np.nan), cycles.random_covariance)
        halves.append(part)
    first, second = halves
    return np.asarray(null_p_value(first.q - second.q, first.u - second.u, first.covariance + second.covariance))


def _null_probability(null: Array, covariance: Array) -> Array:
    return np.asarray(null_p_value(null[:, 0], null[:, 1], covariance))


def _complete_cycles(fluxes: Fluxes) -> NDArray[np.bool_]:
    """Which cycles hold every position that the visit holds."""
    from hwpol.demodulation.modulation import positions

    if np.all(np.isnan(fluxes.wave_plate)):
        return np.ones(len(np.unique(fluxes.cycle)), dtype=bool)
    period = 180.0 if np.all(fluxes.retardance == 180.0) else 360.0
    places = np.round(positions(fluxes.wave_plate, period=period), 6)
    every = set(places)
    return np.asarray([set(places[fluxes.cycle == cycle]) == every for cycle in np.unique(fluxes.cycle)])
