"""Null parameters: what redundant wave-plate positions must give as zero.

psi and psi + 90 deg modulate alike (half-wave plate). With eight or sixteen positions q and u can be had twice;
half their difference is zero for any source, gain and transparency, and has the error of q and u themselves
(the null of Bagnulo et al. 2009, PASP 121, 993, from memory; formed here from two least-squares solutions).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation.demodulate import fit_counts
from hwpol.fluxes import Fluxes

Array = NDArray[np.float64]


def half_turn_null(fluxes: Fluxes, *, gain: str = "visit") -> tuple[Array, Array]:
    """Null (q, u) from positions psi mod 180 below and above 90 deg, instrument frame.

    Returns
    -------
    z : ndarray, shape (S, 2)
    covariance : ndarray, shape (S, 2, 2)
        NaN where the halves do not both determine q and u.
    """
    psi = np.mod(fluxes.wave_plate + 1e-6, 180.0)
    return _null(fluxes, psi < 90.0, gain)


def time_null(fluxes: Fluxes, *, gain: str = "visit") -> tuple[Array, Array]:
    """Null (q, u) from the first half of the cycles against the second; as `half_turn_null`."""
    cycles = np.unique(fluxes.cycle)
    return _null(fluxes, np.isin(fluxes.cycle, cycles[: len(cycles) // 2]), gain)


def _null(fluxes: Fluxes, first: NDArray[np.bool_], gain: str) -> tuple[Array, Array]:
    sources = fluxes.shape[0]
    if not first.any() or first.all():
        return np.full((sources, 2), np.nan), np.full((sources, 2, 2), np.nan)
    one = fit_counts(fluxes.take_frames(first), gain=gain).stokes
    other = fit_counts(fluxes.take_frames(~first), gain=gain).stokes
    z = np.stack([one.q - other.q, one.u - other.u], axis=-1) / 2
    return z, (one.random_covariance + other.random_covariance) / 4
