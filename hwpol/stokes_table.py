"""Stokes parameters as a table."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import astropy.units as units
import numpy as np
from astropy.table import QTable

from hwpol.stokes import Stokes


def stokes_table(stokes: Stokes) -> QTable:
    """Return a row per value: q, u, errors, covariance, p, theta and what is known beside them; angles in deg."""
    flat = stokes if stokes.q.ndim == 1 else flattened(stokes)
    low, high = flat.interval()
    table = QTable()
    if stokes.name:
        table["target"] = np.full(flat.shape, stokes.name)
    for name, column in {
        "q": flat.q,
        "u": flat.u,
        "q_err": flat.q_err,
        "u_err": flat.u_err,
        "qu_cov": flat.covariance[..., 0, 1],
        "p": flat.p,
        "p_err": flat.p_err,
        "p_debiased": flat.debiased(),
        "p_low": low,
        "p_high": high,
        "p_upper95": flat.upper_limit(0.95),
    }.items():
        table[name] = column
    theta_low, theta_high = flat.theta_interval()
    for name, column in {
        "theta": flat.theta,
        "theta_err": flat.theta_err,
        "theta_low": theta_low,
        "theta_high": theta_high,
    }.items():
        table[name] = column * units.deg
    if flat.v is not None:
        table["v"] = flat.v
        table["v_err"] = np.full(flat.shape, np.nan) if flat.v_err is None else flat.v_err
    if flat.calibration_covariance is not None:
        table["q_cal_err"] = np.sqrt(flat.calibration_covariance[..., 0, 0])
        table["u_cal_err"] = np.sqrt(flat.calibration_covariance[..., 1, 1])
        table["qu_cal_cov"] = flat.calibration_covariance[..., 0, 1]
    table["flags"] = flat.flags
    table.meta.update({"frame": stokes.frame, "filter": stokes.filter})
    return table


def flattened(stokes: Stokes) -> Stokes:
    """Return the same values along one axis."""
    size = int(np.prod(stokes.shape, dtype=int))
    changes: dict[str, Any] = {"x": None, "y": None}
    for name in ("q", "u", "i", "v", "flags", "chi2", "dof"):
        value = getattr(stokes, name)
        if value is not None and np.shape(value) == stokes.shape:
            changes[name] = np.reshape(value, size)
    for name in ("covariance", "calibration_covariance"):
        value = getattr(stokes, name)
        if value is not None:
            changes[name] = value.reshape(size, *value.shape[-2:])
    for name in ("position_angle", "parallactic", "spread", "turn", "mjd"):
        value = getattr(stokes, name)
        if value is not None and np.ndim(value) > 0:
            changes[name] = np.broadcast_to(value, stokes.shape).reshape(size)
    return replace(stokes, **changes)
