"""One gain for the night: what the visits of a filter tell together."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from hwpol.demodulation import fit_counts
from hwpol.night.visit import VisitResult


def share_gain(results: list[VisitResult]) -> list[VisitResult]:
    """Return the visits with the mean gain of their filter as throughput, its scatter from visit to visit as error.

    The weighted mean of ln g over the visits' first targets; the error of what a single visit may differ by is the
    scatter over the visits where that exceeds the errors (a detector's gain may drift by a percent in a night).
    """
    shared = {}
    for name in {result.filter for result in results}:
        logs, errors = [], []
        for result in results:
            if result.filter == name:
                solution = fit_counts(result.fluxes.take_sources([0]))
                if np.isfinite(solution.gain).all():
                    logs.append(np.log(solution.gain[0]))
                    errors.append(solution.gain_err[0] / solution.gain[0])
        if logs:
            values, noise = np.asarray(logs), np.asarray(errors)
            weight = 1 / np.maximum(noise, 1e-9) ** 2
            mean = np.sum(weight * values, axis=0) / weight.sum(axis=0)
            excess = np.mean((values - mean) ** 2 - noise**2, axis=0) if len(values) > 1 else 0.0
            error = np.sqrt(1 / weight.sum(axis=0) + np.maximum(excess, 0.0))
            error[0] = np.nan
            shared[name] = np.exp(mean), np.exp(mean) * error
    return [
        replace(
            result,
            fluxes=replace(result.fluxes, throughput=shared[result.filter][0], throughput_err=shared[result.filter][1]),
        )
        if result.filter in shared
        else result
        for result in results
    ]
