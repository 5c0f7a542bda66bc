"""Where the first beam's stars fall in the other beams: partners, offsets, and the static map between beams."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.registration.detection import Stars
from hwpol.registration.matching import pair, vote

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_TERMS = {"offset": 1, "similarity": 3, "affine": 3, "quadratic": 6}
_MOST_VOTERS = 150


@dataclass(frozen=True)
class BeamMap:
    """Static map from a star's place in the first beam to its place in another.

    x' = x + sum_j c_xj m_j(u, v), y' likewise, with m = 1, u, v, u^2, u v, v^2 and u, v = (x, y - centre) / scale.

    Attributes
    ----------
    kind : str
        "offset", "similarity" (offset, scale and rotation), "affine" or "quadratic".
    centre, scale : tuple, float
        Pixels.
    coefficients : ndarray, shape (2, 6)
        Pixels; terms not used are 0.
    rms : float
        Of the residuals, per axis, pixels (NaN where none could be formed).
    stars : int
        Number of stars behind it; 0 for a nominal offset.
    """

    kind: str
    centre: tuple[float, float]
    scale: float
    coefficients: Floats
    rms: float = float("nan")
    stars: int = 0

    def apply(self, x: ArrayLike, y: ArrayLike) -> tuple[Floats, Floats]:
        """Map positions (any shape), raw pixels."""
        xs, ys = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
        terms = _terms((xs - self.centre[0]) / self.scale, (ys - self.centre[1]) / self.scale)
        return (
            xs + np.tensordot(self.coefficients[0], terms, axes=1),
            ys + np.tensordot(self.coefficients[1], terms, axes=1),
        )

    @property
    def offset(self) -> tuple[float, float]:
        """Displacement (pixels) at the centre of the stars that made the map."""
        return float(self.coefficients[0, 0]), float(self.coefficients[1, 0])


def _terms(u: Floats, v: Floats) -> Floats:
    return np.stack([np.ones_like(u), u, v, u * u, u * v, v * v])


def shift_map(offset: ArrayLike, stars: int = 0) -> BeamMap:
    """Map that is an offset (x, y) alone, pixels."""
    coefficients = np.zeros((2, 6))
    coefficients[:, 0] = np.asarray(offset, dtype=np.float64)
    return BeamMap("offset", (0.0, 0.0), 1.0, coefficients, stars=stars)


def fit_beam_map(
    xy_first: ArrayLike, xy_other: ArrayLike, errors: ArrayLike | None = None, *, groups: ArrayLike | None = None
) -> BeamMap:
    """Robust map between beams from pairs of positions.

    The kind is the one that predicts left-out stars best: an offset with one or two stars, with three to five also
    scale and rotation, from six an affine map, from twelve quadratic terms. Pairs farther than four robust standard
    deviations are left out.

    Parameters
    ----------
    xy_first, xy_other : array_like, shape (pairs, 2)
        Raw pixels.
    errors : array_like, shape (pairs,), optional
        Standard error per axis of the difference, pixels; equal when not given.
    groups : array_like, shape (pairs,), optional
        Which star a pair belongs to, where frames repeat them: a star is left out as a whole. Default: all distinct.

    Returns
    -------
    BeamMap
    """
    first, other = np.asarray(xy_first, dtype=np.float64), np.asarray(xy_other, dtype=np.float64)
    if first.ndim != 2 or first.shape != other.shape or first.shape[1] != 2 or not len(first):
        raise InputError(f"beam map: positions of shape {first.shape} and {other.shape}: expected the same (pairs, 2)")
    error = np.ones(len(first)) if errors is None else np.maximum(np.asarray(errors, dtype=np.float64), 1e-6)
    star = np.arange(len(first)) if groups is None else np.unique(np.asarray(groups), return_inverse=True)[1]
    count = int(star.max()) + 1
    centre = np.median(first, axis=0)
    scale = max(float(np.max(np.abs(first - centre))), 1.0)
    terms = _terms(*((first - centre) / scale).T)
    target = other - first
    kinds = ["offset"] + ["similarity"] * (count >= 3) + ["affine"] * (count >= 6) + ["quadratic"] * (count >= 12)
    good = np.ones(len(first), bool)
    # The richest kind decides what is an outlier: a poorer one would throw out the corners.
    if len(first) >= 8:
        good = _robust(kinds[-1], terms, target, error)
    kept = np.unique(star[good])
    number = np.searchsorted(kept, star)
    folds = np.minimum(len(kept), 10)
    best, lowest = kinds[0], np.inf
    if len(kept) >= 3:
        for kind in kinds:
            missed = 0.0
            for fold in range(folds):
                test = good & (number % folds == fold)
                train = good & ~(number % folds == fold)
                c = _solve(kind, terms[:, train], target[train], error[train])
                missed += float((((target[test] - (c @ terms[:, test]).T) / error[test, None]) ** 2).sum())
            # A richer kind extrapolates worse: it has to earn its place.
            if missed < 0.98 * lowest:
                best, lowest = kind, missed
    coefficients = _solve(best, terms[:, good], target[good], error[good])
    weight = error[good] ** -2
    residual = target[good] - (coefficients @ terms[:, good]).T
    rms = float(np.sqrt((weight[:, None] * residual**2).sum() / (2 * weight.sum()))) if count > 1 else float("nan")
    return BeamMap(best, (float(centre[0]), float(centre[1])), scale, coefficients, rms, len(kept))


def _solve(kind: str, terms: Floats, target: Floats, error: Floats) -> Floats:
    """Weighted least squares; coefficients (2, 6) of the displacement."""
    result = np.zeros((2, 6))
    if kind == "similarity":
        one, u, v = terms[:3]
        zero = np.zeros_like(one)
        rows = np.concatenate([np.stack([one, zero, u, -v], 1), np.stack([zero, one, v, u], 1)])
        w = np.concatenate([1 / error, 1 / error])
        a, b, c, s = np.linalg.lstsq(rows * w[:, None], target.T.ravel() * w, rcond=None)[0]
        result[:, :3] = [[a, c, -s], [b, s, c]]
        return result
    m = _TERMS[kind]
    design = terms[:m].T / error[:, None]
    result[:, :m] = np.linalg.lstsq(design, target / error[:, None], rcond=None)[0].T
    return result


def _robust(kind: str, terms: Floats, target: Floats, error: Floats) -> NDArray[np.bool_]:
    """Pairs that agree with the robust fit of this kind."""
    weight = np.ones(len(target))
    start = np.median(target, axis=0)
    size = np.hypot(*(target - start).T)
    for turn in range(20):
        scatter = max(float(np.median(size)) / 1.18, 1e-4)
        # Cauchy weights: far pairs fade without ever locking the fit at its start.
        updated = 1.0 / (1.0 + (size / (2.0 * scatter)) ** 2)
        if turn and np.max(np.abs(updated - weight)) < 1e-3:
            break
        weight = updated
        c = _solve(kind, terms, target, error / np.sqrt(weight))
        size = np.hypot(*(target - (c @ terms).T).T)
    relative = size / error
    free = max(len(target) - _TERMS[kind], 1)
    limit = 4.0 * max(float(np.median(relative)) / 1.18, 1e-4) * np.sqrt(len(target) / free)
    limit = max(limit, 0.01 / float(np.median(error)))
    return np.asarray(relative <= limit) if (relative <= limit).sum() >= _TERMS[kind] else np.ones(len(target), bool)


@dataclass(frozen=True)
class BeamMatch:
    """Partners of the first beam's stars in every beam.

    Attributes
    ----------
    offsets : ndarray, shape (B, 2)
        Measured (mean) offsets from the first beam, pixels; nominal where `votes` is 0.
    first : ndarray of int, shape (n,)
        First-beam stars with a partner in every beam: index into the first list.
    partner : ndarray of int, shape (n, B)
        Index of each partner in its beam's list (column 0 repeats `first`).
    votes : ndarray of int, shape (B,)
        Pairs found in each beam.
    """

    offsets: Floats
    first: Ints
    partner: Ints
    votes: Ints


def beam_offsets(
    stars: Stars | Sequence[Stars], nominal_offsets: ArrayLike, *, radius: float = 25.0, tolerance: float = 4.0
) -> BeamMatch:
    """Measure the beams' offsets and find the stars seen in all beams.

    Parameters
    ----------
    stars : Stars or sequence of Stars
        One list that holds all beams' images (beams overlap on one detector), or one list for each beam.
    nominal_offsets : array_like, shape (B, 2)
        Start values, pixels from the first beam.
    radius : float
        How far from the nominal offset to look; four times that where few pairs are found.
    tolerance : float
        How far partners may lie from the common offset (the map's distortion over the field).

    Returns
    -------
    BeamMatch
    """
    nominal = np.asarray(nominal_offsets, dtype=np.float64).reshape(-1, 2)
    beams = len(nominal)
    shared = isinstance(stars, Stars)
    lists: list[Stars] = [stars] * beams if isinstance(stars, Stars) else list(stars)
    if len(lists) != beams:
        raise InputError(f"beam_offsets: {len(lists)} star lists for {beams} beams: expected one list, or one a beam")
    offsets, votes = nominal.copy(), np.zeros(beams, np.int64)
    first = np.arange(len(lists[0]))
    partner = np.full((len(first), beams), -1, dtype=np.int64)
    partner[:, 0] = first
    votes[0] = len(first)
    here = np.column_stack([lists[0].x, lists[0].y])
    for b in range(1, beams):
        there = np.column_stack([lists[b].x, lists[b].y])
        if not len(here) or not len(there):
            continue
        same = shared or lists[b] is lists[0]
        offset, found = _offset(lists[0], lists[b], nominal[b], radius, same)
        if not found:
            continue
        i, j = pair(here + offset, there, tolerance)
        for _ in range(2):
            if len(i):
                offset = np.median(there[j] - here[i], axis=0)
                i, j = pair(here + offset, there, tolerance)
        ratio = np.log(np.maximum(lists[b].flux[j], 1e-3) / np.maximum(lists[0].flux[i], 1e-3))
        likely = np.abs(ratio - np.median(ratio)) < np.log(4.0) if len(i) >= 3 else np.ones(len(i), bool)
        likely |= ((lists[0].flags[i] | lists[b].flags[j]) & int(Flag.SATURATED | Flag.NEIGHBOUR)) != 0
        i, j = i[likely], j[likely]
        partner[i, b] = j
        votes[b] = len(i)
        if len(i):
            offsets[b] = np.mean(there[j] - here[i], axis=0)
    complete = (partner >= 0).all(axis=1)
    return BeamMatch(offsets, first[complete], partner[complete], votes)


def _offset(first: Stars, other: Stars, nominal: Floats, radius: float, same: bool) -> tuple[Floats, bool]:
    """Voted offset between two beams' lists, and whether any pair voted."""
    a, b = first.select(np.arange(min(len(first), _MOST_VOTERS))), other.select(
        np.arange(min(len(other), _MOST_VOTERS)))  # fmt: skip
    here, there = np.column_stack([a.x, a.y]), np.column_stack([b.x, b.y])
    flux_a, flux_b = np.maximum(a.flux, 1e-3)[:, None], np.maximum(b.flux, 1e-3)[None, :]
    distance = np.hypot(*(there[None] - here[:, None] - nominal).transpose(2, 0, 1))
    # Beams share a star's light about equally; among few stars the brighter pair and the nearer one are likelier.
    alike = np.minimum(flux_a, flux_b) / np.maximum(flux_a, flux_b)
    bright = np.sqrt(np.minimum(flux_a / flux_a.max(), flux_b / flux_b.max()))
    best = (np.asarray(nominal), False, 0.0)
    for wide in (radius, 4 * radius):
        weight = alike * (0.2 + 0.8 * bright) * (0.5 + 0.5 * np.exp(-0.5 * (distance / (0.5 * wide)) ** 2))
        exclude = min(5.0, 0.3 * float(np.hypot(*nominal))) if same else 0.0
        offset, votes, _ = vote(here, there, centre=(float(nominal[0]), float(nominal[1])), radius=wide,
                                tolerance=3.0, weight=weight, exclude=exclude)  # fmt: skip
        # A wider search must find clearly more: it meets more chance pairs.
        if votes > 2.0 * best[2] + (0.0 if wide == radius else 0.3):
            best = (offset, True, votes)
        if best[2] > 0.3:
            break
    return best[0], best[1]


def pick_target(stars: Stars, hint: tuple[float, float] | None = None, *, radius: float = 15.0) -> int | None:
    """Index of the target among stars that have partners in every beam.

    The star nearest to the hint, if one lies within `radius` pixels; without a hint the brightest. None where there
    is none (with a hint but no star near it, the hint itself is the place).
    """
    if not len(stars):
        return None
    if hint is None:
        return int(np.argmax(stars.flux))
    distance = np.hypot(stars.x - hint[0], stars.y - hint[1])
    nearest = int(np.argmin(distance))
    return nearest if distance[nearest] <= radius else None
