"""Matching star lists: pair-difference voting, pairing, and the Euclidean motion between two lists."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Motion:
    """x' = pivot + R(rotation) (x - pivot) + shift, R turning +x towards +y; pixels, degrees."""

    shift: tuple[float, float]
    rotation: float
    pivot: tuple[float, float]

    def apply(self, x: Floats, y: Floats) -> tuple[Floats, Floats]:
        """Move positions (any shape)."""
        c, s = np.cos(np.radians(self.rotation)), np.sin(np.radians(self.rotation))
        dx, dy = x - self.pivot[0], y - self.pivot[1]
        return (
            self.pivot[0] + c * dx - s * dy + self.shift[0],
            self.pivot[1] + s * dx + c * dy + self.shift[1],
        )


def vote(
    first: Floats, second: Floats, *, centre: tuple[float, float] = (0.0, 0.0), radius: float | None = None,
    tolerance: float = 2.0, weight: Floats | None = None, exclude: float = 0.0,
) -> tuple[Floats, float, float]:  # fmt: skip
    """Most common difference second - first of two lists of positions.

    Parameters
    ----------
    first, second : ndarray, shape (n, 2) and (m, 2)
        Positions, pixels.
    centre, radius : tuple, float
        Only differences within `radius` of `centre` count; None: all.
    tolerance : float
        Differences this close to each other agree.
    weight : ndarray, shape (n, m), optional
        What each pair's vote counts.
    exclude : float
        Differences smaller than this are left out (a list against itself).

    Returns
    -------
    difference : ndarray, shape (2,)
        Weighted mean within the tolerance; `centre` where no pair counts.
    votes, expected : float
        Weight that agrees, and what chance alone gives within the tolerance.
    """
    difference = (second[None, :, :] - first[:, None, :]).reshape(-1, 2)
    weights = np.ones(len(difference)) if weight is None else weight.ravel()
    use = np.ones(len(difference), bool) if radius is None else (
        np.hypot(*(difference - np.asarray(centre)).T) <= radius)  # fmt: skip
    if exclude:
        use &= np.hypot(*difference.T) >= exclude
    difference, weights = difference[use], weights[use]
    if not len(difference):
        return np.asarray(centre, dtype=np.float64), 0.0, 0.0
    # Two grids half a cell apart: one of them holds most of any cluster in one cell.
    best, top = difference[0], -1.0
    for offset in ((0.0, 0.0), (0.5, 0.0), (0.0, 0.5), (0.5, 0.5)):
        cell = np.floor(difference / (2 * tolerance) + np.asarray(offset)).astype(np.int64)
        cell -= cell.min(axis=0)
        key = cell[:, 0] * (cell[:, 1].max() + 1) + cell[:, 1]
        _, inverse = np.unique(key, return_inverse=True)
        sums = np.bincount(inverse, weights)
        if sums.max() > top:
            top = float(sums.max())
            best = np.average(difference[inverse == sums.argmax()], axis=0, weights=weights[inverse == sums.argmax()])
    for _ in range(5):
        near = np.hypot(*(difference - best).T) <= tolerance
        if not near.any():
            break
        best = np.average(difference[near], axis=0, weights=weights[near])
    votes = float(weights[np.hypot(*(difference - best).T) <= tolerance].sum())
    spread = difference.max(axis=0) - difference.min(axis=0)
    area = np.pi * radius**2 if radius is not None else float(np.prod(spread)) + 1.0
    expected = (float(weights.sum()) - votes) * np.pi * tolerance**2 / max(area, np.pi * tolerance**2)
    return best, votes, expected


def pair(first: Floats, second: Floats, tolerance: float) -> tuple[Ints, Ints]:
    """Indices of the mutual nearest neighbours of two lists of positions, no farther than `tolerance`."""
    none = np.zeros(0, np.int64)
    if not len(first) or not len(second):
        return none, none
    distance, forward = cKDTree(second).query(first, distance_upper_bound=tolerance)
    _, backward = cKDTree(first).query(second)
    index = np.flatnonzero(np.isfinite(distance))
    index = index[backward[forward[index]] == index]
    return index, forward[index].astype(np.int64)


def fit_motion(
    first: Floats, second: Floats, weight: Floats, pivot: tuple[float, float], *, rotate: bool = True
) -> tuple[Motion, Floats]:
    """Weighted robust Euclidean motion first -> second.

    Returns the motion and the residuals (n, 2). One star, or `rotate` False, gives a shift alone. Stars farther
    than four times the median residual are given no weight.
    """
    p, w = np.asarray(pivot), weight.copy()
    motion, residual = Motion((0.0, 0.0), 0.0, pivot), second - first
    for _ in range(6):
        total = w.sum()
        m1, m2 = (w[:, None] * first).sum(0) / total, (w[:, None] * second).sum(0) / total
        a, b = first - m1, second - m2
        angle = 0.0
        if rotate and (w > 0).sum() >= 2:
            angle = float(np.arctan2((w * (a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0])).sum(), (w * (a * b).sum(1)).sum()))
        c, s = np.cos(angle), np.sin(angle)
        turn = np.array([[c, -s], [s, c]])
        shift = m2 - p - turn @ (m1 - p)
        motion = Motion((float(shift[0]), float(shift[1])), float(np.degrees(angle)), pivot)
        residual = second - np.column_stack(motion.apply(first[:, 0], first[:, 1]))
        size = np.hypot(*residual.T)
        if (w > 0).sum() < 3:
            break
        limit = max(4.0 * float(np.median(size[w > 0])) / 1.18, 1e-6)
        updated = np.where(size <= limit, weight, 0.0)
        if np.array_equal(updated > 0, w > 0):
            break
        w = updated
    return motion, residual


def search(
    first: Floats, second: Floats, pivot: tuple[float, float], *, tolerance: float = 3.0, rotation: float = 0.0,
    most_rotation: float = 6.0,
) -> tuple[Motion | None, int]:  # fmt: skip
    """Motion between two lists of positions (brightest first) without a start value, and its number of pairs.

    Shifts of any size by voting at the given rotation (degrees); where those do not convince, rotations up to
    `most_rotation` on either side as well, in steps that move the outermost star by the tolerance. None where no
    motion stands out from chance.
    """
    a, b = first[:120], second[:120]
    if not len(a) or not len(b):
        return None, 0
    reach = float(np.max(np.hypot(*(a - np.asarray(pivot)).T)))
    step = float(np.degrees(2 * tolerance / max(reach, 10.0)))
    best: tuple[float, Motion] | None = None
    turns = np.arange(1, int(np.ceil(most_rotation / step)) + 1) * step
    fewest = min(len(a), len(b))
    for change in [0.0, *(sign * t for t in turns for sign in (1.0, -1.0))]:
        angle = rotation + change
        turned = Motion((0.0, 0.0), angle, pivot)
        shift, votes, expected = vote(np.column_stack(turned.apply(a[:, 0], a[:, 1])), b, tolerance=tolerance)
        score = votes - expected - 4.0 * np.sqrt(expected + 0.5)
        if best is None or score > best[0] + (0.5 if change else 0.0):
            best = (score, Motion((float(shift[0]), float(shift[1])), angle, pivot))
        # With few stars any angle brings two of them together; a field that has not turned is then likelier.
        convincing = votes >= 0.5 * fewest and score > 0.2 * fewest
        if convincing or len(a) < 4 or len(b) < 4:
            break
    assert best is not None
    motion = best[1]
    near = tolerance * 2
    i, j = pair(np.column_stack(motion.apply(first[:, 0], first[:, 1])), second, near)
    if not len(i):
        return None, 0
    for _ in range(3):
        motion, _ = fit_motion(first[i], second[j], np.ones(len(i)), pivot, rotate=len(i) >= 4)
        i, j = pair(np.column_stack(motion.apply(first[:, 0], first[:, 1])), second, near)
        if not len(i):
            return None, 0
    lone = fewest <= 2
    if best[0] <= 0 and not lone and len(i) < 0.5 * fewest:
        return None, len(i)
    return motion, len(i)
