"""What the counted photons alone would allow: the Cramer-Rao bound of the model."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation.demodulate import Solution, fit_counts
from hwpol.fluxes import Fluxes

Array = NDArray[np.float64]


def photon_covariance(fluxes: Fluxes, solution: Solution, *, gain: str = "visit") -> Array:
    """Covariance of the observed (q, u) if source photons were the only noise, shape (S, 2, 2).

    The bound J^-1 of the exact model, gains free as in the solve, with the variance of each datum equal to
    its expected counts (the model's; for two beams the binomial information sum n/(1 - x^2) of each frame).

    Parameters
    ----------
    fluxes : Fluxes
        As solved.
    solution : Solution
        From `fit_counts` without a calibration.
    """
    fit = solution.fit
    shape = fluxes.flux.shape
    # One beam: the fit ran with frames in the place of beams.
    residual = fit.residual.reshape(shape)
    expected = _expected(fluxes, solution).reshape(shape)
    expected = np.where(np.isfinite(residual) & (expected > 0), expected, np.nan)
    ideal = replace(fluxes, flux=expected, variance=np.where(np.isfinite(expected), expected, 1.0))
    return fit_counts(ideal, gain=gain).stokes.random_covariance


def _expected(fluxes: Fluxes, solution: Solution) -> Array:
    from hwpol.demodulation.modulation import modulation_rows

    rows = modulation_rows(fluxes.wave_plate, fluxes.analyser, fluxes.retardance)[..., : solution.fit.z.shape[1]]
    below = 1 + np.einsum("kbp,sp->skb", rows, solution.fit.z)
    if fluxes.shape[2] == 1:
        relative = fluxes.exposure / np.nanmean(fluxes.exposure)
        return np.asarray(solution.fit.scale[..., None] * relative[:, None] * below)
    gain = np.where(np.isfinite(solution.gain), solution.gain, 1.0)
    return np.asarray(solution.fit.scale[..., None] * gain[:, None, :] * below)
