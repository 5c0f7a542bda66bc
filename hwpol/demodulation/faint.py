"""Sources of next to no signal in a frame: solved on counts summed by plate position."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation.counts import CountFit, Gains, explain_counts, solve_counts
from hwpol.demodulation.models import gains_of, model_of
from hwpol.demodulation.modulation import modulation_rows, positions
from hwpol.fluxes import Fluxes
from hwpol.stokes import ROTATION_LIMIT

Array = NDArray[np.float64]

#: Signal to noise of a source in a frame, all beams together, below which its frames are summed by position.
FAINT = 8.0


def with_faint(
    fluxes: Fluxes, fit: CountFit, model: Any, size: int, gains: Gains, gain: str, calibration: Any
) -> CountFit:
    """Solve faint sources again on counts summed by plate position, where the field does not turn.

    With the brightness of every frame free, frames of next to no signal say nothing and can carry the solve away.
    The sum over frames of one position has the same polarisation, whatever their brightness.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        whole = np.isfinite(fluxes.flux) & np.isfinite(fluxes.variance)
        total = np.sum(np.where(whole, fluxes.flux, 0.0), axis=2)
        noise = np.sqrt(np.sum(np.where(whole, fluxes.variance, 0.0), axis=2))
        signal = np.where(whole.all(axis=2), total / noise, np.nan)
    seen = np.isfinite(signal).any(axis=1)
    typical = np.full(len(signal), np.nan)
    typical[seen] = np.nanmedian(signal[seen], axis=1)
    if gain == "cycle":
        return fit
    faint = np.flatnonzero(seen & ((typical < FAINT) | ~np.isfinite(fit.z).all(axis=1)))
    still = np.ptp(fluxes.position_angle) < ROTATION_LIMIT
    if not faint.size or not still:
        return fit
    summed = _by_position(fluxes.take_sources(faint))
    own = gains_of(summed, gain)
    rows = modulation_rows(summed.wave_plate, summed.analyser, summed.retardance)
    sky = model_of(summed, rows, size, calibration)
    again = solve_counts(summed.flux, summed.variance, sky, size, own)
    lost = ~np.isfinite(again.z).all(axis=1)
    if lost.any():
        steady = _steady(summed, sky, size, own)
        again = replace(
            again,
            **{
                name: np.where(
                    lost.reshape(-1, *[1] * (getattr(again, name).ndim - 1)),
                    getattr(steady, name),
                    getattr(again, name),
                )
                for name in ("z", "covariance", "log_gain", "log_gain_variance", "chi2", "dof")
            },
        )
    z, covariance = fit.z.copy(), fit.covariance.copy()
    log_gain, log_gain_variance = fit.log_gain.copy(), fit.log_gain_variance.copy()
    chi2, dof = fit.chi2.copy(), fit.dof.copy()
    better = np.isfinite(again.z).all(axis=1)
    here = faint[better]
    z[here], covariance[here] = again.z[better], again.covariance[better]
    chi2[here], dof[here] = again.chi2[better], again.dof[better]
    log_gain[here], log_gain_variance[here] = again.log_gain[better], again.log_gain_variance[better]
    scale, residual = explain_counts(
        fluxes.flux, fluxes.variance, model, np.nan_to_num(z), np.nan_to_num(log_gain), gains
    )
    part = np.isin(np.arange(len(z)), here)
    return replace(
        fit,
        z=z,
        covariance=covariance,
        log_gain=log_gain,
        log_gain_variance=log_gain_variance,
        chi2=chi2,
        dof=dof,
        scale=np.where(part[:, None], scale, fit.scale),
        residual=np.where(part[:, None, None], residual, fit.residual),
    )


def _steady(summed: Fluxes, model: Any, size: int, gains: Gains) -> CountFit:
    """Solve sums by position with one brightness for all of them, per second of exposure.

    Clouds then enter as noise of a few percent of the signal: nothing beside the noise of sources this faint.
    """
    sources, groups, beams = summed.flux.shape
    seconds = summed.exposure[None, :, None]

    def flat(values: Array) -> Array:
        return np.reshape(values, (sources, 1, groups * beams, *values.shape[3:]))

    def flat_model(z: Array) -> tuple[Array, Array]:
        x, slopes = model(z)
        return flat(x), flat(np.asarray(slopes))

    single = Gains(
        gains.index.reshape(1, -1), gains.number, gains.fixed.reshape(1, -1), gains.prior, gains.prior_variance
    )
    return solve_counts(flat(summed.flux / seconds), flat(summed.variance / seconds**2), flat_model, size, single)


def _by_position(fluxes: Fluxes) -> Fluxes:
    """Sum the frames of every plate position."""
    period = 180.0 if np.all(fluxes.retardance == 180.0) else 360.0
    places = np.round(positions(fluxes.wave_plate, period=period), 6)
    analyser = np.unique(np.round(fluxes.analyser, 6), axis=0, return_inverse=True)[1].ravel()
    keys = np.stack([np.nan_to_num(places, nan=-1.0), analyser, np.round(fluxes.retardance, 6)], axis=1)
    groups = np.unique(keys, axis=0, return_inverse=True)[1].ravel()
    member = (groups[:, None] == np.arange(groups.max() + 1)).astype(float)
    whole = (np.isfinite(fluxes.flux) & np.isfinite(fluxes.variance)).all(axis=2, keepdims=True)
    flux = np.einsum("skb,kg->sgb", np.where(whole, fluxes.flux, 0.0), member)
    variance = np.einsum("skb,kg->sgb", np.where(whole, fluxes.variance, 0.0), member)
    first = np.argmax(member, axis=0)
    counted = variance > 0
    return replace(
        fluxes.take_frames(first),
        flux=np.where(counted, flux, np.nan),
        variance=np.where(counted, variance, np.nan),
        exposure=member.T @ fluxes.exposure,
    )
