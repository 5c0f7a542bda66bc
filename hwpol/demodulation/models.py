"""What a solve needs of fluxes: the model of their modulation, their gains, and whether they determine z."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation.counts import LEAST_INFORMATION, Gains, information
from hwpol.demodulation.modulation import modulation_rows, positions
from hwpol.fluxes import Fluxes
from hwpol.stokes import instrument_from_sky, observed_from_instrument, observed_slopes, real_slopes

Array = NDArray[np.float64]


def as_beams(values: Array) -> Array:
    return values[:, None, :, 0]


def beams_model(x: Array, slopes: Array) -> tuple[Array, Array]:
    return x[:, None, :, 0], slopes[:, None, :, 0]


def gains_of(fluxes: Fluxes, gain: str) -> Gains:
    _, frames, beams = fluxes.shape
    if beams == 1:
        with np.errstate(divide="ignore"):
            relative = np.log(fluxes.exposure / np.nanmean(fluxes.exposure))
        none = np.zeros((1, 0))
        return Gains(np.zeros((1, frames), dtype=int), 0, relative[None, :], none, none)
    known = np.log(fluxes.throughput / fluxes.throughput[0])
    if gain == "fixed":
        loose = np.isfinite(fluxes.throughput_err) & (fluxes.throughput_err > 0)
        loose[0] = False
        number = int(loose.sum())
        index = np.broadcast_to(np.where(loose, np.cumsum(loose), 0), (frames, beams))
        prior_variance = (fluxes.throughput_err / fluxes.throughput)[loose] ** 2
        fixed = np.broadcast_to(known, (frames, beams))
        return Gains(index, number, fixed, np.zeros((1, number)), prior_variance[None, :])
    index = np.broadcast_to(np.arange(beams), (frames, beams))
    number = beams - 1
    if gain == "cycle":
        cycle = np.unique(fluxes.cycle, return_inverse=True)[1]
        number = (beams - 1) * (int(cycle.max(initial=0)) + 1)
        index = np.where(index > 0, index + cycle[:, None] * (beams - 1), 0)
    free = np.full((1, number), np.inf)
    return Gains(index, number, np.zeros((frames, beams)), np.zeros((1, number)), free)


def model_of(fluxes: Fluxes, rows: Array, size: int, calibration: Any) -> Any:
    """Return the function z -> x, dx/dz: the rows alone, or through sky, instrument and its polarisation."""
    coefficients = rows[..., :size]
    sources = fluxes.shape[0]

    def plain_model(z: Array) -> tuple[Array, Array]:
        x = np.einsum("kbp,sp->skb", coefficients, z)
        return x, np.broadcast_to(coefficients, (sources, *coefficients.shape))

    if calibration is None:
        return plain_model
    chi, eta, sense = fluxes.position_angle, fluxes.parallactic, fluxes.sense
    ip, amplitude = calibration.terms(fluxes.filter, fluxes.x, fluxes.y, chi, eta, sense, fluxes.mjd)
    unit = instrument_from_sky(np.ones(chi.shape), chi, sense)

    def sky_model(z: Array) -> tuple[Array, Array]:
        inside = instrument_from_sky(z[:, :1] + 1j * z[:, 1:2], chi, sense)
        observed = observed_from_instrument(inside, ip, amplitude)
        a, b = observed_slopes(inside, ip, amplitude)
        if sense > 0:
            a, b = a * unit, b * np.conj(unit)
        else:
            a, b = b * np.conj(unit), a * unit
        jacobian = real_slopes(a, b)
        x = rows[..., 0] * observed.real[..., None] + rows[..., 1] * observed.imag[..., None]
        slopes = np.einsum("kbi,skij->skbj", rows[..., :2], jacobian)
        if size == 3:
            x = x + rows[..., 2] * sense * z[:, 2, None, None]
            last = np.broadcast_to(rows[..., 2:] * sense, (*slopes.shape[:-1], 1))
            slopes = np.concatenate([slopes, last], axis=-1)
        return x, slopes

    return sky_model


def determined(
    fluxes: Fluxes, rows: Array, flux: Array, gains: Gains, size: int, calibration: Any
) -> NDArray[np.bool_]:
    """Whether the positions (readings within the usual tolerance taken as one) determine z, per source."""
    period = 180.0 if np.all(fluxes.retardance == 180.0) else 360.0
    rounded = modulation_rows(positions(fluxes.wave_plate, period=period), fluxes.analyser, fluxes.retardance)
    model = model_of(fluxes, rounded, size, calibration)
    _, slopes = model(np.zeros((fluxes.shape[0], size)))
    valid = np.isfinite(flux)
    if fluxes.shape[2] == 1:
        valid, slopes = as_beams(valid), slopes[:, None, :, 0]
        scale = max(fluxes.shape[1], 1)
    else:
        scale = 1
    matrix = information(valid, np.asarray(slopes), gains) / scale
    return np.linalg.eigvalsh(matrix)[:, 0] > LEAST_INFORMATION
