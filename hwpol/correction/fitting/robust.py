"""Bad standards, doubtful ones, and the scatter of the others."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations, product
from math import comb

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from scipy.stats import chi2 as chi2_distribution
from scipy.stats import f as f_distribution

from hwpol.correction.fitting.least_squares import Alone, Data, Frame, Linear, Sums, add_up, leave_one_out, solve
from hwpol.correction.model import Array

#: Chance that a fit without a bad standard loses a good one; small harm, so it may be generous.
FALSE_ALARM = 0.01
#: Chance below which a standard is doubted and its errors enlarged.
DOUBT = 0.1
#: Chance below which chi2 is taken to demand more scatter than the errors say.
SCATTER_ALARM = 0.01
#: Most subsets tried one by one in the search for bad standards; beyond, they are dropped one at a time.
SUBSETS = 400
#: Of how many standards of a class (zero-polarised, polarised) one may be bad.
BAD_SHARE = 4
#: By how much chi2 must grow where other stars are blamed than those left out.
DISTINCT = 6.0


def scatter_of(
    data: Data,
    linear: Linear,
    frame: Frame,
    kept: NDArray[np.bool_],
    near: tuple[float, float] | None = None,
    place: int | None = None,
) -> tuple[float, float]:
    """Intrinsic scatter per component of (zero-polarised, polarised) stars by restricted maximum likelihood.

    A class of fewer than three stars gets none. With `near` and `place` only the scatter of one class is sought,
    about a value known to be close.
    """
    classes = [~data.polarised & kept, data.polarised & kept]
    active = [k for k in range(2) if classes[k].sum() >= 3 and place in (None, k)]
    scatter = [*(near or (0.0, 0.0))]

    def cost(value: float, k: int) -> float:
        trial = [*scatter]
        trial[k] = value
        sums = add_up(data, linear, (trial[0], trial[1]))
        fit = solve(sums, frame, kept)
        inner = frame.turn.T @ sums.normal[kept].sum(axis=0) @ frame.turn
        return float(sums.logdet[kept].sum() + np.linalg.slogdet(inner)[1] + fit.chi2)

    for _ in range(1 if near else len(active)):
        for k in active:
            size = near[k] if near else max(float(np.sqrt(np.median(_expected(data, classes[k])))), 1e-6)
            found = minimize_scalar(
                lambda log, k=k, size=size: cost(size * np.exp(log), k),
                bounds=(-2.0, 1.0) if near else (-2.0, 6.0), method="bounded", options={"xatol": 0.1},
            )  # fmt: skip
            value = size * float(np.exp(found.x))
            scatter[k] = value if found.fun < cost(0.0, k) else 0.0
    return (scatter[0], scatter[1])


def _expected(data: Data, stars: NDArray[np.bool_]) -> Array:
    """Variance per component that the errors of the stars chosen let expect: catalogue and mean measurement."""
    trace = np.trace(data.covariance, axis1=1, axis2=2) / 2
    count = np.maximum(np.bincount(data.star, minlength=len(stars)), 1)
    measured = np.bincount(data.star, weights=trace, minlength=len(stars)) / count
    return np.asarray((np.trace(data.sky_covariance, axis1=1, axis2=2) / 2 + measured)[stars])


@dataclass(frozen=True)
class Choice:
    """What is made of the stars.

    Attributes
    ----------
    weight : Array, shape (s,)
        1 for a standard taken as it is, 0 for one left out, between for one that is doubted.
    scatter : tuple of float
        Intrinsic scatter of (zero-polarised, polarised) stars.
    chance : Array, shape (s,)
        Chance of the star's departure from what the others say.
    """

    weight: Array
    scatter: tuple[float, float]
    chance: Array

    @property
    def kept(self) -> NDArray[np.bool_]:
        """Stars that take part."""
        return self.weight > 0

    def apply(self, sums: Sums) -> Sums:
        """Sums with the weights."""
        w = self.weight
        return replace(sums, normal=sums.normal * w[:, None, None], right=sums.right * w[:, None],
                       square=sums.square * w)  # fmt: skip


def _departures(sums: Sums, frame: Frame, kept: NDArray[np.bool_]) -> Array:
    """Chance of every star's departure from the fit to the (other) stars kept; 1 where the others cannot tell."""
    gain, values, without = gains(sums, frame, kept)
    chance = chi2_distribution.sf(gain, np.maximum(values, 1))
    return np.where(without.determined & (without.dof >= 2) & (values > 0), chance, 1.0)


def gains(sums: Sums, frame: Frame, kept: NDArray[np.bool_]) -> tuple[Array, NDArray[np.int_], Alone]:
    """What every star adds to chi2 and to the degrees of freedom of the fit to the other stars kept."""
    inside = solve(sums, frame, kept)
    chi2, dof = np.full(len(kept), inside.chi2), np.full(len(kept), inside.dof)
    for star in np.flatnonzero(~kept):
        together = kept.copy()
        together[star] = True
        fit = solve(sums, frame, together)
        chi2[star], dof[star] = fit.chi2, fit.dof
    without = leave_one_out(sums, frame, kept)
    return np.maximum(np.nan_to_num(chi2 - without.chi2), 0.0), dof - without.dof, without


def choose(data: Data, linear: Linear, frame: Frame) -> Choice:
    """Find the bad standards, at most one in four, and the scatter of the others.

    Errors as given are tried first: the subset that fits best is extended by all stars that agree with it. Where
    even the rest does not fit its errors, scatter is fitted instead and stars are judged against the scatter of the
    others. A star is kept where another one might as well be the bad one. Doubtful stars that are kept get a smaller
    weight (`_softened`).
    """
    classes = [np.flatnonzero(~data.polarised), np.flatnonzero(data.polarised)]
    everything = np.ones(len(data.sky), dtype=bool)
    sums = add_up(data, linear, (0.0, 0.0))
    full = solve(sums, frame, everything)
    kept = everything
    if full.dof > 0 and np.min(_departures(sums, frame, kept)) * len(kept) < FALSE_ALARM:
        kept = _largest_agreeing(sums, frame, classes)
    scatter = (0.0, 0.0)
    if solve(sums, frame, kept).chance < SCATTER_ALARM:
        kept = everything
        scatter = scatter_of(data, linear, frame, kept)
        for _ in range(sum(map(_most, classes))):
            chances = np.where(_droppable(kept, classes), _scattered(data, linear, frame, kept), 2.0)
            worst = int(np.argmin(chances))
            if chances[worst] * kept.sum() >= FALSE_ALARM:
                break
            kept = kept & (np.arange(len(kept)) != worst)
            scatter = scatter_of(data, linear, frame, kept)
        counts = [int(kept[stars].sum()) for stars in classes]
        scatter = (_widened(scatter[0], counts[0]), _widened(scatter[1], counts[1]))
        sums = add_up(data, linear, scatter)
    weight = _softened(sums, frame, kept, classes)
    return Choice(weight, scatter, _departures(sums, frame, kept))


def _widened(scatter: float, stars: int) -> float:
    """Scatter enlarged for its own error: the standard deviation of Student's t of 2 (stars - 1) values."""
    values = 2 * (stars - 1)
    return scatter * float(np.sqrt(values / (values - 2))) if values > 2 else scatter


def _most(stars: NDArray[np.int_]) -> int:
    """Most stars of a class that may be bad: one in four, one of three."""
    return len(stars) // BAD_SHARE if len(stars) > 3 else int(len(stars) == 3)


def _droppable(kept: NDArray[np.bool_], classes: list[NDArray[np.int_]]) -> NDArray[np.bool_]:
    """Stars of the classes in which another bad one is allowed for."""
    out = np.zeros(len(kept), dtype=bool)
    for stars in classes:
        out[stars] = kept[stars] & (np.sum(~kept[stars]) < _most(stars))
    return out


def _softened(sums: Sums, frame: Frame, kept: NDArray[np.bool_], classes: list[NDArray[np.int_]]) -> Array:
    """Weights of the stars kept: a star that departs, though not enough to be left out, gets its errors enlarged.

    The factor is the one that makes its departure from the others what its errors let expect. The worst come
    first, and together with those left out they are no more than may be bad.
    """
    weight = kept.astype(float)
    for _ in range(sum(map(_most, classes))):
        choice = Choice(weight, (0.0, 0.0), weight)
        weighted = choice.apply(sums)
        open_ = _droppable(weight == 1.0, [stars for stars in classes if len(stars) >= BAD_SHARE])
        chances = np.where(open_, _departures(weighted, frame, kept), 2.0)
        worst = int(np.argmin(chances))
        if chances[worst] * kept.sum() >= DOUBT:
            break
        without = leave_one_out(weighted, frame, kept)
        low, high = 1e-3, 1.0
        for _ in range(30):
            middle = np.sqrt(low * high)
            trial = replace(choice, weight=np.where(np.arange(len(kept)) == worst, middle, weight)).apply(sums)
            fit = solve(trial, frame, kept)
            too_far = fit.chi2 - without.chi2[worst] > fit.dof - without.dof[worst]
            low, high = (low, middle) if too_far else (middle, high)
        weight[worst] = low
    return weight


def _scattered(data: Data, linear: Linear, frame: Frame, kept: NDArray[np.bool_]) -> Array:
    """Chance of every kept star's departure where the scatter is that of the others of its class."""
    out = np.ones(len(kept))
    common = scatter_of(data, linear, frame, kept)
    many = kept.sum() > 12
    for star in np.flatnonzero(kept):
        others = kept.copy()
        others[star] = False
        peers = int((others & (data.polarised == data.polarised[star])).sum())
        if peers < 3 or not common[int(data.polarised[star])]:
            continue
        own = common if many else scatter_of(data, linear, frame, others, common, int(data.polarised[star]))
        tables = add_up(data, linear, own)
        gain, values, without = gains(tables, frame, kept)
        if without.determined[star]:
            out[star] = f_distribution.sf(gain[star] / values[star], values[star], 2 * (peers - 1))
    return out


def _largest_agreeing(sums: Sums, frame: Frame, classes: list[NDArray[np.int_]]) -> NDArray[np.bool_]:
    """Largest set of stars that agree with one another, no more left out than may be bad."""
    number = sum(map(len, classes))
    if np.prod([comb(len(stars), _most(stars)) for stars in classes]) > SUBSETS:
        return _backwards(sums, frame, classes)
    rivals = []
    for parts in product(*(combinations(stars, _most(stars)) for stars in classes)):
        dropped = [star for part in parts for star in part]
        kept = np.ones(number, dtype=bool)
        kept[dropped] = False
        fit = solve(sums, frame, kept)
        if fit.determined and fit.dof >= 2:
            rivals.append((fit.chi2, fit.chance, dropped))
    if not rivals:
        return np.ones(number, dtype=bool)
    rivals.sort()
    best = rivals[0]
    kept = np.ones(number, dtype=bool)
    kept[best[2]] = False
    for _ in range(len(best[2])):
        chances = np.where(kept, 0.0, _departures(sums, frame, kept))
        nearest = int(np.argmax(chances))
        if chances[nearest] * number < FALSE_ALARM:
            break
        kept[nearest] = True
    gone = set(np.flatnonzero(~kept))
    close = best[0] + DISTINCT
    doubtful = any(chi2 < close and chance > SCATTER_ALARM and not gone <= set(d) for chi2, chance, d in rivals[1:])
    return np.ones(number, dtype=bool) if doubtful else kept


def _backwards(sums: Sums, frame: Frame, classes: list[NDArray[np.int_]]) -> NDArray[np.bool_]:
    kept = np.ones(sum(map(len, classes)), dtype=bool)
    for _ in range(sum(map(_most, classes))):
        chances = np.where(_droppable(kept, classes), _departures(sums, frame, kept), 2.0)
        worst = int(np.argmin(chances))
        if chances[worst] * len(kept) >= FALSE_ALARM:
            break
        kept[worst] = False
    return kept
