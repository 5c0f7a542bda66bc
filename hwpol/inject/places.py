"""Free places for artificial stars: inside every beam in every frame, away from every known star."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from hwpol.instrument.description import Section
from hwpol.night.images import VisitImages
from hwpol.night.sources import NEAR_XY
from hwpol.photometry.measure import Stars, measure
from hwpol.registration import Placement

Array = NDArray[np.float64]

#: Places tried in one field.
TRIALS = 1500
#: Distance from other stars and borders, as shares of the widest wanted; the first that leaves room for all stars
#: serves, else the one that leaves room for most.
SHARES = (1.0, 0.75, 0.55, 0.4)
#: Summed light of a place, in its errors, from which on it is not free.
NOT_EMPTY = 3.5
#: Share of the frames that a place may lose to bad pixels.
LOST = 0.2


def free_places(
    placement: Placement,
    images: VisitImages,
    sections: Sequence[Section],
    targets: tuple[Array, Array],
    wanted: int,
    fwhm: float,
    radius: float,
    annulus: tuple[float, float],
    rng: np.random.Generator,
) -> tuple[Array, Array, float]:
    """Places (pixels of the first beam and frame) that artificial stars can have, at most `wanted`.

    The third value is the median variance (electrons squared) of their apertures, all beams and frames summed.

    A place keeps its distance from known stars, targets, borders and other places in every beam, and was measured to
    be empty: known stars alone are not all that shine.
    """
    home = sections[0]
    x = rng.uniform(home.x0, home.x1 - 1, TRIALS)
    y = rng.uniform(home.y0, home.y1 - 1, TRIALS)
    px, py = placement.positions(x, y)
    room = _room(px, py, sections)
    planes = np.asarray(images.hdu_of_beam)
    stars = placement.stars
    known_x, known_y = np.append(targets[0], stars.x), np.append(targets[1], stars.y)
    kx, ky = (a[:, 0] for a in placement.positions(known_x, known_y))
    nearest = _nearest(px[:, 0], py[:, 0], kx, ky, planes)
    widest = annulus[1] + radius
    best: NDArray[np.int_] = np.zeros(0, dtype=int)
    noise = float("nan")
    for share in SHARES:
        apart = max(share * widest, NEAR_XY + 1.0, 2 * radius + fwhm)
        fit = np.flatnonzero((room >= max(share * annulus[1], radius + 1.0)) & (nearest >= apart))
        chosen = _spread(px[:, 0], py[:, 0], fit, planes, apart, 2 * wanted)
        if len(chosen) > len(best):
            empty, variance = _empty(images, placement, sections, px[chosen], py[chosen], radius, annulus, fwhm)
            chosen, variance = chosen[empty][:wanted], variance[empty][:wanted]
            if len(chosen) > len(best):
                best, noise = chosen, float(np.median(variance))
        if len(best) >= wanted:
            break
    return x[best], y[best], noise


def _room(px: Array, py: Array, sections: Sequence[Section]) -> Array:
    """Least distance from the border of a place's section over frames and beams, shape (S,)."""
    sides = []
    for b, s in enumerate(sections):
        x, y = px[:, :, b], py[:, :, b]
        sides.append(np.minimum(np.minimum(x - s.x0, s.x1 - 1 - x), np.minimum(y - s.y0, s.y1 - 1 - y)).min(axis=1))
    return np.asarray(np.min(sides, axis=0))


def _nearest(x: Array, y: Array, ox: Array, oy: Array, planes: NDArray[np.int_]) -> Array:
    """Distance of places (S, B) to the nearest image of others (T, B) on the same plane, shape (S,)."""
    nearest = np.full(len(x), np.inf)
    for b, plane in enumerate(planes):
        for c in np.flatnonzero(planes == plane):
            distance = np.hypot(x[:, b, None] - ox[:, c], y[:, b, None] - oy[:, c])
            nearest = np.minimum(nearest, distance.min(axis=1, initial=np.inf))
    return nearest


def _spread(
    x: Array, y: Array, fit: NDArray[np.int_], planes: NDArray[np.int_], apart: float, most: int
) -> NDArray[np.int_]:
    chosen: list[int] = []
    for place in fit:
        if len(chosen) == most:
            break
        mine = slice(place, place + 1)
        if not chosen or _nearest(x[mine], y[mine], x[chosen], y[chosen], planes)[0] >= apart:
            chosen.append(int(place))
    return np.asarray(chosen, dtype=int)


def _empty(
    images: VisitImages,
    placement: Placement,
    sections: Sequence[Section],
    px: Array,
    py: Array,
    radius: float,
    annulus: tuple[float, float],
    fwhm: float,
) -> tuple[NDArray[np.bool_], Array]:
    """Which places hold no light and lose few frames, in the frames as they are; their summed variance."""
    stars = placement.stars
    known = Stars(*placement.positions(stars.x, stars.y), np.full(len(stars), 3.0 * fwhm)) if len(stars) else None
    found = measure(
        images, px, py, radii=[radius], annulus=annulus, hdu_of_beam=images.hdu_of_beam, sections=sections, stars=known,
        hits=False,
    )  # fmt: skip
    flux, variance = found.flux[0], found.variance[0]
    lost = np.mean(~np.isfinite(flux).all(axis=2), axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        total = np.nansum(variance, axis=(1, 2))
        light = np.nansum(flux, axis=(1, 2)) / np.sqrt(total)
    return np.asarray((lost <= LOST) & (np.abs(light) < NOT_EMPTY)), np.asarray(total)
