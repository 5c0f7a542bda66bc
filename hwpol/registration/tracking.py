"""Following a target that moves among the stars."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from hwpol.pixels import Box
from hwpol.registration.centroids import measure
from hwpol.registration.detection import detect
from hwpol.registration.placement import Placement
from hwpol.registration.visit import Images

Floats = NDArray[np.float64]

# Half side of the field searched for the target in pixels, before its motion is known and after.
_WIDE, _NARROW = 40.0, 12.0


def follow_target(placement: Placement, images: Images, clock: Floats, notes: list[str], fwhm: float) -> Placement:
    """Replace the frames' shifts by those that follow the target.

    The target is looked for where linear motion against the stars predicts it, in every beam. Where its places agree
    with linear motion within their errors that motion is used; else each frame's own place.
    """
    assert placement.target is not None
    x0, y0 = placement.target
    px, py = placement.positions([x0], [y0])
    own = np.zeros((len(clock), 2))
    error = np.full(len(clock), np.nan)
    rate = np.zeros(2)
    for k in np.argsort(clock, kind="stable"):
        seen = np.flatnonzero(np.isfinite(error))
        reach = _WIDE if len(seen) < 2 else _NARROW
        guess = own[seen[-1]] + rate * (clock[k] - clock[seen[-1]]) if len(seen) else np.zeros(2)
        found = _beams_place(images, k, px[0, k] + guess[0], py[0, k] + guess[1], placement.fwhm[k], reach, fwhm)
        if found is None:
            continue
        own[k], error[k] = guess + found[0], found[1]
        seen = np.flatnonzero(np.isfinite(error))
        if len(seen) >= 2 and np.ptp(clock[seen]) > 0:
            rate = np.array([np.polyfit(clock[seen], own[seen, i], 1)[0] for i in (0, 1)])
    seen = np.flatnonzero(np.isfinite(error))
    if not len(seen):
        notes.append("the moving target was not found in any frame: the stars' shifts are used")
        return placement
    smooth = _linear(own, error, clock, seen)
    track = own - own[seen[0]] if smooth is None else smooth
    missing = np.setdiff1d(np.arange(len(clock)), seen)
    if len(missing):
        lost = ", ".join(str(k + 1) for k in missing)
        notes.append(f"frame {lost}: the moving target was not seen; its place was interpolated")
        if smooth is None:
            order = seen[np.argsort(clock[seen], kind="stable")]
            for i in (0, 1):
                track[missing, i] = np.interp(clock[missing], clock[order], track[order, i])
    start = own[0] if seen[0] == 0 else np.zeros(2)
    return replace(
        placement,
        shift=placement.shift + track,
        ok=placement.ok | np.isfinite(error),
        target=(x0 + float(start[0]), y0 + float(start[1])),
    )


def _beams_place(
    images: Images, k: int, x: Floats, y: Floats, fwhm: Floats, reach: float, fallback: float
) -> tuple[Floats, float] | None:
    """Mean displacement of the target from its guess over the beams, and its error."""
    offsets, weights = [], []
    for b in range(len(x)):
        width = float(fwhm[b]) if np.isfinite(fwhm[b]) else fallback
        half = int(np.ceil(reach + 6 * width))
        cx, cy = round(float(x[b])), round(float(y[b]))
        pixels = images(k, b, Box(cx - half, cy - half, cx + half + 1, cy + half + 1))
        stars = detect(pixels, fwhm=width)
        distance = np.hypot(stars.x - x[b], stars.y - y[b])
        if not (distance <= reach).any():
            continue
        # The brightest star counts for more than the nearest when the motion is not known yet.
        best = int(np.argmax(np.where(distance <= reach, stars.flux / (1.0 + (3 * distance / reach) ** 2), -1.0)))
        found = measure(pixels, stars.x[best], stars.y[best], width)
        if found.ok[0]:
            offsets.append([found.x[0] - x[b], found.y[0] - y[b]])
            weights.append(1.0 / (found.err[0] ** 2 + 1e-4))
    if not offsets:
        return None
    spread = np.ptp(np.array(offsets), axis=0)
    if len(offsets) > 1 and np.hypot(*spread) > 3.0:
        return None
    return np.average(offsets, axis=0, weights=weights), float(1.0 / np.sqrt(np.sum(weights)))


def _linear(own: Floats, error: Floats, clock: Floats, seen: NDArray[np.int64]) -> Floats | None:
    """Linear motion (K, 2), zero in the first frame seen; None where the places do not follow it."""
    if len(seen) < 4 or np.ptp(clock[seen]) == 0:
        return None
    t = clock - clock[seen[0]]
    fitted = np.column_stack([np.polyval(np.polyfit(t[seen], own[seen, i], 1, w=1 / error[seen]), t) for i in (0, 1)])
    chi2 = float((((own - fitted)[seen] / error[seen, None]) ** 2).sum()) / (2 * (len(seen) - 2))
    return fitted - fitted[seen[0]] if chi2 < 3.0 else None
