"""Decides what the standards at hand determine: which terms, which order over the field, whether there is a drift."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2 as chi2_distribution

from hwpol.correction.fitting.least_squares import Data, add_up, free_frame, linearise, solve
from hwpol.correction.fitting.one_model import AMPLITUDE_LIMIT, IP_LIMIT, Fit, fit_model, usable
from hwpol.correction.model import AMPLITUDE, Array, Setting, basis, term_names

#: Highest order tried for "best", and stars wanted for each term of a component.
HIGHEST_ORDER, STARS_PER_TERM = 4, 2
#: Parts into which the stars are split for cross-validation.
FOLDS = 10
#: Times (d) between which a drift may be sought: at least half an hour, within one night.
DRIFT_SPAN = (0.02, 1.0)
#: Chance below which a drift is taken to be demanded by the data.
DRIFT_ALARM = 0.001
#: Observations wanted before a drift is sought.
DRIFT_OBSERVATIONS = 6
#: A star's share of the cross-validation is cut at this many times the median share: bad standards are judged later.
WINSOR = 9.0


@dataclass(frozen=True)
class CrossValidation:
    """Orders tried, and for each the rms residual per component (weighted) of held-out stars and of the fit itself."""

    orders: tuple[int, ...]
    held_out: Array
    fitted: Array
    chosen: int


def subset(data: Data, stars: NDArray[np.bool_]) -> Data:
    """Return the data of some stars alone."""
    number = np.cumsum(stars) - 1
    rows = stars[data.star]
    where = data.where
    cut = Setting(where.chi[rows], where.eta[rows], where.sense, where.x[rows], where.y[rows], where.days[rows])
    return Data(data.z[rows], data.covariance[rows], number[data.star[rows]], cut, data.sky[stars],
                data.sky_covariance[stars])  # fmt: skip


def _terms(names: tuple[str, ...]) -> set[str]:
    return {n for n in names if n not in AMPLITUDE}


def _one_by_one(data: Data) -> Data:
    """Every observation as a star of its own; the catalogue error only where a star was observed once."""
    visits = np.bincount(data.star, minlength=len(data.sky))[data.star]
    errors = np.where((visits == 1)[:, None, None], data.sky_covariance[data.star], 0.0)
    return replace(data, star=np.arange(len(data.z)), sky=data.sky[data.star], sky_covariance=errors)


def cross_validate(data: Data, frame: str, mode: str, efficiency: float) -> CrossValidation:
    """Choose the order over the field by leaving a tenth of the observations out in turn.

    A star moved over the field is as good as many: its catalogue error, common to its observations, is left out of
    their weights here. The lowest order whose held-out chi2 is within one standard error (of the differences one by
    one) of the least is chosen.
    """
    data = _one_by_one(data)
    stars = len(data.sky)
    orders = [n for n in range(HIGHEST_ORDER + 1) if stars >= STARS_PER_TERM * (n + 1) * (n + 2) // 2]
    orders = orders or [0]
    fold = np.arange(stars) % FOLDS
    shares, held_rms, fit_rms = [], [], []
    for order in orders:
        names = term_names(frame, order)
        amplitude = complex(efficiency)
        ip = np.zeros(len(data.z), dtype=complex)
        everyone = np.ones(stars, dtype=bool)
        for _ in range(3):
            linear = linearise(data, names, ip, amplitude)
            turn = free_frame(names, _terms(names), amplitude, "held" if mode == "held" else "fit")
            sums = add_up(data, linear, (0.0, 0.0))
            full = solve(sums, turn, everyone)
            if not full.determined:
                break
            ip = np.tensordot(full.theta, basis(names, data.where), axes=1)
            amplitude = complex(full.theta[-2], full.theta[-1])
        share, squares = np.full(stars, np.inf), np.full(len(data.z), np.nan)
        if full.determined:
            for part in range(FOLDS):
                outside = fold == part
                fit = solve(sums, turn, ~outside)
                theta = fit.theta
                if fit.determined and outside.any():
                    share[outside] = (
                        sums.square[outside]
                        - 2 * sums.right[outside] @ theta
                        + np.einsum("sij,i,j->s", sums.normal[outside], theta, theta)
                    )
                    rows = outside[data.star]
                    squares[rows] = np.sum((linear.values[rows] - linear.design[rows] @ theta) ** 2, axis=-1) / 2
        within = np.sum((linear.values - linear.design @ full.theta) ** 2, axis=-1) / 2
        shares.append(share)
        held_rms.append(float(np.sqrt(np.nanmean(squares))) if np.isfinite(squares).any() else np.inf)
        fit_rms.append(float(np.sqrt(np.mean(within))) if full.determined else np.inf)
    limit = WINSOR * np.median(np.min(np.array(shares), axis=0))
    cut = np.minimum(np.array(shares), limit)
    totals = cut.sum(axis=1)
    least = int(np.argmin(totals))
    chosen = least
    for place in range(least):
        difference = cut[place] - cut[least]
        if difference.sum() <= np.sqrt(stars) * np.std(difference):
            chosen = place
            break
    return CrossValidation(tuple(orders), np.array(held_rms), np.array(fit_rms), orders[chosen])


@dataclass(frozen=True)
class Selected:
    """The fit used, the stars of the data it took (others had nothing to say), and what was not determined."""

    fit: Fit
    stars: NDArray[np.bool_]
    held: tuple[str, ...]
    drift: bool
    validation: CrossValidation | None = None


def select(data: Data, frame: str, field_order: int | str, efficiency: float | None) -> Selected:
    """Fit the fullest model that the standards determine.

    Parameters
    ----------
    field_order : int or "best"
    efficiency : float or None
        Fixed |A|; None to fit it.
    """
    polarised = data.polarised
    everyone = np.ones(len(data.sky), dtype=bool)
    mode = "held" if not polarised.any() else "fit" if efficiency is None else "angle"
    level = 1.0 if efficiency is None else efficiency
    validation = None
    if field_order == "best":
        validation = cross_validate(data, frame, mode, level)
    highest = validation.chosen if validation is not None else int(field_order)
    ladder: list[tuple[tuple[str, ...], set[str], str, NDArray[np.bool_]]] = []
    for order in range(highest, -1, -1):
        names = term_names(frame, order)
        ladder.append((names, _terms(names), mode, everyone))
    flat = term_names(frame, 0)
    if frame == "both":
        ladder.append((flat, {"ip_q", "ip_u"}, mode, everyone))
    if polarised.any() and not polarised.all():
        ladder.append((flat, _terms(flat), "held", ~polarised))
    ladder.append((flat, set(), mode, everyone))
    for names, active, how, stars in ladder:
        if how == "held" and not active:
            continue
        part = subset(data, stars)
        fit = fit_model(part, names, active, how, level)
        if usable(fit):
            drift = _with_drift(part, frame, names, active, how, level, fit)
            held = (*_held(names, active, how), *(n for n in term_names(frame, highest) if n not in names))
            return Selected(drift or fit, stars, held, drift is not None, validation)
    fit = fit_model(data, flat, set(), "held", level)
    return Selected(fit, everyone, _held(flat, set(), "held"), False, validation)


def _held(names: tuple[str, ...], active: set[str], mode: str) -> tuple[str, ...]:
    held = [n for n in names if n not in AMPLITUDE and n not in active]
    return (*held, *({"held": AMPLITUDE, "angle": ("efficiency",)}.get(mode, ())))


def _with_drift(
    data: Data, frame: str, names: tuple[str, ...], active: set[str], mode: str, level: float, fit: Fit
) -> Fit | None:
    """Fit with a linear drift of the ip where the data demand it, else None."""
    span = float(np.ptp(data.where.days)) if len(data.z) else 0.0
    if not active or len(data.z) < DRIFT_OBSERVATIONS or not DRIFT_SPAN[0] <= span <= DRIFT_SPAN[1]:
        return None
    order = max((len(n.split("_")[2]) for n in names if n.count("_") == 2), default=0)
    wider = term_names(frame, order, drift=True)
    both = active | (set(wider) - set(names))
    trial = fit_model(data, wider, both, mode, level)
    kept = trial.choice.kept
    if not usable_drift(trial, span) or trial.solution.dof < 2:
        return None
    # The same stars and weights for both, so that chi2 tells of the drift alone.
    ip = np.tensordot(fit.solution.theta, basis(names, data.where), axes=1)
    amplitude = complex(fit.solution.theta[-2], fit.solution.theta[-1])
    linear = linearise(data, names, ip, amplitude)
    sums = trial.choice.apply(add_up(data, linear, trial.choice.scatter))
    plain = solve(sums, free_frame(names, active, amplitude, mode), kept)
    gain = plain.chi2 - trial.solution.chi2
    values = plain.dof - trial.solution.dof
    scale = max(trial.solution.chi2 / trial.solution.dof, 1.0)
    return trial if chi2_distribution.sf(gain / scale, values) < DRIFT_ALARM else None


def usable_drift(fit: Fit, span: float) -> bool:
    """Whether a fit with drift is determined: the limit of the ip counts for the whole span (d)."""
    if not fit.solution.determined:
        return False
    errors = np.sqrt(np.maximum(np.diag(fit.solution.covariance), 0.0))
    reach = np.array([span if n.endswith("_t") else 1.0 for n in fit.names])
    return bool(np.all((errors * reach)[:-2] < IP_LIMIT) and np.all(errors[-2:] < AMPLITUDE_LIMIT))
