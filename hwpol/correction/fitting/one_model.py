"""Fits one model to the standards of a filter, iterated for what is not linear, and predicts every star without it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.stats import chi2 as chi2_distribution

from hwpol.correction.fitting.least_squares import (
    Data,
    Frame,
    Linear,
    Solution,
    Sums,
    add_up,
    free_frame,
    linearise,
    solve,
)
from hwpol.correction.fitting.robust import Choice, choose, gains
from hwpol.correction.model import Array, Complex, basis

#: Formal errors above which a parameter counts as not determined: ip (fraction), A.
IP_LIMIT, AMPLITUDE_LIMIT = 0.01, 0.1


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
        if choice is None or round_ < 2:
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
        if step < 1e-13 and round_ > 1:
            break
    assert choice is not None
    predicted, departure = _predict(data, linear, frame, add_up(data, linear, choice.scatter), choice)
    return Fit(names, solution, frozenset(active), mode, choice, predicted, departure)


def _predict(data: Data, linear: Linear, frame: Frame, sums: Sums, choice: Choice) -> tuple[Complex, Array]:
    gain, values, without = gains(sums, frame, choice.kept)
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
