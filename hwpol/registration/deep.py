"""The stars of a visit as its sharpest frames show them: pairs that blend in poor seeing are seen apart there."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import fields, replace

import numpy as np
from numpy.typing import NDArray

from hwpol.pixels import Box
from hwpol.registration.beams import beam_offsets
from hwpol.registration.detection import Stars
from hwpol.registration.placement import Placement
from hwpol.registration.visit import Images, Layout

Floats = NDArray[np.float64]

MOST = 3
"""Sharpest frames that are searched; where there are so many, a new star has to be seen in two of them."""

_ALIKE = 1.25  # times the sharpest frame's width beyond which a frame could not show as much
_SAME = 0.5  # fwhm within which two detections are one star
# Part of the stars' width to which images are smoothed: at the full width a companion of a fifth of the light at
# 2.5 fwhm is a ridge on the brighter star, and no peak of its own.
_NARROW = 0.6
_LEAST = 2.2  # pixels below which nothing is smoothed less
_APART = 1.4  # fwhm from a known star within which what is new is its own image, split by its shape
_SEARCH = 6.0  # pixels about the measured beam offset within which a partner is looked for


def deeper_stars(
    placement: Placement,
    images: Images,
    hdu_of_beam: Sequence[int],
    sections: Sequence[Box | None],
) -> Stars:
    """Detect stars with partners in every beam on the sharpest frames and add them to those of the reference.

    Parameters
    ----------
    placement : Placement
        Where the frames lie.
    images : callable
        As for `register`.
    hdu_of_beam, sections : sequence
        As for `register`.

    Returns
    -------
    Stars
        First the stars of `placement`, then the new ones, brightest first; x, y are places in the first frame and
        beam, raw pixels; `flux` electrons, on the scale of the sharpest frame for all.
    """
    stars = placement.stars
    usable = np.flatnonzero(placement.ok & np.isfinite(placement.fwhm).any(axis=1))
    width = np.full(len(placement.ok), np.nan)
    width[usable] = np.nanmedian(placement.fwhm[usable], axis=1)
    frames = usable[np.argsort(width[usable], kind="stable")][:MOST]
    if not len(frames):
        return stars
    frames = frames[width[frames] < _ALIKE * width[frames[0]]]
    layout = Layout(tuple(hdu_of_beam), tuple(sections))
    offsets = np.array([m.offset for m in placement.beam_map])
    seen = [_seen(placement, images, layout, offsets, int(k), float(width[k])) for k in frames]
    reach = _SAME * float(width[frames[0]])
    need = 2 if len(frames) >= MOST else 1
    merged, count = seen[0], np.ones(len(seen[0]), np.int64)
    for other in seen[1:]:
        near, index = _nearest(other, merged, reach)
        np.add.at(count, index[near], 1)
        merged = _joined(merged, other.select(~near))
        count = np.append(count, np.ones(int((~near).sum()), np.int64))
    near, index = _nearest(merged, stars, reach)
    flux = stars.flux.copy()
    if near.any():
        flux *= np.median(merged.flux[near] / np.maximum(stars.flux[index[near]], 1e-9))
        flux[index[near]] = merged.flux[near]
    close, _ = _nearest(merged, stars, _APART * float(width[frames[0]]))
    fresh = merged.select(~close & (count >= need))
    return _joined(replace(stars, flux=flux), fresh.select(np.argsort(-fresh.flux, kind="stable")))


def _seen(placement: Placement, images: Images, layout: Layout, offsets: Floats, k: int, width: float) -> Stars:
    """Stars of frame k that have all partners, at their places in the first frame."""
    lists = layout.detect(layout.load(images, k), min(width, max(_NARROW * width, _LEAST)))
    match = beam_offsets(lists, offsets, radius=_SEARCH)
    stars = lists[0].select(match.first)
    angle = np.radians(placement.rotation[k])
    c, s = np.cos(angle), np.sin(angle)
    away = placement.shift[k] + placement.beam_shift[k, 0] + np.array(placement.pivot)
    dx, dy = stars.x - away[0], stars.y - away[1]
    x, y = placement.pivot[0] + c * dx + s * dy, placement.pivot[1] - s * dx + c * dy
    return replace(stars, x=x, y=y)


def _nearest(stars: Stars, others: Stars, reach: float) -> tuple[NDArray[np.bool_], NDArray[np.int64]]:
    """Whether each star has one of the others within reach, and which is nearest."""
    from scipy.spatial import cKDTree

    if not len(others) or not len(stars):
        return np.zeros(len(stars), bool), np.zeros(len(stars), np.int64)
    distance, index = cKDTree(np.column_stack([others.x, others.y])).query(np.column_stack([stars.x, stars.y]))
    return np.asarray(distance <= reach), np.asarray(index, dtype=np.int64)


def _joined(first: Stars, second: Stars) -> Stars:
    return Stars(*(np.concatenate([getattr(first, f.name), getattr(second, f.name)]) for f in fields(first)))
