"""Pixels to flux, variance, sky and flags: electrons counted in apertures, whatever they mean."""

from hwpol.photometry.growth import encircled, frame_fwhm, plateau_start, resolve
from hwpol.photometry.measure import Measurement, Stars, measure
from hwpol.photometry.neighbours import Contamination, contamination, ratio_error

__all__ = [
    "Contamination",
    "Measurement",
    "Stars",
    "contamination",
    "encircled",
    "frame_fwhm",
    "measure",
    "plateau_start",
    "ratio_error",
    "resolve",
]
