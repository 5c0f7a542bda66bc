"""Joint solution of all centroids of a visit: frame motions, mean star places, and what each beam does on its own."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.registration.beams import BeamMap
from hwpol.registration.placement import move

Floats = NDArray[np.float64]

# What the pixels' own differences leave in the best centroid, pixels (common practice).
_FLOOR = 0.002


@dataclass(frozen=True)
class Solution:
    """Motions of K frames; residuals (K, B, N, 2) and weights (K, B, N) after them; chi2 of the whole."""

    shift: Floats
    shift_err: Floats
    rotation: Floats
    template: Floats
    residual: Floats
    weight: Floats
    chi2: float


def solve(
    places: Floats, errors: Floats, template: Floats, maps: tuple[BeamMap, ...], shift: Floats, rotation: Floats,
    pivot: tuple[float, float], *, rotate: bool,
) -> Solution:  # fmt: skip
    """Weighted robust least squares of star places in all frames and beams.

    Every star has a free mean place in every beam, so that errors of the beam map and blends that do not change
    take no part: the shifts come from changes alone.

    Parameters
    ----------
    places, errors : ndarray, shape (K, B, N, 2) and (K, B, N)
        Centroids and their errors per axis; NaN where not measured.
    template : ndarray, shape (N, 2)
        Start values of the places in the first frame and beam.
    maps : tuple of BeamMap
    shift, rotation : ndarray, shape (K, 2) and (K,)
        Start values, pixels and degrees.
    pivot : tuple
    rotate : bool
        Whether frames may turn.
    """
    base = _base_weight(errors)
    weight = base.copy()
    shift = shift.copy()
    rotation = rotation.copy() if rotate else np.zeros_like(rotation)
    residual = np.zeros_like(places)
    own = np.zeros(places.shape[1:])
    covariance = np.full((len(shift), 3, 3), np.nan)
    for turn in range(40):
        moved = move(template[:, 0], template[:, 1], shift, rotation, pivot)
        predicted = np.stack([np.stack(m.apply(*moved), axis=-1) for m in maps], axis=1)
        raw = np.where(weight[..., None] > 0, places - predicted, 0.0)
        own = (weight[..., None] * raw).sum(0) / np.maximum(weight.sum(0), 1e-300)[..., None]
        residual = np.where(weight[..., None] > 0, raw - own, 0.0)
        if turn in (3, 6, 9):
            weight = _reweighted(base, np.where(base[..., None] > 0, places - predicted - own, 0.0), weight)
        lever = np.stack([-(moved[1] - pivot[1] - shift[:, 1:]), moved[0] - pivot[0] - shift[:, :1]], axis=-1)
        step, covariance = _frame_steps(residual, weight, lever, rotate)
        shift += step[:, :2]
        rotation += np.degrees(step[:, 2])
        if turn > 10 and np.abs(step[:, :2]).max() < 1e-4:
            break
    with np.errstate(invalid="ignore"):
        error = np.sqrt(0.5 * (covariance[:, 0, 0] + covariance[:, 1, 1]))
    reduced = np.maximum(_scatter(residual, weight, base), 1.0)
    chi2 = float((weight[..., None] * residual**2).sum())
    return Solution(shift, error * reduced, rotation, template + own[0], residual, weight, chi2)


def _base_weight(errors: Floats) -> Floats:
    return np.where(np.isfinite(errors), 1.0 / (np.nan_to_num(errors, nan=1.0) ** 2 + _FLOOR**2), 0.0)


def _frame_steps(residual: Floats, weight: Floats, lever: Floats, rotate: bool) -> tuple[Floats, Floats]:
    """Corrections (K, 3) of shift and angle (rad), and their covariances (K, 3, 3)."""
    frames = len(residual)
    step, covariance = np.zeros((frames, 3)), np.full((frames, 3, 3), np.nan)
    for k in range(frames):
        w = weight[k]
        total = w.sum()
        if total <= 0:
            continue
        sums = (w[..., None] * residual[k]).sum((0, 1))
        step[k, :2] = sums / total
        covariance[k] = np.eye(3) / total
        if not rotate or ((w.sum(0) > 0).sum()) < 2:
            continue
        arm = np.broadcast_to(lever[k], residual[k].shape)
        normal = np.diag([total, total, (w[..., None] * arm**2).sum()])
        normal[:2, 2] = normal[2, :2] = (w[..., None] * arm).sum((0, 1))
        right = np.append(sums, (w[..., None] * arm * residual[k]).sum())
        try:
            step[k] = np.linalg.solve(normal, right)
        except np.linalg.LinAlgError:
            continue
    return step, covariance


def _scatter(residual: Floats, weight: Floats, base: Floats) -> float:
    """Square root of the reduced chi2 of the residuals."""
    used = int((weight > 0).sum())
    free = 2 * (used - int((weight.sum(0) > 0).sum()) - int((weight.sum((1, 2)) > 0).sum()))
    return float(np.sqrt((weight[..., None] * residual**2).sum() / free)) if free > 4 else 1.0


def _reweighted(base: Floats, residual: Floats, weight: Floats) -> Floats:
    """Weights without outliers, and lower for stars that scatter more than their errors say."""
    size = np.sqrt((residual**2).sum(-1) * base)
    used = size[weight > 0]
    if len(used) < 6:
        return weight
    scale = max(float(np.median(used)) / 1.18, 1.0)
    good = (base > 0) & (size < 5.0 * scale)
    # A frame is never emptied: one whose shift is still off would lose every star.
    emptied = (good.sum((1, 2)) < 0.5 * (base > 0).sum((1, 2)))[:, None, None]
    good = np.where(emptied, base > 0, good)
    count = good.sum(0)
    chi2 = (np.where(good, size, 0.0) ** 2).sum(0) / np.maximum(2 * (count - 1), 1)
    inflate = np.where(count >= 5, np.maximum(chi2, 1.0), 1.0)
    return np.asarray(np.where(good, base / inflate[None], 0.0))


def best_motion(
    places: Floats, errors: Floats, template: Floats, maps: tuple[BeamMap, ...], shift: Floats, rotation: Floats,
    pivot: tuple[float, float],
) -> Solution:  # fmt: skip
    """Solution with or without field rotation: rotation is kept where the visit as a whole asks for it."""
    still = solve(places, errors, template, maps, shift, rotation, pivot, rotate=False)
    able = int(((still.weight.sum(1) > 0).sum(1) >= 2).sum())
    if able < 2:
        return still
    turned = solve(places, errors, template, maps, shift, rotation, pivot, rotate=True)
    used = int((turned.weight > 0).sum())
    free = 2 * (used - int((turned.weight.sum(0) > 0).sum())) - 3 * able
    noise = max(turned.chi2 / free, 1.0) if free > 0 else 1.0
    # Outliers are dropped by each on its own: compare on what the turned solution keeps.
    common = turned.weight
    gain = float((common[..., None] * (still.residual**2 - turned.residual**2)).sum()) / noise
    dropped = float((common > 0).sum() - ((common > 0) & (still.weight > 0)).sum())
    # Chance gains one per frame with variance two; five sigma of that.
    return turned if gain + 10 * dropped > able + 5 * np.sqrt(2 * able) + 10 else still


def relative_to(solution: Solution, k: int, pivot: tuple[float, float]) -> tuple[Floats, Floats, Floats]:
    """Shifts, rotations and template with frame `k` as origin."""
    p = np.asarray(pivot)
    x, y = move(solution.template[:, 0], solution.template[:, 1], solution.shift, solution.rotation, pivot)
    rotation = solution.rotation - solution.rotation[k]
    origin = np.column_stack(move(np.array([p[0]]), np.array([p[1]]), solution.shift, solution.rotation, pivot))[k]
    back = np.broadcast_to(origin - p, solution.shift.shape)
    c, s = np.cos(np.radians(rotation)), np.sin(np.radians(rotation))
    turned = np.column_stack([c * back[:, 0] - s * back[:, 1], s * back[:, 0] + c * back[:, 1]])
    return solution.shift - turned, rotation, np.column_stack([x[k], y[k]])


def beam_wander(solution: Solution, errors: Floats) -> tuple[Floats, float]:
    """Mean residual of each beam in each frame (K, B, 2), and its significance in sigma over the visit.

    The stars' own errors (K, B, N) judge: weights that were lowered for scatter would hide what is looked for.
    """
    weight = np.where(solution.weight > 0, _base_weight(errors), 0.0)
    w = weight.sum(-1)
    mean = (weight[..., None] * solution.residual).sum(2) / np.maximum(w, 1e-300)[..., None]
    mean[w <= 0] = 0.0
    frames, beams = int((w.sum(1) > 0).sum()), w.shape[1]
    free = 2 * (frames - 1) * (beams - 1)
    if free < 1:
        return mean, 0.0
    left = np.where(weight[..., None] > 0, solution.residual - mean[:, :, None], 0.0)
    inner = int((weight > 0).sum()) - int((w > 0).sum()) - int((weight.sum(0) > 0).sum())
    noise = max(float((weight[..., None] * left**2).sum()) / (2 * inner), 1.0) if inner > 3 else 1.0
    chi2 = float((w[..., None] * mean**2).sum()) / noise
    return mean, (chi2 - free) / float(np.sqrt(2 * free))
