"""The sources of a visit: where the targets lie, which stars surround them, and what those can do to them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.fluxes import Fluxes
from hwpol.frames import FrameSet
from hwpol.frames.world import World
from hwpol.instrument.description import Section
from hwpol.night.config_objects import TargetConfig
from hwpol.night.images import VisitImages
from hwpol.night.seeing import frame_seeing
from hwpol.photometry.measure import Measurement, Stars
from hwpol.photometry.neighbours import contamination, ratio_error
from hwpol.photometry.scene import Known, foreign_light
from hwpol.registration import Placement

Array = NDArray[np.float64]

#: Pixels within which a star is taken for the target at a given place.
NEAR_XY = 12.0
#: Seconds of arc within which a star is taken for the target at a place from world coordinates.
NEAR_SKY = 12.0
#: Fraction of the fwhm within which a detected star and a place are one source.
SAME_STAR = 0.5


def hint_of(target: TargetConfig, frames: FrameSet, world: World | None) -> tuple[float, float] | None:
    """Where a target lies in the first beam and frame by its configuration or coordinates; None where nothing says."""
    if target.xy is not None:
        return float(target.xy[0]), float(target.xy[1])
    if world is None:
        return None
    ra = target.ra if target.ra is not None else float(frames.table["ra"][0])
    dec = target.dec if target.dec is not None else float(frames.table["dec"][0])
    if not np.isfinite([ra, dec]).all():
        return None
    x, y = world.pixel(ra, dec)
    if not np.isfinite([x[0], y[0]]).all():
        return None
    text = str(frames.table["shape"][0])
    sides = [float(part) for part in text.replace("x", " ").split() if part.strip().isdigit()]
    inside = len(sides) < 2 or (-0.5 < x[0] < sides[0] and -0.5 < y[0] < sides[1])
    return (float(x[0]), float(y[0])) if inside else None


def find_targets(
    targets: tuple[TargetConfig, ...],
    placement: Placement,
    hints: list[tuple[float, float] | None],
    pixel_scale: float | None,
    notes: list[str],
) -> tuple[Array, Array, NDArray[np.int_]]:
    """Pixels of the targets in the first beam and frame, and the flags of how they were found."""
    stars = placement.stars
    x, y, flags = [], [], []
    for target, hint in zip(targets, hints, strict=True):
        flag = 0
        place_ = hint
        if hint is not None and len(stars):
            near = NEAR_XY if target.xy is not None or not pixel_scale else max(NEAR_XY, NEAR_SKY / pixel_scale)
            distance = np.hypot(stars.x - hint[0], stars.y - hint[1])
            # The nearest star, but not a faint one in place of a bright one a little further away.
            with np.errstate(divide="ignore"):
                score = np.log10(np.maximum(stars.flux, 1e-9)) - (2.0 * distance / near) ** 2
            nearest = int(np.argmax(np.where(distance <= near, score, -np.inf)))
            if distance[nearest] <= near:
                place_ = float(stars.x[nearest]), float(stars.y[nearest])
            elif target.xy is None:
                place_ = None
                notes.append(
                    f"{target.name}: no star within {near:.0f} pixels of its coordinates; "
                    "taken for the brightest source that has its partner in every beam"
                )
            else:
                flag |= int(Flag.NOT_FOUND)
        if place_ is None:
            if not len(stars):
                raise InputError(
                    f"{target.name}: no star was found in the first frame of its visit and its place is not known; "
                    "give [[target]] xy = [x, y]"
                )
            flag |= int(Flag.POSITION_GUESSED)
            brightest = int(np.argmax(stars.flux))
            place_ = float(stars.x[brightest]), float(stars.y[brightest])
            if hint is None:
                notes.append(
                    f"{target.name}: place guessed from the brightest source that has its partner in every beam"
                )
        x.append(place_[0])
        y.append(place_[1])
        flags.append(flag)
    return np.asarray(x), np.asarray(y), np.asarray(flags, dtype=int)


def kept_from_sky(placement: Placement, fwhm: float) -> Stars | None:
    """The known stars with the radius within which their light is no sky."""
    stars = placement.stars
    if not len(stars):
        return None
    x, y = placement.positions(stars.x, stars.y)
    # A star ten times brighter is felt half a width further out (wings of a Moffat profile against the noise).
    reach = 1.5 + 0.5 * np.log10(np.maximum(np.nan_to_num(stars.snr, nan=10.0) / 10.0, 1.0))
    return Stars(x, y, np.minimum(reach, 3.5) * fwhm)


def foreign_error(placement: Placement, images: VisitImages, x: Array, y: Array, fwhm: float, radius: float) -> Array:
    """Error of q that other stars' light can make in apertures of sources at (x, y) of the first frame, shape (S,)."""
    stars = placement.stars
    if not len(stars):
        return np.zeros(len(x))
    alone = np.hypot(stars.x[:, None] - x, stars.y[:, None] - y).min(axis=0) > SAME_STAR * fwhm
    everyone_x, everyone_y = np.append(stars.x, x[alone]), np.append(stars.y, y[alone])
    flux = np.append(stars.flux, np.full(int(alone.sum()), np.nanmin(stars.flux)))
    px, py = placement.positions(everyone_x, everyone_y)
    flux = np.repeat(flux[:, None], px.shape[2], axis=1)
    share = contamination(px[:, :1], py[:, :1], flux, fwhm, radius, plane_of_beam=images.hdu_of_beam)
    error = np.nan_to_num(ratio_error(share, frame_seeing(placement.fwhm)))
    nearest = np.hypot(everyone_x[:, None] - x, everyone_y[:, None] - y).argmin(axis=0)
    return np.asarray(error[nearest])


def neighbour_flags(fluxes: Fluxes, error: Array) -> NDArray[np.int_]:
    """NEIGHBOUR where other stars can change q by more than its photon error."""
    with np.errstate(invalid="ignore", divide="ignore"):
        counts = np.nansum(fluxes.flux, axis=(1, 2))
        photon = np.sqrt(2 * np.nansum(fluxes.variance, axis=(1, 2))) / counts
    return np.where(error > photon, int(Flag.NEIGHBOUR), 0)


def field_sources(placement: Placement, x: Array, y: Array, fwhm: float) -> tuple[Array, Array]:
    """First-beam positions of the field's stars, brightest first, without the targets."""
    stars = placement.stars
    distance = np.hypot(stars.x[:, None] - x, stars.y[:, None] - y).min(axis=1, initial=np.inf)
    chosen = np.flatnonzero(distance > max(2.0, 0.5 * fwhm))
    order = chosen[np.argsort(-stars.flux[chosen], kind="stable")]
    return stars.x[order], stars.y[order]


def without_neighbours(
    measured: Measurement, images: VisitImages, placement: Placement, x: Array, y: Array, sections: list[Section | None]
) -> Measurement:
    """Take the light of known neighbours out of apertures at (S, K, B) places."""
    stars = placement.stars
    if not len(stars):
        return measured
    known = Known(*placement.positions(stars.x, stars.y), stars.flux)
    foreign = foreign_light(
        images, x, y, measured.radii, known, placement.fwhm, hdu_of_beam=images.hdu_of_beam, sections=sections
    )
    return replace(measured, flux=measured.flux - foreign.light, variance=measured.variance + foreign.variance)
