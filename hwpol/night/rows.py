"""Rows of the result tables from solved visits."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.flags import Flag
from hwpol.fluxes import Fluxes
from hwpol.night.solve import VisitSolution
from hwpol.stokes import Stokes

Array = NDArray[np.float64]

#: p over its error below which a position angle is not quoted without its limit (common practice).
SIGNIFICANT = 3.0


def stokes_columns(stokes: Stokes, *, estimator: str, level: float) -> dict[str, Array]:
    """Columns that follow from q, u and their covariances alone, arrays of one axis."""
    low, high = stokes.interval(level)
    theta_low, theta_high = stokes.theta_interval(level)
    random = stokes.random_covariance
    shared = stokes.calibration_covariance
    nothing = np.full(stokes.shape, np.nan)
    return {
        "q": stokes.q,
        "u": stokes.u,
        "q_err": np.sqrt(random[..., 0, 0]),
        "u_err": np.sqrt(random[..., 1, 1]),
        "qu_cov": random[..., 0, 1],
        "q_cal_err": nothing if shared is None else np.sqrt(shared[..., 0, 0]),
        "u_cal_err": nothing if shared is None else np.sqrt(shared[..., 1, 1]),
        "qu_cal_cov": nothing if shared is None else shared[..., 0, 1],
        "v": nothing if stokes.v is None else stokes.v,
        "v_err": nothing if stokes.v_err is None else stokes.v_err,
        "p": stokes.p,
        "p_err": stokes.p_err,
        "p_debiased": stokes.debiased(estimator),
        "p_low": low,
        "p_high": high,
        "p_upper95": stokes.upper_limit(0.95),
        "theta": stokes.theta,
        "theta_err": stokes.theta_err,
        "theta_low": theta_low,
        "theta_high": theta_high,
    }


def result_rows(
    solution: VisitSolution,
    fluxes: Fluxes,
    common: Mapping[str, Any],
    per_source: Mapping[str, NDArray[Any]],
    *,
    estimator: str,
    level: float,
    calibration: str,
    photon_err: Array,
) -> list[dict[str, Any]]:
    """Rows of results.ecsv for one visit, a row per source.

    Parameters
    ----------
    common : mapping
        Columns that are the same for all sources: target, role, filter, visit, chi, eta, radius, fwhm, ...
    per_source : mapping
        Columns given as arrays (S,): ra, dec, flags to add.
    photon_err : ndarray, shape (S,)
    """
    columns = stokes_columns(solution.stokes, estimator=estimator, level=level)
    used = np.asarray(np.isfinite(fluxes.flux).any(axis=2))
    seconds = used @ fluxes.exposure
    with np.errstate(invalid="ignore", divide="ignore"):
        flux = np.nansum(fluxes.flux, axis=(1, 2)) / seconds
        flux_err = np.sqrt(np.nansum(np.where(np.isfinite(fluxes.flux), fluxes.variance, np.nan), axis=(1, 2)))
        flux_err = flux_err / seconds
    low_signal = np.where(columns["p_debiased"] < SIGNIFICANT * columns["p_err"], int(Flag.LOW_SIGNAL), 0)
    flags = solution.flags | low_signal | np.asarray(per_source.get("flags", 0), dtype=int)
    rows = []
    for s in range(fluxes.shape[0]):
        row = {name: value[s] for name, value in columns.items()}
        row |= {name: value[s] for name, value in per_source.items() if name != "flags"}
        row |= dict(common)
        row |= {
            "source": s,
            "cycles": int(solution.kept[s].sum()),
            "frames": int(solution.frames_used[s]),
            "mjd": _mean(fluxes.mjd[used[s]]),
            "airmass": _mean(fluxes.airmass[used[s]]),
            "exposure": seconds[s],
            "x": fluxes.x[s],
            "y": fluxes.y[s],
            "flux": flux[s],
            "flux_err": flux_err[s],
            "frame": solution.stokes.frame,
            "q_count_err": np.sqrt(solution.count_covariance[s, 0, 0]),
            "u_count_err": np.sqrt(solution.count_covariance[s, 1, 1]),
            "q_scatter_err": np.sqrt(solution.scatter_covariance[s, 0, 0]),
            "u_scatter_err": np.sqrt(solution.scatter_covariance[s, 1, 1]),
            "q_inst": solution.observed.q[s],
            "u_inst": solution.observed.u[s],
            "null_q": solution.null[s, 0],
            "null_u": solution.null[s, 1],
            "chi2": solution.chi2[s],
            "dof": int(solution.dof[s]),
            "photon_err": photon_err[s],
            "calibration": calibration,
            "flags": int(flags[s]),
        }
        rows.append(row)
    return rows


def cycle_rows(
    solution: VisitSolution,
    fluxes: Fluxes,
    results: list[dict[str, Any]],
    *,
    estimator: str,
    level: float,
) -> list[dict[str, Any]]:
    """Rows of cycles.ecsv: a row per source and cycle, with the columns of results."""
    rows = []
    cycles = solution.cycles
    chi = np.broadcast_to(cycles.position_angle, (cycles.shape[1],))
    eta = np.full(cycles.shape[1], np.nan) if cycles.parallactic is None else cycles.parallactic
    for c, number in enumerate(np.unique(fluxes.cycle)):
        here = fluxes.cycle == number
        part = cycles[:, c]
        columns = stokes_columns(part, estimator=estimator, level=level)
        used = np.asarray(np.isfinite(fluxes.flux[:, here]).any(axis=2))
        seconds = used @ fluxes.exposure[here]
        for s in range(fluxes.shape[0]):
            with np.errstate(invalid="ignore", divide="ignore"):
                flux = np.nansum(fluxes.flux[s, here]) / seconds[s]
                flux_err = np.sqrt(np.nansum(fluxes.variance[s, here])) / seconds[s]
            row = dict(results[s])
            row |= {name: value[s] for name, value in columns.items()}
            row |= {
                "cycle": int(number),
                "cycles": 1,
                "frames": int(used[s].sum()),
                "mjd": _mean(fluxes.mjd[here]),
                "airmass": _mean(fluxes.airmass[here]),
                "chi": chi[c],
                "eta": eta[c],
                "exposure": seconds[s],
                "flux": flux,
                "flux_err": flux_err,
                "q_count_err": columns["q_err"][s],
                "u_count_err": columns["u_err"][s],
                "q_scatter_err": np.nan,
                "u_scatter_err": np.nan,
                "q_inst": solution.observed_cycles.q[s, c],
                "u_inst": solution.observed_cycles.u[s, c],
                "null_q": np.nan,
                "null_u": np.nan,
                "chi2": np.nan,
                "dof": 0,
                "photon_err": np.nan,
                "flags": int(part.flags[s])
                | (0 if solution.kept[s, c] else int(Flag.CYCLE_SET_ASIDE))
                | (results[s]["flags"] & int(Flag.UNCALIBRATED)),
            }
            rows.append(row)
    return rows


def _mean(values: Array) -> float:
    values = values[np.isfinite(values)]
    return float(np.mean(values)) if values.size else float("nan")
