"""Null parameters: what redundant wave-plate positions must give as zero.

psi and psi + 90 deg modulate alike (half-wave plate). With eight or sixteen positions q and u can be had twice;
half their difference is zero for any source, gain and transparency, and has the error of q and u themselves
(the null of Bagnulo et al. 2009, PASP 121, 993, from memory; formed here from two least-squares solutions).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation.demodulate import fit_counts
from hwpol.fluxes import Fluxes
from hwpol.stokes import ROTATION_LIMIT, carry, instrument_from_sky, real_slopes, sky_slopes

Array = NDArray[np.float64]


def half_turn_null(
    fluxes: Fluxes, *, gain: str = "visit", calibration: Any = None, circular: bool = False
) -> tuple[Array, Array]:
    """Null (q, u) from positions psi mod 180 below and above 90 deg, instrument frame.

    Circular light changes its sign from one half to the other where the plate is not a perfect half-wave plate:
    with `circular` it is solved for in both and makes no null. With a calibration the halves are solved for the
    sky, so that a field that turns does not make a null; the difference is brought back to the instrument frame at
    the mean angle. Without one a field that turns by more than 1 deg has no null.

    Returns
    -------
    z : ndarray, shape (S, 2)
    covariance : ndarray, shape (S, 2, 2)
        NaN where the halves do not both determine q and u.
    """
    psi = np.mod(fluxes.wave_plate + 1e-6, 180.0)
    return _null(fluxes, psi < 90.0, gain, calibration, circular)


def time_null(
    fluxes: Fluxes, *, gain: str = "visit", calibration: Any = None, circular: bool = False
) -> tuple[Array, Array]:
    """Null (q, u) from the first half of the cycles against the second; as `half_turn_null`."""
    cycles = np.unique(fluxes.cycle)
    return _null(fluxes, np.isin(fluxes.cycle, cycles[: len(cycles) // 2]), gain, calibration, circular)


def _null(fluxes: Fluxes, first: NDArray[np.bool_], gain: str, calibration: Any, circular: bool) -> tuple[Array, Array]:
    sources = fluxes.shape[0]
    if not first.any() or first.all():
        return np.full((sources, 2), np.nan), np.full((sources, 2, 2), np.nan)
    one = fit_counts(fluxes.take_frames(first), gain=gain, calibration=calibration, circular=circular).stokes
    other = fit_counts(fluxes.take_frames(~first), gain=gain, calibration=calibration, circular=circular).stokes
    if circular and any(half.v is None or not np.isfinite(half.v).all() for half in (one, other)):
        # Half the positions do not tell circular light from the rest; it would stand in the null.
        return np.full((sources, 2), np.nan), np.full((sources, 2, 2), np.nan)
    difference = (one.z - other.z) / 2
    covariance = (one.random_covariance + other.random_covariance) / 4
    chi = one.position_angle
    if calibration is None:
        if np.ptp(fluxes.position_angle) > ROTATION_LIMIT:
            return np.full((sources, 2), np.nan), np.full((sources, 2, 2), np.nan)
    else:
        difference = instrument_from_sky(difference, chi, fluxes.sense)
        back = np.linalg.inv(real_slopes(*sky_slopes(chi, fluxes.sense)))
        covariance = carry(covariance, back)
    return np.stack([difference.real, difference.imag], axis=-1), covariance
