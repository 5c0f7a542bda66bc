"""Fits the model of one filter to its standards: generalised least squares, robust, with scatter where demanded.

Every standard star carries one error of its catalogue value, common to all its visits, so that the covariance of the
observations is

    C = diag(measurement) + G (K_star + tau^2) G^T   (blocks, one a star),

G the slopes of the observed with the sky value. Since stars are independent, sums over stars (normal matrix, right
hand, square) give any fit that leaves stars out at once.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations
from math import comb

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from scipy.stats import chi2 as chi2_distribution
from scipy.stats import f as f_distribution

from hwpol.correction.model import AMPLITUDE, Array, Complex, Setting, basis, real_pair
from hwpol.linear import invert
from hwpol.stokes import instrument_from_sky, observed_slopes, real_slopes, sky_slopes

#: Chance that a fit without a bad standard loses a good one; small harm, so it may be generous.
FALSE_ALARM = 0.01
#: Chance below which a standard is doubted and its errors enlarged.
DOUBT = 0.3
#: Chance below which chi2 is taken to demand more scatter than the errors say.
SCATTER_ALARM = 0.01
#: Chance below which a drift is taken to be demanded by the data.
DRIFT_ALARM = 0.001
#: Formal errors above which a parameter counts as not determined: ip (fraction), A.
IP_LIMIT, AMPLITUDE_LIMIT = 0.01, 0.1
#: Most subsets tried one by one in the search for bad standards; beyond, they are dropped one at a time.
SUBSETS = 400
#: Largest share of standards that may be bad.
BAD_SHARE = 4


@dataclass(frozen=True)
class Data:
    """Observations (n) and stars (s) of one filter.

    Attributes
    ----------
    z : Complex, shape (n,)
        Observed, instrument frame.
    covariance : Array, shape (n, 2, 2)
    star : shape (n,), int
        Number of the star of each observation.
    where : Setting
    sky : Complex, shape (s,)
        Catalogue value on the sky, 0 for zero-polarised stars.
    sky_covariance : Array, shape (s, 2, 2)
    """

    z: Complex
    covariance: Array
    star: NDArray[np.int_]
    where: Setting
    sky: Complex
    sky_covariance: Array

    @property
    def polarised(self) -> NDArray[np.bool_]:
        """Which stars are polarised standards, shape (s,)."""
        return np.abs(self.sky) > 0


@dataclass(frozen=True)
class Linear:
    """Design (n, 2, p), values (n, 2) and slopes with the star's sky value (n, 2, 2), about a current ip and A."""

    design: Array
    values: Array
    slopes: Array


@dataclass(frozen=True)
class Sums:
    """Per star: normal matrix (s, p, p), right hand (s, p), square, log determinant (s,) and number of values (s,)."""

    normal: Array
    right: Array
    square: Array
    logdet: Array
    count: NDArray[np.int_]


@dataclass(frozen=True)
class Frame:
    """Which parameters are free: theta = start + turn . gamma, gamma free."""

    start: Array
    turn: Array


@dataclass(frozen=True)
class Solution:
    """Parameters (p,), covariance (p, p), chi2, dof; NaN parameters where the data do not determine them."""

    theta: Array
    covariance: Array
    chi2: float
    dof: int

    @property
    def determined(self) -> bool:
        """Whether the data determine all free parameters."""
        return bool(np.all(np.isfinite(self.theta)))

    @property
    def chance(self) -> float:
        """Chance of a chi2 at least as large."""
        return float(chi2_distribution.sf(self.chi2, self.dof)) if self.dof > 0 else 1.0


def linearise(data: Data, names: tuple[str, ...], ip: Complex, amplitude: complex) -> Linear:
    """Linear form of the model about current values: only the denominator and the slopes depend on them."""
    z = instrument_from_sky(data.sky[data.star], data.where.chi, data.where.sense)
    below = 1 + np.real(np.conj(ip / amplitude) * z)
    factors = basis(names, data.where)
    steps = {"a_re": z, "a_im": 1j * z}
    columns = np.array([steps.get(name, factor) for name, factor in zip(names, factors, strict=True)])
    design = np.moveaxis(real_pair(columns / below), 0, -1)
    to_sky = real_slopes(*sky_slopes(data.where.chi, data.where.sense))
    slopes = real_slopes(*observed_slopes(z, ip, amplitude)) @ np.linalg.inv(to_sky)
    return Linear(design, real_pair(data.z), slopes)


def add_up(data: Data, linear: Linear, scatter: tuple[float, float]) -> Sums:
    """Sums of every star, with the intrinsic scatter of (zero-polarised, polarised) stars in the weights."""
    stars, parameters = len(data.sky), linear.design.shape[-1]
    extra = np.where(data.polarised, scatter[1], scatter[0]) ** 2
    own = data.sky_covariance + extra[:, None, None] * np.eye(2)
    count = np.bincount(data.star, minlength=stars)
    out = Sums(
        np.zeros((stars, parameters, parameters)), np.zeros((stars, parameters)), np.zeros(stars), np.zeros(stars),
        2 * count,
    )  # fmt: skip
    for visits in np.unique(count[count > 0]):
        chosen = np.flatnonzero(count == visits)
        rows = np.array([np.flatnonzero(data.star == s) for s in chosen]) if visits > 1 else _singles(data.star, chosen)
        size = 2 * int(visits)
        slopes = linear.slopes[rows].reshape(len(chosen), size, 2)
        block = slopes @ own[chosen] @ np.swapaxes(slopes, -1, -2)
        for k in range(int(visits)):
            block[:, 2 * k : 2 * k + 2, 2 * k : 2 * k + 2] += data.covariance[rows[:, k]]
        weight = np.linalg.inv(block)
        design = linear.design[rows].reshape(len(chosen), size, parameters)
        values = linear.values[rows].reshape(len(chosen), size)
        weighted = weight @ design
        out.normal[chosen] = np.swapaxes(design, -1, -2) @ weighted
        out.right[chosen] = np.einsum("sip,si->sp", weighted, values)
        out.square[chosen] = np.einsum("si,sij,sj->s", values, weight, values)
        out.logdet[chosen] = np.linalg.slogdet(block)[1]
    return out


def _singles(star: NDArray[np.int_], chosen: NDArray[np.int_]) -> NDArray[np.int_]:
    place = np.empty(int(star.max()) + 1, dtype=int)
    place[star] = np.arange(len(star))
    return place[chosen][:, None]


def solve(sums: Sums, frame: Frame, kept: NDArray[np.bool_]) -> Solution:
    """Fit the free parameters to the stars kept."""
    return _solve(sums.normal[kept].sum(axis=0), sums.right[kept].sum(axis=0), float(sums.square[kept].sum()),
                  int(sums.count[kept].sum()), frame)  # fmt: skip


def _solve(normal: Array, right: Array, square: float, count: int, frame: Frame) -> Solution:
    turn, start = frame.turn, frame.start
    free = turn.shape[1]
    inner = turn.T @ normal @ turn
    inverse = invert(inner) if free else np.zeros((0, 0))
    gamma = inverse @ (turn.T @ (right - normal @ start))
    theta = start + turn @ gamma
    chi2 = square - 2 * theta @ right + theta @ normal @ theta
    return Solution(theta, turn @ inverse @ turn.T, max(float(chi2), 0.0), count - free)


@dataclass(frozen=True)
class Alone:
    """Fits without each star in turn: parameters (s, p), chi2, dof (s,) and whether the others determine them (s,)."""

    theta: Array
    chi2: Array
    dof: NDArray[np.int_]
    determined: NDArray[np.bool_]


def leave_one_out(sums: Sums, frame: Frame, kept: NDArray[np.bool_]) -> Alone:
    """Fits to the stars kept without each star in turn; a star not kept leaves them as they are."""
    share = kept.astype(float)
    normal = sums.normal[kept].sum(axis=0) - share[:, None, None] * sums.normal
    right = sums.right[kept].sum(axis=0) - share[:, None] * sums.right
    square = sums.square[kept].sum() - share * sums.square
    count = sums.count[kept].sum() - kept * sums.count
    turn, start = frame.turn, frame.start
    free = turn.shape[1]
    theta = np.broadcast_to(start, right.shape)
    if free:
        inverse = invert(turn.T @ normal @ turn)
        theta = start + np.einsum("pf,sfg,sg->sp", turn, inverse, (right - normal @ start) @ turn)
    chi2 = square - 2 * np.sum(theta * right, axis=-1) + np.einsum("si,sij,sj->s", theta, normal, theta)
    return Alone(theta, np.maximum(chi2, 0.0), count - free, np.isfinite(theta).all(axis=-1) & (count > 0))


def free_frame(names: tuple[str, ...], active: set[str], amplitude: complex, mode: str) -> Frame:
    """Which parameters are free: the ip terms in `active`, and A as `mode` says.

    "fit": both parts; "angle": its angle alone, |A| kept; "held": none.
    """
    start = np.zeros(len(names))
    start[-2:] = amplitude.real, amplitude.imag
    columns = [np.eye(len(names))[k] for k, name in enumerate(names) if name in active and name not in AMPLITUDE]
    if mode == "fit":
        columns += [np.eye(len(names))[-2], np.eye(len(names))[-1]]
        start[-2:] = 0.0
    elif mode == "angle":
        tangent = np.zeros(len(names))
        tangent[-2:] = -amplitude.imag, amplitude.real
        columns.append(tangent)
    return Frame(start, np.array(columns).T.reshape(len(names), len(columns)))


def scatter_of(data: Data, linear: Linear, frame: Frame, kept: NDArray[np.bool_]) -> tuple[float, float]:
    """Intrinsic scatter per component of (zero-polarised, polarised) stars by restricted maximum likelihood.

    A class of fewer than three stars gets none.
    """
    classes = [~data.polarised & kept, data.polarised & kept]
    active = [k for k in range(2) if classes[k].sum() >= 3]
    scatter = [0.0, 0.0]

    def cost(value: float, place: int) -> float:
        trial = [*scatter]
        trial[place] = value
        sums = add_up(data, linear, (trial[0], trial[1]))
        fit = solve(sums, frame, kept)
        inner = frame.turn.T @ sums.normal[kept].sum(axis=0) @ frame.turn
        return float(sums.logdet[kept].sum() + np.linalg.slogdet(inner)[1] + fit.chi2)

    for _ in range(len(active)):
        for place in active:
            size = max(float(np.sqrt(np.median(_expected(data, classes[place])))), 1e-6)
            found = minimize_scalar(
                lambda log, place=place, size=size: cost(size * np.exp(log), place),
                bounds=(-2.0, 6.0), method="bounded", options={"xatol": 0.05},
            )  # fmt: skip
            value = size * float(np.exp(found.x))
            scatter[place] = value if found.fun < cost(0.0, place) else 0.0
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
    gain, values, without = _gains(sums, frame, kept)
    chance = chi2_distribution.sf(gain, np.maximum(values, 1))
    return np.where(without.determined & (without.dof >= 2) & (values > 0), chance, 1.0)


def _gains(sums: Sums, frame: Frame, kept: NDArray[np.bool_]) -> tuple[Array, NDArray[np.int_], Alone]:
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
    number = len(data.sky)
    everything = np.ones(number, dtype=bool)
    sums = add_up(data, linear, (0.0, 0.0))
    full = solve(sums, frame, everything)
    most = number // BAD_SHARE if number > 3 else int(number == 3)
    kept = everything
    if most and full.dof > 0 and np.min(_departures(sums, frame, kept)) * number < FALSE_ALARM:
        kept = _largest_agreeing(sums, frame, number, most)
    scatter = (0.0, 0.0)
    if solve(sums, frame, kept).chance < SCATTER_ALARM:
        kept = everything
        scatter = scatter_of(data, linear, frame, kept)
        for _ in range(most):
            chances = _scattered(data, linear, frame, kept)
            worst = int(np.argmin(np.where(kept, chances, 2.0)))
            if chances[worst] * kept.sum() >= FALSE_ALARM:
                break
            kept = kept & (np.arange(number) != worst)
            scatter = scatter_of(data, linear, frame, kept)
        sums = add_up(data, linear, scatter)
    weight = _softened(sums, frame, kept, most - int((~kept).sum()))
    return Choice(weight, scatter, _departures(sums, frame, kept))


def _softened(sums: Sums, frame: Frame, kept: NDArray[np.bool_], most: int) -> Array:
    """Weights of the stars kept: a star that departs, though not enough to be left out, gets its errors enlarged.

    The factor is the one that makes its departure from the others what its errors let expect. At most `most` stars,
    the worst first.
    """
    weight = kept.astype(float)
    for _ in range(most):
        choice = Choice(weight, (0.0, 0.0), weight)
        weighted = choice.apply(sums)
        chances = np.where(kept & (weight == 1.0), _departures(weighted, frame, kept), 2.0)
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
        tables = add_up(data, linear, common if many else scatter_of(data, linear, frame, others))
        gain, values, without = _gains(tables, frame, kept)
        if without.determined[star]:
            out[star] = f_distribution.sf(gain[star] / values[star], values[star], 2 * (peers - 1))
    return out


def _largest_agreeing(sums: Sums, frame: Frame, number: int, most: int) -> NDArray[np.bool_]:
    """Largest set of stars that agree with one another, at most `most` left out."""
    if sum(comb(number, n) for n in range(1, most + 1)) > SUBSETS:
        return _backwards(sums, frame, number, most)
    best, rivals = None, []
    for dropped in combinations(range(number), most):
        kept = np.ones(number, dtype=bool)
        kept[list(dropped)] = False
        fit = solve(sums, frame, kept)
        if fit.determined and fit.dof >= 2:
            rivals.append((fit.chi2, fit.chance, dropped))
    if not rivals:
        return np.ones(number, dtype=bool)
    rivals.sort()
    best = rivals[0]
    kept = np.ones(number, dtype=bool)
    kept[list(best[2])] = False
    for _ in range(most):
        chances = np.where(kept, 0.0, _departures(sums, frame, kept))
        nearest = int(np.argmax(chances))
        if chances[nearest] * number < FALSE_ALARM:
            break
        kept[nearest] = True
    gone = set(np.flatnonzero(~kept))
    doubtful = [r for r in rivals[1:] if r[1] > SCATTER_ALARM and not gone <= set(r[2]) and r[0] - best[0] < 6.0]
    return np.ones(number, dtype=bool) if doubtful else kept


def _backwards(sums: Sums, frame: Frame, number: int, most: int) -> NDArray[np.bool_]:
    kept = np.ones(number, dtype=bool)
    for _ in range(most):
        chances = np.where(kept, _departures(sums, frame, kept), 2.0)
        worst = int(np.argmin(chances))
        if chances[worst] * number >= FALSE_ALARM:
            break
        kept[worst] = False
    return kept


@dataclass(frozen=True)
class Fit:
    """Outcome: solution, what was free (`active`, `mode`), the choice of stars, and predictions without each star.

    `predicted` (n,) observed z from the other stars; `departure` (s,) the distance from them in sigma; NaN where the
    others cannot tell.
    """

    names: tuple[str, ...]
    solution: Solution
    active: frozenset[str]
    mode: str
    choice: Choice
    predicted: Complex
    departure: Array


def fit_model(data: Data, names: tuple[str, ...], active: set[str], mode: str, efficiency: float) -> Fit:
    """Fit with the parameters `active` free, iterated for the denominator and the direction of A."""
    amplitude = complex(efficiency)
    ip = np.zeros(len(data.z), dtype=complex)
    choice: Choice | None = None
    theta = np.zeros(len(names))
    if mode == "angle":
        # The tangent of a fixed |A| needs a start: the direction that a free fit shows.
        free = fit_model(data, names, active, "fit", 1.0)
        if free.solution.determined:
            found = complex(*free.solution.theta[-2:])
            amplitude = efficiency * found / abs(found) if abs(found) > 0 else amplitude
    for round_ in range(20):
        linear = linearise(data, names, ip, amplitude)
        frame = free_frame(names, active, amplitude, mode)
        if round_ < 3 or choice is None:
            choice = choose(data, linear, frame)
        sums = choice.apply(add_up(data, linear, choice.scatter))
        solution = solve(sums, frame, choice.kept)
        if not solution.determined:
            break
        step = float(np.max(np.abs(solution.theta - theta)))
        theta = solution.theta
        ip = np.tensordot(theta, basis(names, data.where), axes=1)
        if mode != "held":
            amplitude = complex(theta[-2], theta[-1])
            if mode == "angle":
                amplitude *= efficiency / abs(amplitude)
                theta = np.concatenate([theta[:-2], [amplitude.real, amplitude.imag]])
        solution = replace(solution, theta=theta)
        if step < 1e-13 and round_ > 2:
            break
    assert choice is not None
    predicted, departure = _predict(data, linear, frame, add_up(data, linear, choice.scatter), choice)
    return Fit(names, solution, frozenset(active), mode, choice, predicted, departure)


def _predict(data: Data, linear: Linear, frame: Frame, sums: Sums, choice: Choice) -> tuple[Complex, Array]:
    gain, values, without = _gains(sums, frame, choice.kept)
    pair = np.einsum("nip,np->ni", linear.design, without.theta[data.star])
    known = without.determined
    chance = np.maximum(chi2_distribution.sf(gain, np.maximum(values, 1)), 1e-300)
    predicted = np.where(known[data.star], pair[:, 0] + 1j * pair[:, 1], np.nan + 1j * np.nan)
    return predicted, np.where(known, np.sqrt(chi2_distribution.isf(chance, 2)), np.nan)


def usable(fit: Fit) -> bool:
    """Whether every free parameter is determined well enough to be used."""
    if not fit.solution.determined:
        return False
    errors = np.sqrt(np.maximum(np.diag(fit.solution.covariance), 0.0))
    return bool(np.all(errors[:-2] < IP_LIMIT) and np.all(errors[-2:] < AMPLITUDE_LIMIT))
