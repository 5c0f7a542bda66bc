"""Fluxes to Stokes parameters: the public verb."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation.counts import CountFit, solve_counts
from hwpol.demodulation.faint import with_faint
from hwpol.demodulation.models import as_beams, beams_model, determined, gains_of, model_of
from hwpol.demodulation.modulation import modulation_rows
from hwpol.demodulation.pairs import check_beams, solve_pairs
from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.fluxes import Fluxes
from hwpol.stokes import Stokes, mean_angle

Array = NDArray[np.float64]

METHODS = ("least-squares", "double-difference", "double-ratio")
GAINS = ("visit", "cycle", "night", "fixed")


def demodulate(
    fluxes: Fluxes,
    *,
    method: str = "least-squares",
    per: str = "visit",
    gain: str = "visit",
    circular: bool = False,
    calibration: Any = None,
) -> Stokes:
    """Recover q and u (and v) of every source.

    Parameters
    ----------
    fluxes : Fluxes
        One visit.
    method : {"least-squares", "double-difference", "double-ratio"}
        The last two need two perpendicular beams and wave-plate positions 45 deg apart.
    per : {"visit", "cycle"}
        "cycle" adds an axis: arrays (source, cycle).
    gain : {"visit", "cycle", "night", "fixed"}
        Throughput of the beams relative to the first: fitted per source and visit or cycle, or "fixed" to
        ``fluxes.throughput`` (with its error as a prior where given). "night" is "visit" here: only the
        reduction of a night sees other visits, and it hands their gain on as a throughput with its error.
    circular : bool
        Solve for v too; NaN where the angles and the retardance do not determine it.
    calibration : Calibration, optional
        Solve for the sky directly, each frame with its own chi, eta and instrumental polarisation.

    Returns
    -------
    Stokes
        Instrument frame as observed, or sky with `calibration`. NaN and ``Flag.UNDETERMINED`` where the
        angles do not determine q and u.

    Raises
    ------
    InputError
        Unknown option, or a pair method on data that cannot be paired.
    """
    for name, value, allowed in (
        ("method", method, METHODS),
        ("per", per, ("visit", "cycle")),
        ("gain", gain, GAINS),
    ):
        if value not in allowed:
            raise InputError(f"{name} = {value!r}: expected one of {', '.join(map(repr, allowed))}")
    if circular and method != "least-squares":
        raise InputError("circular = true needs method = 'least-squares'")
    if per == "cycle":
        return _per_cycle(fluxes, method=method, gain=gain, circular=circular, calibration=calibration)
    if method == "least-squares":
        solution = fit_counts(fluxes, gain=gain, circular=circular, calibration=calibration)
        return solution.stokes
    check_beams(fluxes.analyser)
    rows = modulation_rows(fluxes.wave_plate, fluxes.analyser, fluxes.retardance)
    z, covariance, chi2, dof = solve_pairs(fluxes.flux, fluxes.variance, rows, fluxes.wave_plate, method)
    stokes = _label(fluxes, z, covariance, chi2, dof, "instrument")
    return stokes if calibration is None else calibration.apply(stokes)


@dataclass(frozen=True)
class Solution:
    """A least-squares solve with what its diagnosis needs.

    `gain`, `gain_err` (S, B): throughput of each beam relative to the first (of the visit; NaN for "cycle").
    """

    stokes: Stokes
    fit: CountFit
    gain: Array
    gain_err: Array


def fit_counts(fluxes: Fluxes, *, gain: str = "visit", circular: bool = False, calibration: Any = None) -> Solution:
    """Solve one visit on counts by least squares; see `demodulate`."""
    sources, _, beams = fluxes.shape
    flux, variance = fluxes.flux, fluxes.variance
    if beams > 1:
        whole = np.isfinite(flux) & np.isfinite(variance)
        lonely = whole.sum(axis=2, keepdims=True) < 2
        flux = np.where(lonely, np.nan, flux)
    size = 3 if circular else 2
    gains = gains_of(fluxes, gain)
    rows = modulation_rows(fluxes.wave_plate, fluxes.analyser, fluxes.retardance)
    if circular and not determined(fluxes, rows, flux, gains, 3, calibration).any():
        size = 2
    settled = determined(fluxes, rows, flux, gains, size, calibration)
    model = model_of(fluxes, rows, size, calibration)
    if beams == 1:
        # One beam: the frames of the visit stand in for the beams of one frame, of known relative brightness.
        fit = solve_counts(as_beams(flux), as_beams(variance), lambda z: beams_model(*model(z)), size, gains)
    else:
        fit = solve_counts(flux, variance, model, size, gains)
        fit = with_faint(replace(fluxes, flux=flux), fit, model, size, gains, gain, calibration)
    z = np.where(settled[:, None], fit.z, np.nan)
    covariance = np.where(settled[:, None, None], fit.covariance, np.nan)
    stokes = _label(
        fluxes, z, covariance, fit.chi2, fit.dof, "instrument" if calibration is None else "sky", circular=circular
    )
    if calibration is not None:
        stokes = calibration.with_error(stokes)
    log_gain = np.zeros((sources, beams))
    log_gain_var = np.zeros((sources, beams))
    if beams > 1 and gain != "cycle" and gains.number:
        log_gain[:, 1:], log_gain_var[:, 1:] = fit.log_gain, fit.log_gain_variance
    elif gain == "cycle":
        log_gain[:, 1:] = log_gain_var[:, 1:] = np.nan
    value = np.exp(log_gain) * (fluxes.throughput if gain == "fixed" else 1.0)
    return Solution(stokes, fit, value, value * np.sqrt(log_gain_var))


def _label(
    fluxes: Fluxes,
    z: Array,
    covariance: Array,
    chi2: Array,
    dof: NDArray[np.int_],
    frame: str,
    circular: bool = False,
) -> Stokes:
    undetermined = ~np.all(np.isfinite(z[:, :2]), axis=1)
    used = np.isfinite(fluxes.flux)
    chi, chi_spread = mean_angle(fluxes.position_angle)
    eta, _ = mean_angle(fluxes.parallactic)
    _, turn_spread = mean_angle(fluxes.parallactic - fluxes.position_angle)
    times = fluxes.mjd[np.isfinite(fluxes.mjd)]
    v = None
    if circular:
        v = z[:, 2] if z.shape[1] == 3 else np.full(len(z), np.nan)
        if z.shape[1] == 2:
            wide = np.full((len(z), 3, 3), np.nan)
            wide[:, :2, :2] = covariance
            covariance = wide
    flags = np.bitwise_or.reduce(fluxes.flags, axis=(1, 2)) if fluxes.flags.size else np.zeros(len(z), dtype=int)
    return Stokes(
        q=z[:, 0],
        u=z[:, 1],
        v=v,
        i=np.where(used.any(axis=(1, 2)), np.nansum(fluxes.flux, axis=(1, 2)), np.nan),
        covariance=covariance,
        frame=frame,
        position_angle=chi,
        parallactic=None if np.isnan(eta) else eta,
        spread=chi_spread,
        turn=0.0 if np.isnan(turn_spread) else turn_spread,
        sense=fluxes.sense,
        filter=fluxes.filter,
        x=fluxes.x,
        y=fluxes.y,
        mjd=np.mean(times) if times.size else None,
        flags=flags | np.where(undetermined, int(Flag.UNDETERMINED), 0),
        name=fluxes.target,
        chi2=chi2,
        dof=dof,
    )


def _per_cycle(fluxes: Fluxes, *, method: str, gain: str, circular: bool, calibration: Any) -> Stokes:
    cycles = np.unique(fluxes.cycle)
    shared = fluxes
    if method == "least-squares" and gain in {"visit", "night"} and fluxes.shape[2] > 1 and len(cycles) > 1:
        visit = fit_counts(fluxes, gain=gain, circular=circular, calibration=calibration)
        parts = [_cycle_with_gain(shared, cycle, visit, circular, calibration) for cycle in cycles]
    else:
        parts = []
        for cycle in cycles:
            chosen = fluxes.take_frames(fluxes.cycle == cycle)
            try:
                parts.append(demodulate(chosen, method=method, gain=gain, circular=circular, calibration=calibration))
            except InputError:
                empty = np.full((fluxes.shape[0], 2), np.nan)
                parts.append(
                    _label(chosen, empty, np.full((len(empty), 2, 2), np.nan), empty[:, 0],
                           np.zeros(len(empty), dtype=int), "instrument" if calibration is None else "sky")
                )  # fmt: skip
    first = parts[0]

    def stack(name: str, axis: int = 1) -> Any:
        values = [getattr(part, name) for part in parts]
        return None if values[0] is None else np.stack(values, axis=axis)

    times = [np.nan if part.mjd is None else part.mjd for part in parts]
    etas = [np.nan if part.parallactic is None else part.parallactic for part in parts]
    return Stokes(
        q=stack("q"), u=stack("u"), v=stack("v"), i=stack("i"), covariance=stack("covariance"),
        frame=first.frame, position_angle=np.asarray([part.position_angle for part in parts]),
        parallactic=None if np.all(np.isnan(etas)) else np.asarray(etas), sense=first.sense,
        filter=first.filter, x=fluxes.x, y=fluxes.y,
        mjd=None if np.all(np.isnan(times)) else np.asarray(times),
        calibration_covariance=stack("calibration_covariance"), spread=np.asarray([part.spread for part in parts]),
        turn=np.asarray([part.turn for part in parts]),
        flags=stack("flags"), name=first.name, chi2=stack("chi2"), dof=stack("dof"),
    )  # fmt: skip


def _cycle_with_gain(fluxes: Fluxes, cycle: int, visit: Solution, circular: bool, calibration: Any) -> Stokes:
    """Solve one cycle with the gains of its visit as prior, so that an incomplete cycle is still determined.

    The gain differs from source to source, so that it is divided out of the counts instead of being named.
    """
    chosen = fluxes.take_frames(fluxes.cycle == cycle)
    gain = np.where(np.isfinite(visit.gain), visit.gain, 1.0)[:, None, :]
    relative = np.where(np.isfinite(visit.gain_err), visit.gain_err / gain[:, 0], np.nan)
    error, seen = np.full(gain.shape[-1], np.nan), np.isfinite(relative).any(axis=0)
    error[seen] = np.nanmedian(relative[:, seen], axis=0)
    divided = replace(
        chosen,
        flux=chosen.flux / gain,
        variance=chosen.variance / gain**2,
        throughput=np.ones(gain.shape[-1]),
        throughput_err=np.where(error > 0, error, np.nan),
    )
    solution = fit_counts(divided, gain="fixed", circular=circular, calibration=calibration)
    intensity = np.where(np.isfinite(chosen.flux).any(axis=(1, 2)), np.nansum(chosen.flux, axis=(1, 2)), np.nan)
    return replace(solution.stokes, i=intensity)
