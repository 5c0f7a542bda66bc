"""Light of known neighbours in apertures, from images of all of them fitted together in every frame and beam."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.instrument.description import Section
from hwpol.photometry import profiles
from hwpol.photometry.aperture import box_around, circle_overlap, gather, nearest_pixel
from hwpol.photometry.growth import SIGMA_TO_FWHM
from hwpol.pixels import Box, Pixels

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Images = Callable[[int, int, Box | None], Pixels]

REACH = 4.5
"""Neighbours within this many (median) fwhm of a source are fitted; the light of others is smooth, and the sky's."""

REMAINS = 0.2
"""Part of the estimated foreign light that may remain, for want of a better profile; a tenth was found with
neighbours of a fifth of the light at 2.5 fwhm and ellipticities that follow no model."""

_SAME = 0.4  # fwhm within which a star and a source are one
_MARGIN = 0.75  # fwhm of sky kept beyond the furthest neighbour
_MODELS = 8  # brightest stars whose images make the profile ...
_IMAGES = 240  # ... fewer where that makes more images than this
_TRIED = 60  # images on which the profile's index is chosen and its correction found
_CORE = 3.2  # fwhm to which images of model stars are fitted
_TURNS = 2  # of fitting shapes on images freed of their neighbours
_CUT = 4.0  # sigma beyond which a pixel has no say
_MODEL_ERROR = 0.02  # fraction of the model allowed as its error in the fit of heights
_FIRM = 25.0  # signal-to-noise ratio of an image from which its shape is taken


@dataclass(frozen=True)
class Foreign:
    """Light of neighbours in apertures; R radii, S sources, K frames, B beams.

    Attributes
    ----------
    light, variance : ndarray, shape (R, S, K, B)
        Electrons, and the variance of the estimate; 0 where there are no neighbours or nothing could be fitted.
    """

    light: Floats
    variance: Floats


@dataclass(frozen=True)
class Known:
    """Stars of the field; T stars.

    Attributes
    ----------
    x, y : ndarray, shape (T, K, B)
        Raw-array pixels.
    flux : ndarray, shape (T,)
        Any one scale.
    """

    x: Floats
    y: Floats
    flux: Floats


@dataclass
class _Group:
    """One source or model star in one beam with what lies around it: stamps over the frames, members' places.

    `at` (K, M, 2) from the stamp's middle pixel, the centre itself first; `beam` (M,) of each member.
    """

    beam: int
    data: Singles
    variance: Singles
    good: NDArray[np.bool_]
    at: Floats
    beams: NDArray[np.intp]
    height: Floats
    error: Floats


def foreign_light(
    images: Images,
    x: Floats,
    y: Floats,
    radii: Floats,
    known: Known,
    fwhm: Floats,
    *,
    hdu_of_beam: Sequence[int],
    sections: Sequence[Section | None],
) -> Foreign:
    """Estimate the light that known neighbours send into the apertures of sources.

    Parameters
    ----------
    images : callable
        ``images(k, b, box)`` returns `Pixels`.
    x, y : ndarray, shape (S, K, B)
        Places of the sources, raw-array pixels.
    radii : ndarray, shape (R, K)
        Pixels.
    known : Known
        All known stars; those within 0.4 fwhm of a source are the source.
    fwhm : ndarray, shape (K, B)
        Start values, pixels; NaN where unknown.

    Returns
    -------
    Foreign

    Notes
    -----
    In every frame and beam the images share an elliptical Moffat profile with a common radial correction (see
    `profiles`), fitted to the brightest stars with their neighbours removed; the heights of a source and its neighbours
    then follow from one linear fit with a constant sky. Pixels beyond 4 sigma (hits) are left out.
    """
    shape = (len(radii), *x.shape)
    out = Foreign(np.zeros(shape), np.zeros(shape))
    typical = float(np.nanmedian(fwhm)) if np.isfinite(fwhm).any() else np.nan
    if not np.isfinite(typical) or not len(known.flux):
        return out
    width = np.where(np.isfinite(fwhm), np.clip(fwhm, 0.4 * typical, 2.5 * typical), typical)
    work = _Work(images, known, typical, list(hdu_of_beam), list(sections))
    sources = [
        (s, b, members)
        for s in range(x.shape[0])
        for b in range(x.shape[2])
        if len(members := work.members(x[s], y[s], b)[0])
    ]
    if not sources:
        return out
    models = np.argsort(-known.flux, kind="stable")[: int(np.clip(_IMAGES // (x.shape[1] * x.shape[2]), 1, _MODELS))]
    groups = work.load([(x[s], y[s], b) for s, b, _ in sources], REACH + _MARGIN)
    bright = work.load([(known.x[t], known.y[t], b) for t in models for b in range(x.shape[2])], _CORE)
    profile, shapes = _profile(bright, width, typical)
    for (s, b, _), group in zip(sources, groups, strict=True):
        _heights(group, profile, shapes)
        _sum(group, profile, shapes, radii, out, s, b)
    return out


@dataclass(frozen=True)
class _Work:
    images: Images
    known: Known
    typical: float
    hdu: list[int]
    sections: list[Section | None]

    def members(
        self, x: Floats, y: Floats, beam: int, reach: float = REACH
    ) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """Stars and beams of the images that come within reach of a place (K, B) in a beam."""
        beams = np.flatnonzero(np.asarray(self.hdu) == self.hdu[beam])
        distance = np.hypot(
            self.known.x[:, :, beams] - x[None, :, beam, None], self.known.y[:, :, beams] - y[None, :, beam, None]
        )
        distance = np.where(np.isfinite(distance), distance, np.inf)
        near = (distance.min(axis=1) < min(reach, REACH) * self.typical) & (
            np.median(distance, axis=1) > _SAME * self.typical
        )
        star, number = np.nonzero(near)
        return star, beams[number]

    def load(self, wanted: list[tuple[Floats, Floats, int]], reach: float) -> list[_Group]:
        """Stamps of `reach` fwhm about all places, frame by frame so that each image is opened once."""
        half = int(np.ceil(reach * self.typical))
        groups = []
        for x, y, b in wanted:
            star, beams = self.members(x, y, b, reach)
            frames, count = len(x), (2 * half + 1) ** 2
            middle = np.stack([nearest_pixel(x[:, b]), nearest_pixel(y[:, b])], axis=-1)
            places = np.stack(
                [
                    np.concatenate([x[:, b, None], self.known.x[star, :, beams].T], axis=1),
                    np.concatenate([y[:, b, None], self.known.y[star, :, beams].T], axis=1),
                ],
                axis=-1,
            )
            groups.append(
                _Group(
                    b,
                    np.zeros((frames, count), np.float32),
                    np.ones((frames, count), np.float32),
                    np.zeros((frames, count), np.bool_),
                    places - middle[:, None],
                    np.append(b, beams),
                    np.zeros(places.shape[:2]),
                    np.full(places.shape[:2], np.inf),
                )
            )
        whole = len(wanted) > 100
        for k in range(len(wanted[0][0])):
            for (x, y, b), group in zip(wanted, groups, strict=True):
                if not np.isfinite([x[k, b], y[k, b]]).all():
                    continue
                box = box_around(float(x[k, b]), float(y[k, b]), half)
                box = Box(max(box.x0, 0), max(box.y0, 0), box.x1, box.y1)
                if box.x1 <= box.x0 or box.y1 <= box.y0:
                    continue
                pixels = self.images(k, b, None).cut(box) if whole else self.images(k, b, box)
                strip = self.sections[b]
                if strip is not None:
                    pixels = pixels.cut(Box(strip.x0, strip.y0, strip.x1, strip.y1))
                ix, iy = nearest_pixel(np.array([x[k, b]])), nearest_pixel(np.array([y[k, b]]))
                data, variance, mask = gather(pixels, ix, iy, half)
                group.good[k] = (mask == 0).ravel()
                group.data[k], group.variance[k] = data.ravel(), variance.ravel()
        return groups


def _profile(models: list[_Group], width: Floats, typical: float) -> tuple[profiles.Profile, Floats]:
    """The profile that all share and the shapes a, b, c of every frame and beam, (K, B, 3)."""
    gauss = 0.5 * (SIGMA_TO_FWHM / width) ** 2
    shapes = np.stack([gauss / 3.0, np.zeros_like(gauss), gauss / 3.0], axis=-1)
    profile = profiles.plain(3.0, typical)
    for turn in range(_TURNS):
        for group in models:
            _heights(group, profile, shapes)
        alone = [_alone(group, profile, shapes) for group in models]
        rows = [np.flatnonzero(group.height[:, 0] > _FIRM * group.error[:, 0]) for group in models]
        if not any(len(r) for r in rows):
            return profile, shapes
        data = np.concatenate([a[r] for a, r in zip(alone, rows, strict=True)])
        variance, good = (
            np.concatenate([getattr(g, name)[r] for g, r in zip(models, rows, strict=True)])
            for name in ("variance", "good")
        )
        start = np.concatenate([_places(g, shapes, profile.beta)[r, 0] for g, r in zip(models, rows, strict=True)])
        if turn == 0:
            costs = []
            for beta in profiles.BETAS:
                first = start.copy()
                first[:, 2:] *= 3.0 / beta
                candidate = profiles.plain(beta, typical)
                few = slice(None, None, max(1, len(data) // _TRIED))
                costs.append(np.median(profiles.fit(data[few], variance[few], good[few], first[few], candidate)[1]))
            beta = profiles.BETAS[int(np.argmin(costs))]
            start[:, 2:] *= 3.0 / beta
            shapes = shapes * (3.0 / beta)
            profile = profiles.plain(beta, typical)
        fitted, cost = profiles.fit(data, variance, good, start, profile)
        fitted[~np.isfinite(cost)] = np.nan
        frame = np.concatenate(rows)
        beam = np.repeat([g.beam for g in models], [len(r) for r in rows])
        shapes = _shared(fitted[:, 2:], frame, beam, shapes)
        shape = np.concatenate([fitted[:, :2], shapes[frame, beam]], axis=1)
        sound = np.flatnonzero(np.isfinite(cost))
        sound = sound[:: max(1, len(sound) // _TRIED)]
        if len(sound) >= 3:
            profile = profiles.refine(
                profiles.plain(profile.beta, typical), data[sound], variance[sound], good[sound], shape[sound]
            )
    return profile, shapes


def _shared(fitted: Floats, frame: NDArray[np.intp], beam: NDArray[np.intp], start: Floats) -> Floats:
    """Median shape of each frame and beam; where none was fitted, the start scaled as the others were."""
    shapes, known = start.copy(), np.zeros(start.shape[:2], np.bool_)
    for k in range(start.shape[0]):
        for b in range(start.shape[1]):
            own = fitted[(frame == k) & (beam == b)]
            own = own[np.isfinite(own).all(axis=1)]
            if len(own):
                shapes[k, b], known[k, b] = np.median(own, axis=0), True
    if known.any() and not known.all():
        size = np.sqrt(shapes[..., 0] * shapes[..., 2] / (start[..., 0] * start[..., 2]))
        shapes[~known] = start[~known] * np.median(size[known])
    return shapes


def _places(group: _Group, shapes: Floats, beta: float) -> Floats:
    """Shapes x, y, a, b, c of all members, (K, M, 5)."""
    return np.concatenate([group.at, shapes[:, group.beams]], axis=-1)


def _images(group: _Group, profile: profiles.Profile, shapes: Floats) -> Singles:
    """Images of unit height of all members, (K, M, P)."""
    points = profiles.grid(round(np.sqrt(group.data.shape[1])))
    places = np.nan_to_num(_places(group, shapes, profile.beta))
    return profile.images(points, places.reshape(-1, 5)).reshape(*places.shape[:2], -1)


def _alone(group: _Group, profile: profiles.Profile, shapes: Floats) -> Singles:
    """Stamps with sky and neighbours removed."""
    image = _images(group, profile, shapes)
    model = np.einsum("km,kmp->kp", group.height[:, 1:-1], image[:, 1:]) + group.height[:, -1:]
    return np.asarray(group.data - model, dtype=np.float32)


def _heights(group: _Group, profile: profiles.Profile, shapes: Floats) -> None:
    """Fit the members' heights and a constant sky to each frame; into `height` and `error`, the sky last."""
    image = _images(group, profile, shapes)
    frames, members, pixels = image.shape
    basis = np.concatenate([image, np.ones((frames, 1, pixels), np.float32)], axis=1).astype(np.float64)
    data, variance = group.data.astype(np.float64), np.maximum(group.variance.astype(np.float64), 1e-6)
    weight = np.where(group.good, 1.0 / variance, 0.0)
    for turn in range(5):
        weighted = basis * weight[:, None]
        normal = weighted @ basis.transpose(0, 2, 1)
        unit = np.sqrt(np.maximum(np.einsum("kii->ki", normal), 1e-30))
        scaled = normal / (unit[:, :, None] * unit[:, None, :]) + 1e-9 * np.eye(members + 1)
        inverse = np.linalg.inv(scaled) / (unit[:, :, None] * unit[:, None, :])
        height = (inverse @ (weighted @ data[:, :, None]))[:, :, 0]
        model = np.einsum("km,kmp->kp", height, basis)
        star = model - height[:, -1:]
        allowed = variance + (_MODEL_ERROR * star) ** 2
        residual2 = (data - model) ** 2
        cut = _CUT**2 * np.maximum(1.0, 4.0 - turn)  # generous at first: one hit pulls everything
        weight = np.where(group.good & (residual2 < cut * allowed), 1.0 / allowed, 0.0)
    seen = group.good.sum(axis=1) > 0.5 * pixels
    group.height = np.where(seen[:, None], height, 0.0)
    error = np.sqrt(np.maximum(np.einsum("kii->ki", inverse), 0.0))
    group.error = np.where(seen[:, None], error, np.inf)


def _sum(group: _Group, profile: profiles.Profile, shapes: Floats, radii: Floats, out: Foreign, s: int, b: int) -> None:
    image = _images(group, profile, shapes)[:, 1:]
    half = round(np.sqrt(group.data.shape[1])) // 2
    height = np.maximum(group.height[:, 1:-1], 0.0)
    error = np.where(np.isfinite(group.error[:, 1:-1]), group.error[:, 1:-1], 0.0)
    for r in range(len(radii)):
        for k in range(len(image)):
            if not np.isfinite(group.at[k, 0]).all():
                continue
            inside = circle_overlap(group.at[k, :1, 0], group.at[k, :1, 1], float(radii[r, k]), half)[0].ravel()
            share = image[k] @ inside
            out.light[r, s, k, b] = height[k] @ share
            out.variance[r, s, k, b] = ((error[k] * share) ** 2).sum()
