"""Registration: where every source falls in every beam of every frame of a visit. Images come in as arrays alone."""

from hwpol.registration.beams import BeamMap, BeamMatch, beam_offsets, fit_beam_map, pick_target
from hwpol.registration.centroids import centroid, fwhm_of
from hwpol.registration.deep import deeper_stars
from hwpol.registration.detection import Stars, detect
from hwpol.registration.placement import Placement, Wobble
from hwpol.registration.register import register

__all__ = [
    "BeamMap",
    "BeamMatch",
    "Placement",
    "Stars",
    "Wobble",
    "beam_offsets",
    "centroid",
    "deeper_stars",
    "detect",
    "fit_beam_map",
    "fwhm_of",
    "pick_target",
    "register",
]
