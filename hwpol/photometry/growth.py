"""Size and shape of images, encircled flux against radius, and lengths given in units of the fwhm."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError

Floats = NDArray[np.float64]

SIGMA_TO_FWHM = 2.3548200450309493  # sqrt(8 ln 2)

_PASSES = 40
_CHUNK_PIXELS = 1 << 15
_SETTLED = 1e-4  # relative change of the width between passes: far below what a width is used for (1e-2)


@dataclass(frozen=True)
class Shapes:
    """Gaussian-matched shapes of images.

    Attributes
    ----------
    fwhm : ndarray
        Pixels, geometric mean of the two axes of the matched Gaussian (the pixel's own width is in it); NaN where the
        image is too faint, masked or not peaked.
    ellipticity : ndarray
        1 - minor / major.
    angle : ndarray
        Degrees from the x axis towards y, direction of the major axis, [0, 180).
    """

    fwhm: Floats
    ellipticity: Floats
    angle: Floats


def shapes(data: Floats, dx: Floats, dy: Floats, *, start: float = 3.0) -> Shapes:
    """Measure widths by adaptive Gaussian moments about given positions.

    Parameters
    ----------
    data : ndarray, shape (..., n, n)
        Sky-subtracted stamps, electrons, n odd.
    dx, dy : ndarray, shape (...)
        Position of the source from the middle pixel.
    start : float
        First guess of the fwhm, pixels.

    Returns
    -------
    Shapes
        Arrays of shape (...).

    Notes
    -----
    The weight is the Gaussian whose covariance C equals twice the weighted second moments of the image, found by
    iteration (Bernstein & Jarvis 2002, AJ 123, 583, from memory). For a Gaussian image the result is its own width; for
    a Moffat profile of index 3 and fwhm above 3 pixels it is 13 to 16 percent above the fwhm of the profile.
    """
    size, lead = data.shape[-1], data.shape[:-2]
    stamps = np.asarray(data, dtype=np.float64).reshape(-1, size * size)
    x, y = (np.asarray(a, dtype=np.float64).reshape(-1) for a in (dx, dy))
    step = max(1, _CHUNK_PIXELS // size**2)
    blocks = [_matched(stamps[i : i + step], x[i : i + step], y[i : i + step], start) for i in range(0, len(x), step)]
    cxx, cyy, cxy = np.concatenate(blocks or [np.empty((0, 3))]).T
    middle, spread = 0.5 * (cxx + cyy), np.hypot(0.5 * (cxx - cyy), cxy)
    major, minor = np.sqrt(middle + spread), np.sqrt(np.maximum(middle - spread, 0.0))
    angle = np.mod(0.5 * np.degrees(np.arctan2(2.0 * cxy, cxx - cyy)), 180.0)
    fwhm = SIGMA_TO_FWHM * np.sqrt(major * minor)
    return Shapes(fwhm.reshape(lead), (1.0 - minor / major).reshape(lead), angle.reshape(lead))


def _matched(stamps: Floats, dx: Floats, dy: Floats, start: float) -> Floats:
    """Covariances (xx, yy, xy) of the matched Gaussians of N flattened stamps, (N, 3); NaN where there is none."""
    count, size = len(stamps), round(np.sqrt(stamps.shape[1]))
    offset = np.arange(size) - size // 2
    gx = np.tile(offset, size) - dx[:, None]
    gy = np.repeat(offset, size) - dy[:, None]
    first = (start / SIGMA_TO_FWHM) ** 2
    cov = np.tile([first, first, 0.0], (count, 1))
    done = np.zeros(count, np.bool_)
    active = np.flatnonzero(np.isfinite(dx) & np.isfinite(dy) & np.isfinite(stamps).all(axis=1))
    largest = (0.75 * size / SIGMA_TO_FWHM) ** 2  # wider images than that are the stamp, not the star
    for _ in range(_PASSES):
        if not len(active):
            break
        x, y = gx[active], gy[active]
        cxx, cyy, cxy = cov[active].T[:, :, None]
        det = cxx * cyy - cxy**2
        weight = np.exp(-0.5 * (cyy * x * x - 2 * cxy * x * y + cxx * y * y) / det) * stamps[active]
        total = weight.sum(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            raw = np.stack([(weight * x * x).sum(1), (weight * y * y).sum(1), (weight * x * y).sum(1)])
            fresh = (2.0 * raw / total).T
        sound = (total > 0) & np.isfinite(fresh).all(axis=1)
        sound &= (fresh[:, :2] > 0.05).all(axis=1) & (fresh[:, :2] < largest).all(axis=1)
        sound &= fresh[:, 0] * fresh[:, 1] - fresh[:, 2] ** 2 > 1e-3
        settled = np.abs(fresh[:, :2] / cov[active, :2] - 1.0).max(axis=1) < _SETTLED
        cov[active[sound]] = fresh[sound]
        done[active[sound & settled]] = True
        active = active[sound & ~settled]
    cov[~done] = np.nan
    return cov


def frame_fwhm(fwhm: Floats, weight: Floats) -> Floats:
    """Return the weighted median fwhm of each frame over sources and beams.

    Parameters
    ----------
    fwhm, weight : ndarray, shape (S, K, B)
        Pixels; weight for instance the signal-to-noise ratio. Not finite or not positive entries are left out.

    Returns
    -------
    ndarray, shape (K,)
        Pixels; NaN for frames without a measured width.
    """
    frames = fwhm.shape[1]
    out = np.full(frames, np.nan)
    for k in range(frames):
        value, share = fwhm[:, k].ravel(), weight[:, k].ravel()
        use = np.isfinite(value) & np.isfinite(share) & (share > 0)
        if use.any():
            order = np.argsort(value[use])
            value, share = value[use][order], share[use][order]
            out[k] = value[np.searchsorted(np.cumsum(share), 0.5 * share.sum())]
    return out


_MULTIPLE = re.compile(r"\s*([0-9]*\.?[0-9]+(?:[eE][+-]?[0-9]+)?)\s*fwhm\s*")


def resolve(extent: float | str, fwhm: ArrayLike, *, place: str = "photometry.radius") -> Floats:
    """Return a length in pixels: a number is pixels, "2.0 fwhm" a multiple of `fwhm`.

    Parameters
    ----------
    extent : float or str
        The length as the user gave it.
    fwhm : array_like
        Pixels, for instance (K,).
    place : str
        Name of the setting, for the message.

    Returns
    -------
    ndarray
        Pixels, the shape of `fwhm`.

    Raises
    ------
    InputError
        The text is neither a positive number nor a multiple of the fwhm, or the fwhm is unknown where it is needed.
    """
    size = np.asarray(fwhm, dtype=np.float64)
    match = _MULTIPLE.fullmatch(extent) if isinstance(extent, str) else None
    if match:
        if not np.all(np.isfinite(size) & (size > 0)):
            raise InputError(f"{place} = {extent!r}: the fwhm is not known in every frame; give the length in pixels")
        return float(match.group(1)) * size
    try:
        value = float(extent)
    except ValueError:
        value = np.nan
    if not (np.isfinite(value) and value > 0):
        raise InputError(f'{place} = {extent!r}: expected pixels > 0, or a multiple of the fwhm such as "2.0 fwhm"')
    return np.full(size.shape, value)


def encircled(flux: Floats) -> Floats:
    """Return flux(radius) as a fraction of the flux in the largest radius.

    Parameters
    ----------
    flux : ndarray, shape (R, ...)
        Sky-subtracted sums, radii ascending.

    Returns
    -------
    ndarray, shape (R, ...)
        NaN where the largest aperture holds no positive flux.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        fraction = flux / flux[-1]
    return np.where(flux[-1] > 0, fraction, np.nan)


def plateau_start(curve: Floats, tolerance: float) -> NDArray[np.intp]:
    """Return the index of the first radius from which on the encircled fraction stays within `tolerance` of 1.

    Parameters
    ----------
    curve : ndarray, shape (R, ...)
        From `encircled`.
    tolerance : float
        Fraction, for instance 0.01.

    Returns
    -------
    ndarray of int, shape (...)
        R - 1 where no smaller radius does (or the curve is NaN).
    """
    within = np.abs(curve - 1.0) <= tolerance
    return np.minimum(len(curve) - within[::-1].cumprod(axis=0).sum(axis=0), len(curve) - 1)
