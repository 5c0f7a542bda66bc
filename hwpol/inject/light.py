"""What artificial stars send: their profile, brightness, polarisation, and the electrons of each beam and frame."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.correction import Calibration
from hwpol.demodulation import fit_counts, modulation_rows
from hwpol.errors import InputError
from hwpol.fluxes import Fluxes
from hwpol.instrument.description import Section
from hwpol.photometry.growth import shapes
from hwpol.photometry.profiles import BETAS, grid, moffat
from hwpol.registration import Placement
from hwpol.stokes import instrument_from_sky, observed_from_instrument

Array = NDArray[np.float64]

#: Number of brightnesses from the target's down to `FAINTEST`.
STEPS = 5
#: Error of q of the faintest artificial star that is aimed at.
FAINTEST = 0.015
#: Degrees of polarisation; one star after the other takes the next. Their number and `STEPS` have no common factor, so
#: that every brightness meets every degree.
DEGREES = (0.0, 0.01, 0.03, 0.10)
#: Full widths from its centre within which a star is drawn; a Moffat disc of index 2.5 has 5e-4 of its light beyond.
REACH = 12.0
#: Share of the saturation level that the peak of an artificial star may reach.
HIGHEST = 0.6
#: Index where no curve of growth tells it: common practice for seeing discs.
USUAL_BETA = 3.0
#: Lowest transparency of a frame relative to the visit's mean that is believed.
LEAST_TRANSPARENCY = 0.02


@dataclass(frozen=True)
class StarProfile:
    """Round Moffat discs with the width of every frame and beam.

    Attributes
    ----------
    beta : float
        Index, the one whose curve of growth is nearest to that of the target.
    fwhm : ndarray, shape (K, B)
        Of the profile, pixels.
    """

    beta: float
    fwhm: Array

    def fraction(self, radius: float) -> float:
        """Share of the light inside an aperture that follows the seeing and has `radius` pixels in the median frame."""
        core = 4 * (2 ** (1 / self.beta) - 1) / np.median(self.fwhm, axis=0) ** 2
        return float(np.mean(1 - (1 + core * radius**2) ** (1 - self.beta)))

    def draw(self, image: Array, x: float, y: float, electrons: float, frame: int, beam: int, section: Section) -> None:
        """Add a star's expected electrons to an image (ny, nx), in place; none fall outside the section."""
        width = float(self.fwhm[frame, beam])
        half = int(np.ceil(REACH * width))
        cx, cy = round(x), round(y)
        core = 4 * (2 ** (1 / self.beta) - 1) / width**2
        shape = np.array([[x - cx, y - cy, core, 0.0, core]])
        values, _ = moffat(grid(2 * half + 1), shape, self.beta, nodes=5)
        disc = values.reshape(2 * half + 1, 2 * half + 1).astype(float) * (core * (self.beta - 1) / np.pi)
        x0, x1 = max(section.x0, cx - half, 0), min(section.x1, cx + half + 1, image.shape[1])
        y0, y1 = max(section.y0, cy - half, 0), min(section.y1, cy + half + 1, image.shape[0])
        if x0 < x1 and y0 < y1:
            top, left = y0 - cy + half, x0 - cx + half
            image[y0:y1, x0:x1] += electrons * disc[top : top + y1 - y0, left : left + x1 - x0]

    def peak(self, frame: int, beam: int) -> float:
        """Share of a star's light that its brightest pixel can hold, at most."""
        return float(4 * (2 ** (1 / self.beta) - 1) / self.fwhm[frame, beam] ** 2 * (self.beta - 1) / np.pi)


def measured_profile(placement: Placement, radii: Array, growth: Array, fallback: float) -> StarProfile:
    """The profile that the stars of a visit show.

    Parameters
    ----------
    placement : Placement
        Its widths are those of matched Gaussians; the disc that would be measured as wide is taken.
    radii, growth : ndarray, shape (R,)
        Curve of growth of the target: pixels, light relative to the largest radius.
    fallback : float
        Width (pixels) where none was measured.
    """
    width = np.array(placement.fwhm, dtype=float)
    usual = float(np.nanmedian(width)) if np.isfinite(width).any() else fallback
    per_beam = [float(np.nanmedian(w)) if np.isfinite(w).any() else usual for w in width.T]
    width = np.where(np.isfinite(width) & (width > 0), width, np.asarray(per_beam))
    best, least = (USUAL_BETA, _narrower(USUAL_BETA, usual)), np.inf
    for beta in BETAS:
        ratio = _narrower(beta, usual)
        core = 4 * (2 ** (1 / beta) - 1) / (ratio * usual) ** 2
        curve = 1 - (1 + core * np.asarray(radii) ** 2) ** (1 - beta)
        misfit = float(np.nansum((curve / curve[-1] - growth) ** 2)) if np.isfinite(growth).any() else np.inf
        if misfit < least:
            best, least = (beta, ratio), misfit
    return StarProfile(best[0], best[1] * width)


def _narrower(beta: float, width: float) -> float:
    """Width of a Moffat disc over that of its matched Gaussian, where the latter is `width` pixels."""
    points = grid(2 * int(np.ceil(4 * width)) + 1)
    ratio = 1.0
    for _ in range(3):
        core = 4 * (2 ** (1 / beta) - 1) / (ratio * width) ** 2
        disc, _ = moffat(points, np.array([[0.0, 0.0, core, 0.0, core]]), beta, nodes=3)
        size = round(np.sqrt(disc.shape[1]))
        zero = np.zeros(1)
        seen = shapes(disc.reshape(1, size, size).astype(float), zero, zero, start=width).fwhm[0]
        if not np.isfinite(seen):
            return 1.0
        ratio *= width / float(seen)
    return ratio


def ladder(fluxes: Fluxes, noise: float, fraction: float, highest: float) -> Array:
    """Brightnesses (electron/s, all beams, all the light) of the artificial stars, brightest first, shape (STEPS,).

    Parameters
    ----------
    fluxes : Fluxes
        Of the target alone: the brightest step is as bright, or four times the faintest where that is more.
    noise : float
        Variance V (electrons squared) of an empty aperture, all beams and frames together. The faintest step has N
        electrons with  2 (N + V) / N^2 = FAINTEST^2,  the square of its error of q.
    fraction : float
        Share of the light inside the aperture.
    highest : float
        What saturation allows, electron/s.
    """
    used = np.isfinite(fluxes.flux[0]).any(axis=1)
    seconds = float(np.sum(fluxes.exposure[used]))
    if not seconds > 0:
        raise InputError(f"{fluxes.target}: no frame of this visit could be measured; nothing to inject beside")
    square = FAINTEST**2
    faint = (1 + np.sqrt(1 + 2 * square * noise)) / square
    bright = max(float(np.nansum(fluxes.flux[0])), 4 * faint)
    top = min(bright / (fraction * seconds), highest)
    return np.asarray(np.geomspace(top, min(faint / (fraction * seconds), top / 2), STEPS))


@dataclass(frozen=True)
class FrameLight:
    """How the visit's frames and beams see an unpolarised star of one electron/s: electrons, shape (K, B)."""

    electrons: Array

    @staticmethod
    def of(fluxes: Fluxes, calibration: Calibration | None) -> FrameLight:
        """From the target's own light: its brightness in each frame and the gain of each beam."""
        _, frames, beams = fluxes.shape
        transparency, gain = np.ones(frames), np.ones(beams)
        if beams > 1:
            solution = fit_counts(fluxes, gain="visit", calibration=calibration)
            scale = solution.fit.scale[0] / fluxes.exposure
            known = np.isfinite(fluxes.flux[0]).all(axis=1) & (scale > 0)
            if np.isfinite(solution.gain[0]).all() and known.any():
                gain = solution.gain[0]
                transparency = np.where(known, scale, np.median(scale[known]))
                transparency = np.maximum(transparency / transparency.mean(), LEAST_TRANSPARENCY)
            else:
                gain = fluxes.throughput
        return FrameLight((fluxes.exposure * transparency)[:, None] * gain / gain.sum())

    def highest(self, profile: StarProfile, room: Array) -> float:
        """Brightness (electron/s) that keeps every peak below `room` electrons, shape (K, B); twice for modulation."""
        frames, beams = self.electrons.shape
        peak = np.array([[profile.peak(k, b) for b in range(beams)] for k in range(frames)])
        limits = np.maximum(room, 0.0) / np.maximum(self.electrons * peak * (1 + max(DEGREES)), 1e-30)
        return float(np.min(limits))


def expected_electrons(
    light: FrameLight,
    rate: Array,
    z: NDArray[np.complex128],
    x: Array,
    y: Array,
    fluxes: Fluxes,
    calibration: Calibration | None,
) -> Array:
    """Electrons that each beam and frame expects of the artificial stars, shape (S, K, B).

    Parameters
    ----------
    rate : ndarray, shape (S,)
        electron/s, all beams, mean over the frames.
    z : ndarray of complex, shape (S,)
        q + i u on the sky; as observed, in the instrument frame, without a calibration.
    x, y : ndarray, shape (S,)
        Pixels of the first beam and frame.
    fluxes : Fluxes
        Gives the plate's angles, chi, eta and times of the frames.
    """
    seen = np.broadcast_to(z[:, None], (len(z), fluxes.shape[1]))
    if calibration is not None:
        chi, eta, sense = fluxes.position_angle, fluxes.parallactic, fluxes.sense
        ip, amplitude = calibration.terms(fluxes.filter, x, y, chi, eta, sense, fluxes.mjd)
        seen = observed_from_instrument(instrument_from_sky(z[:, None], chi, sense), ip, amplitude)
    rows = modulation_rows(fluxes.wave_plate, fluxes.analyser, fluxes.retardance)
    modulation = 1 + rows[..., 0] * seen.real[..., None] + rows[..., 1] * seen.imag[..., None]
    return np.asarray(rate[:, None, None] * light.electrons * modulation)


def truths(count: int, repeat: int, rng: np.random.Generator) -> tuple[NDArray[np.int_], NDArray[np.complex128]]:
    """Step of brightness (from 0) and q + i u of each artificial star."""
    number = np.arange(count) + repeat
    degree = np.asarray(DEGREES)[number % len(DEGREES)]
    return number % STEPS, degree * np.exp(2j * np.pi * rng.random(count))
