"""What the figures of a visit need and its tables do not hold, from its fluxes."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation import fit_counts, modulation_rows
from hwpol.errors import InputError
from hwpol.fluxes import Fluxes
from hwpol.night.config_objects import NightConfig
from hwpol.night.visit import VisitResult
from hwpol.products import VisitFile
from hwpol.stokes import mean_angle

Array = NDArray[np.float64]

#: Brightest sources whose light together tells the transparency.
BRIGHTEST = 20
#: Turn of the field within a visit (deg) beyond which one curve in the instrument frame does not describe it.
TURN = 1.0


def visit_file(config: NightConfig, visit: VisitResult, files: tuple[str, ...], calibration: Any = None) -> VisitFile:
    """Gather the plain arrays of a visit.

    Parameters
    ----------
    config : NightConfig
    visit : VisitResult
    files : tuple of str
        Frames as frames.ecsv names them.
    calibration : Calibration, optional
        Applied in the fit, so that residuals hold no turn of the field.
    """
    fluxes = visit.fluxes
    frames = fluxes.shape[1]
    choice, picture = visit.choice, visit.picture
    nothing = np.full(len(visit.radii), np.nan)
    gain = {"night": "fixed", "cycle": "visit"}.get(config.demodulation.gain, config.demodulation.gain)
    curves, modulation, scale, psi, model = _modulation(config, fluxes, gain, calibration)
    shift = np.broadcast_to(visit.shift, (frames, 2))
    corner = np.asarray(visit.stamp_corner, dtype=float)
    sky = np.full(fluxes.shape[1:], np.nan) if fluxes.sky is None else fluxes.sky[0]
    scale_of_pixels = config.instrument.detector.pixel_scale
    return VisitFile(
        number=visit.task_number,
        target=visit.names[0],
        filter=visit.filter,
        radius=visit.radius,
        annulus=visit.annulus,
        pixel_scale=np.nan if not scale_of_pixels else float(scale_of_pixels),
        beams=tuple(beam.name for beam in config.instrument.beams),
        stamps=visit.stamps,
        stamp_corner=corner,
        stamp_place=corner + (visit.stamps.shape[-1] - 1) / 2 if visit.stamp_place is None else visit.stamp_place,
        radii=visit.radii,
        growth=visit.growth,
        curve_q=nothing if choice is None else choice.q,
        curve_u=nothing if choice is None else choice.u,
        curve_q_err=nothing if choice is None else choice.q_err,
        curve_u_err=nothing if choice is None else choice.u_err,
        files=files,
        frames={
            "cycle": fluxes.cycle.astype(float),
            "mjd": fluxes.mjd,
            "psi": fluxes.wave_plate,
            "exposure": fluxes.exposure,
            "airmass": fluxes.airmass,
            "shift_x": shift[:, 0],
            "shift_y": shift[:, 1],
            "transparency": transparency(fluxes, scale),
            "fwhm": visit.fwhm,
            "ellipticity": visit.ellipticity,
            "sky": sky,
        },
        curves=curves,
        modulation=modulation,
        curve_psi=psi,
        curve_model=model,
        picture=None if picture is None else np.asarray(picture.data, dtype=float),
        picture_corner=(0.0, 0.0) if picture is None else picture.corner,
        picture_step=1 if picture is None else picture.step,
    )


def transparency(fluxes: Fluxes, scale: Array | None) -> Array:
    """Light of the brightest sources in each frame, per second, against its median over the visit.

    Parameters
    ----------
    fluxes : Fluxes
    scale : ndarray, shape (S, K), or None
        Brightness of each source in each frame with its polarisation taken out; with None, and for fewer than three
        sources, one beam cannot tell transparency from polarisation.

    Returns
    -------
    ndarray, shape (K,)
    """
    sources, frames, _ = fluxes.shape
    if scale is None:
        if sources < 3:
            return np.full(frames, np.nan)
        scale = fluxes.flux[:, :, 0]
    with np.errstate(invalid="ignore", divide="ignore"):
        light = scale / fluxes.exposure
        total = np.nan_to_num(np.nansum(light, axis=1))
        chosen = light[np.argsort(-total, kind="stable")[:BRIGHTEST]]
        usable = np.isfinite(chosen).any(axis=1)
        chosen = chosen[usable]
        if not len(chosen):
            return np.full(frames, np.nan)
        relative = chosen / np.nanmedian(chosen, axis=1, keepdims=True)
        seen = np.isfinite(relative).any(axis=0)
        result = np.full(frames, np.nan)
        result[seen] = np.nanmedian(relative[:, seen], axis=0)
    return result


def _modulation(
    config: NightConfig, fluxes: Fluxes, gain: str, calibration: Any
) -> tuple[tuple[str, ...], dict[str, Array], Array | None, Array, Array]:
    """Names, columns, brightness (S, K) or None, and the fit at angles in between."""
    names = tuple(beam.name for beam in config.instrument.beams)
    _, frames, beams = fluxes.shape
    pair = beams == 2 and np.allclose(np.mod(fluxes.analyser[:, 1] - fluxes.analyser[:, 0], 180.0), 90.0)
    curves = ("difference",) if pair else names
    blank = np.full((frames, len(curves)), np.nan)
    empty = np.empty(0), np.empty((0, len(curves)))
    lost = {"value": blank, "error": blank, "model": blank}
    try:
        solution = fit_counts(fluxes, gain=gain, calibration=calibration)
    except InputError:
        return curves, lost, None, *empty
    fit = solution.fit
    if beams == 1:
        first = np.asarray(fit.residual)[0, 0][:, None]
        relative = fluxes.exposure / np.nanmean(fluxes.exposure)
        scale, brightness = None, fit.scale[0, 0] * relative
    else:
        first, scale = fit.residual[0], np.where(fit.scale > 0, fit.scale, np.nan)
        brightness = scale[0]
    throughput = solution.gain[0] if beams > 1 else np.ones(1)
    sigma = np.sqrt(fluxes.variance[0])
    counts = np.where(np.isfinite(first), fluxes.flux[0], np.nan) / throughput
    error = sigma / throughput
    expected = counts - first * error
    if pair:
        value, model = _difference(counts), _difference(expected)
        total = counts.sum(axis=1)
        spread = 2 * np.hypot(counts[:, 1] * error[:, 0], counts[:, 0] * error[:, 1]) / total**2
        columns = {"value": value[:, None], "error": spread[:, None], "model": model[:, None]}
    else:
        level = brightness[:, None]
        columns = {"value": counts / level - 1, "error": error / level, "model": expected / level - 1}
    return curves, columns, scale, *_smooth(fluxes, gain, pair, empty)


def _difference(counts: Array) -> Array:
    return np.asarray((counts[:, 0] - counts[:, 1]) / (counts[:, 0] + counts[:, 1]))


def _smooth(fluxes: Fluxes, gain: str, pair: bool, empty: tuple[Array, Array]) -> tuple[Array, Array]:
    """The fit of the first target in the instrument frame, at angles over the range of the plate."""
    psi = fluxes.wave_plate
    _, turn = mean_angle(fluxes.position_angle)
    if not np.isfinite(psi).any() or turn > TURN:
        return empty
    first = replace(fluxes.take_sources([0]))
    stokes = fit_counts(first, gain=gain).stokes
    if not np.isfinite([stokes.q[0], stokes.u[0]]).all():
        return empty
    low, high = float(np.nanmin(psi)), float(np.nanmax(psi))
    grid = np.arange(low - 4.0, max(high, low + 67.5) + 5.0, 1.5)
    analyser = np.broadcast_to(fluxes.analyser[0], (len(grid), fluxes.shape[2]))
    rows = modulation_rows(grid, analyser, float(np.mean(fluxes.retardance)))
    x = rows[..., 0] * stokes.q[0] + rows[..., 1] * stokes.u[0]
    return grid, _difference(1 + x)[:, None] if pair else x
