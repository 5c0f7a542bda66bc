"""Foreign light in apertures: every star, in every beam, as a neighbour of every source."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

Floats = NDArray[np.float64]

BETA = 3.0
"""Moffat index of the profile assumed: seeing with ordinary wings."""

SEEING_SPREAD = 0.1
"""Least relative rms change of seeing between the frames of a cycle that is reckoned with."""

ALIEN = 0.05
"""Difference between the beam ratios (half logarithm) of neighbour and source that is reckoned with."""

_STEP = 1.05  # factor of the fwhm by which the slope is taken
_REACH = 12.0  # fwhm beyond which a neighbour's light is smooth enough to be the sky's


def light_in_aperture(distance: Floats, fwhm: Floats, radius: float, beta: float = BETA) -> Floats:
    """Return the fraction of a star's light that falls into a circle at some distance from it.

    Parameters
    ----------
    distance : ndarray, shape (N,)
        From the star to the centre of the circle, in the unit of `radius`.
    fwhm : ndarray, shape (N,)
    radius : float
    beta : float
        Moffat index, > 1.

    Returns
    -------
    ndarray, shape (N,)
        0 to 1; good to 1e-3 of itself.

    Notes
    -----
    The Moffat profile is integrated over the circle on Gauss-Legendre nodes in radius and equal steps in angle about
    the circle's centre.
    """
    scale = fwhm / (2.0 * np.sqrt(2.0 ** (1.0 / beta) - 1.0))
    node, share = np.polynomial.legendre.leggauss(24)
    r = 0.5 * radius * (node + 1.0)
    angle = 2.0 * np.pi * (np.arange(48) + 0.5) / 48
    weight = (0.5 * radius * share * r)[:, None] * (2.0 * np.pi / 48)
    out = np.empty(len(distance))
    for i in range(0, len(distance), 256):
        part = slice(i, i + 256)
        d, a = distance[part, None, None], scale[part, None, None]
        r2 = d**2 + r[:, None] ** 2 + 2.0 * d * r[:, None] * np.cos(angle)
        out[part] = (weight * (beta - 1.0) / (np.pi * a**2) * (1.0 + r2 / a**2) ** -beta).sum(axis=(1, 2))
    return out


@dataclass(frozen=True)
class Contamination:
    """Foreign light; S sources, B beams.

    Attributes
    ----------
    fraction : ndarray, shape (S, B)
        Light of other stars in the aperture over the source's own; NaN for sources without positive flux.
    slope : ndarray, shape (S, B)
        d fraction / d ln(fwhm): how it follows the seeing.
    """

    fraction: Floats
    slope: Floats


def contamination(
    x: Floats, y: Floats, flux: Floats, fwhm: float, radius: float, *, plane_of_beam: Sequence[int] | None = None
) -> Contamination:
    """Estimate the light that other stars, in any beam, send into every aperture.

    Parameters
    ----------
    x, y : ndarray, shape (S, B) or (S, K, B)
        Positions of all known stars in every beam, pixels; of several frames the first stands for all.
    flux : ndarray, shape (S, B)
        Electrons in apertures of `radius`, of any one scale; entries that are NaN or not positive send no light.
    fwhm, radius : float
        Pixels.
    plane_of_beam : sequence of int, optional
        Beams with the same number share a piece of detector, so that light of one reaches the other; default: all do.
        Beams on strips of their own, behind a mask, get numbers of their own.

    Returns
    -------
    Contamination

    Notes
    -----
    Every star is taken as a circular Moffat profile of index `BETA`. A neighbour at 2.5 fwhm of equal brightness sends
    3.9 percent into an aperture of 1.5 fwhm.
    """
    xs, ys = (np.asarray(a, dtype=np.float64) for a in (x, y))
    if xs.ndim == 3:
        xs, ys = xs[:, 0], ys[:, 0]
    count, beams = xs.shape
    plane = np.zeros(beams, np.intp) if plane_of_beam is None else np.asarray(plane_of_beam)
    fraction, slope = np.zeros((count, beams)), np.zeros((count, beams))
    width = np.array([1.0 / _STEP, 1.0, _STEP]) * fwhm
    own = light_in_aperture(np.zeros(3), width, radius)
    for number in np.unique(plane):
        here = np.flatnonzero(plane == number)
        px, py, light = (array[:, here].ravel() for array in (xs, ys, flux))
        star = np.repeat(np.arange(count), len(here))
        place = np.isfinite(px) & np.isfinite(py)
        sends = place & np.isfinite(light) & (light > 0)
        index = np.flatnonzero(place)
        pairs = cKDTree(np.column_stack([px, py])[index]).query_pairs(_REACH * fwhm + radius, output_type="ndarray")
        pairs = index[np.concatenate([pairs, pairs[:, ::-1]])]
        pairs = pairs[sends[pairs[:, 1]] & sends[pairs[:, 0]]]
        target, other = pairs.T
        # A star is no neighbour of itself where it is measured twice at one place.
        apart = np.hypot(px[target] - px[other], py[target] - py[other])
        real = (star[target] != star[other]) | (apart > 0.5)
        target, other, apart = target[real], other[real], apart[real]
        each = [
            light[other] / light[target] * light_in_aperture(apart, np.full(len(apart), w), radius) / o
            for w, o in zip(width, own, strict=True)
        ]
        low, middle, high = (np.bincount(target, values, len(px)).reshape(count, -1) for values in each)
        fraction[:, here] = middle
        slope[:, here] = (high - low) / (2.0 * np.log(_STEP))
    dark = ~(np.isfinite(flux) & (flux > 0))
    return Contamination(np.where(dark, np.nan, fraction), np.where(dark, np.nan, slope))


def ratio_error(foreign: Contamination, fwhm: Floats) -> Floats:
    """Estimate how far foreign light can shift half the log ratio of a source's beams.

    Parameters
    ----------
    foreign : Contamination
    fwhm : ndarray, shape (K,)
        Of the frames, pixels.

    Returns
    -------
    ndarray, shape (S,)
        To be compared with the error of what is made from the ratios; NaN where nothing is known.

    Notes
    -----
    Light that is the same share of both beams cancels; the difference d of the shares acts as a gain, harmless while it
    stands still. Its change with the seeing is rms |d'| s, s the rms of ln(fwhm) between frames (at least
    `SEEING_SPREAD`), halved in the half log ratio: |d'| s / 2. That is the error where the seeing follows the frames
    in the worst order, and so the most that can happen. Neighbour and source differ in the ratio of their own beams by
    a few percent, which the mean share dilutes into `ALIEN` x share. The numbers follow from a Moffat model: an equal
    neighbour at 2.5 fwhm in one beam, aperture 1.5 fwhm, seeing 20 percent worse in one frame of a pair: 0.54 percent.
    """
    logs = np.log(fwhm[np.isfinite(fwhm) & (fwhm > 0)])
    spread = max(SEEING_SPREAD, float(logs.std()) if len(logs) else 0.0)
    apart = foreign.slope.max(axis=1) - foreign.slope.min(axis=1)
    return 0.5 * apart * spread + ALIEN * foreign.fraction.max(axis=1)
