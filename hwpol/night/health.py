"""Checks of a night's health, each with the probability that noise alone would look so."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from hwpol.linear import solve
from hwpol.night.solve import VisitSolution
from hwpol.night.visit import VisitResult
from hwpol.statistics import null_p_value

Array = NDArray[np.float64]

#: False alarms allowed in a night, shared by its checks.
FALSE_ALARMS = 1e-2
#: Cycles that a dependence on seeing or airmass needs.
LEAST_CYCLES = 8


def health_checks(visits: Sequence[VisitResult], solutions: Sequence[VisitSolution]) -> list[dict[str, Any]]:
    """Rows of checks.ecsv, first targets alone.

    - repeats: chi2 of the kept cycles about their mean
    - halves: first half of the kept cycles against the second
    - half turn: plate positions psi against psi + 90 deg
    - seeing, airmass: q, u of the cycles about their visits' means, a slope common to the filter
    """
    rows: list[dict[str, Any]] = []
    for visit, solution in zip(visits, solutions, strict=True):
        own = {"filter": visit.filter, "visit": visit.task_number}
        if solution.kept[0].sum() > 1 and solution.dof[0] > 0:
            rows.append(own | _row("repeats", float(solution.chi2[0]), int(solution.dof[0])))
        first, second = _halves(solution)
        if first is not None and second is not None:
            chance = null_p_value(first[0] - second[0], first[1] - second[1], first[2] + second[2])
            rows.append(own | _row("halves", float(-2 * np.log(max(float(chance), 1e-300))), 2))
        if np.isfinite(solution.null[0]).all():
            chance = null_p_value(solution.null[0, 0], solution.null[0, 1], solution.null_covariance[0])
            rows.append(own | _row("half turn", float(-2 * np.log(max(float(chance), 1e-300))), 2))
    for name in dict.fromkeys(visit.filter for visit in visits):
        pairs = [(v, s) for v, s in zip(visits, solutions, strict=True) if v.filter == name]
        for check in ("seeing", "airmass"):
            found = _slope(pairs, check)
            if found is not None:
                rows.append({"filter": name, "visit": -1} | _row(check, *found))
    limit = FALSE_ALARMS / max(len(rows), 1)
    for row in rows:
        row["passed"] = bool(row["chance"] >= limit)
    return rows


def failed_checks(rows: Sequence[dict[str, Any]]) -> list[str]:
    """What failed, in words."""
    texts = {
        "repeats": "its cycles scatter more than their counts allow",
        "halves": "the second half of its cycles differs from the first",
        "half turn": "plate positions a quarter turn apart differ: the plate itself polarises or absorbs",
        "seeing": "q, u follow the seeing: look at apertures and neighbours",
        "airmass": "q, u follow the airmass",
    }
    words = []
    for row in rows:
        if not row["passed"]:
            where = f"visit {row['visit']}" if row["visit"] > 0 else f"filter {row['filter']}"
            words.append(f"check {row['check']!r}, {where}: {texts[row['check']]} (chance {row['chance']:.0e})")
    return words


def _row(check: str, chi2: float, dof: int) -> dict[str, Any]:
    return {"check": check, "chi2": chi2, "dof": dof, "chance": float(chdtrc(dof, chi2))}


def _halves(solution: VisitSolution) -> tuple[Any, Any]:
    kept = np.flatnonzero(solution.kept[0])
    if len(kept) < 2:
        return None, None
    parts = []
    for half in (kept[: len(kept) // 2], kept[len(kept) // 2 :]):
        weight = np.linalg.inv(solution.cycles.random_covariance[0, half])
        covariance = np.linalg.inv(weight.sum(axis=0))
        z = np.stack([solution.cycles.q[0, half], solution.cycles.u[0, half]], axis=-1)
        q, u = covariance @ np.einsum("nij,nj->i", weight, z)
        parts.append((q, u, covariance))
    return parts[0], parts[1]


def _slope(pairs: list[tuple[VisitResult, VisitSolution]], check: str) -> tuple[float, int] | None:
    """chi2 (2 degrees of freedom) of a common slope of observed q and u against seeing or airmass."""
    values, levers, noises = [], [], []
    for visit, solution in pairs:
        fluxes, cycles = visit.fluxes, solution.observed_cycles
        if np.ptp(fluxes.position_angle) > 1.0:
            continue
        kept = np.flatnonzero(solution.kept[0])
        frame_value = fluxes.airmass if check == "airmass" else _widths(visit)
        numbers = np.unique(fluxes.cycle)
        lever = np.asarray([_mean(frame_value[fluxes.cycle == numbers[c]]) for c in kept])
        if len(kept) < 2 or not np.isfinite(lever).all():
            continue
        error = np.sqrt(np.einsum("nii->ni", cycles.random_covariance[0, kept]).mean(axis=1))
        z = np.stack([cycles.q[0, kept], cycles.u[0, kept]], axis=-1)
        weight = 1 / error**2
        values.append(z - np.average(z, axis=0, weights=weight))
        levers.append(lever - np.average(lever, weights=weight))
        # The visit's own mean takes one degree of freedom from its cycles.
        noises.append(error)
    if sum(map(len, levers)) < LEAST_CYCLES:
        return None
    lever, noise, z = np.concatenate(levers), np.concatenate(noises), np.concatenate(values)
    if not np.any(np.abs(lever) > 0):
        return None
    chi2 = 0.0
    for part in (0, 1):
        fit = solve(lever[:, None], z[:, part], 1 / noise**2)
        if not np.isfinite(fit.parameters).all():
            return None
        chi2 += float(fit.parameters[0] ** 2 / fit.covariance[0, 0])
    return chi2, 2


def _widths(visit: VisitResult) -> Array:
    """Full width of each frame, all beams; NaN where none was measured."""
    width = np.full(len(visit.fwhm), np.nan)
    known = np.isfinite(visit.fwhm).any(axis=1)
    width[known] = np.nanmedian(visit.fwhm[known], axis=1)
    return width


def _mean(values: Array) -> float:
    known = values[np.isfinite(values)]
    return float(known.mean()) if known.size else float("nan")
