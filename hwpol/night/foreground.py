"""Interstellar foreground taken off the science targets of a night."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.correction.foreground import Foreground
from hwpol.errors import HwpolError
from hwpol.night.config_objects import ForegroundConfig
from hwpol.night.solve import VisitSolution
from hwpol.stokes import Stokes

#: Field stars that a mean foreground needs.
LEAST_STARS = 3


def find_foreground(
    config: ForegroundConfig, solution: VisitSolution, targets: int, calibration: Any, wavelength: float | None = None
) -> tuple[Foreground | None, str]:
    """The foreground of one visit, and a note: why there is none, or what is odd about it (empty for neither).

    Parameters
    ----------
    config : ForegroundConfig
    solution : VisitSolution
        Sources from `targets` on are field stars.
    calibration : Calibration or None
    wavelength : float, optional
        Of the visit's filter, micron.
    """
    if config.method == "off":
        return None, ""
    if calibration is None:
        return None, "no foreground was removed: its q and u are on the sky, these results are not"
    if config.method == "value":
        values = [0.0 if v is None else v for v in (config.q, config.u, config.q_err, config.u_err)]
        own = float("nan") if config.wavelength is None else config.wavelength
        given = Foreground.of_value(*values, wavelength=own, reddening=config.reddening)
        if config.wavelength is None:
            return given, given.note
        if wavelength is None:
            return given, "the foreground was not carried to this filter: [filters] does not tell its wavelength"
        return given.at(wavelength), given.note
    stars = solution.stokes[targets:]
    good = np.isfinite(stars.q) & np.isfinite(stars.u)
    if good.sum() < LEAST_STARS:
        return None, (
            f"no foreground was removed: {int(good.sum())} field stars could be measured, {LEAST_STARS} are needed; "
            'photometry.sources = "field" measures them'
        )
    try:
        found = Foreground.of_field([stars[good]], calibration, reddening=config.reddening)
        return found, found.note
    except HwpolError as problem:
        return None, f"no foreground was removed: {problem}"


def remove_foreground(
    solution: VisitSolution, foreground: Foreground, chosen: NDArray[np.bool_], calibration: Any
) -> VisitSolution:
    """Take the foreground off the sources `chosen` (S,), and off their cycles, whose common error it is there."""
    stokes = solution.stokes
    taken = foreground.subtract(stokes, calibration)
    cycles = solution.cycles
    pick = chosen[:, None]
    shared = np.zeros((*cycles.shape, 2, 2)) if cycles.calibration_covariance is None else cycles.calibration_covariance
    return replace(
        solution,
        stokes=_where(chosen, taken, stokes),
        flags=np.where(chosen, taken.flags, solution.flags),
        cycles=replace(
            cycles,
            q=np.where(pick, cycles.q - foreground.q, cycles.q),
            u=np.where(pick, cycles.u - foreground.u, cycles.u),
            calibration_covariance=np.where(pick[..., None, None], shared + foreground.total_covariance, shared),
        ),
    )


def _where(chosen: NDArray[np.bool_], yes: Stokes, no: Stokes) -> Stokes:
    matrix = chosen[:, None, None]
    shared = no.calibration_covariance
    if yes.calibration_covariance is not None and shared is not None:
        shared = np.where(matrix, yes.calibration_covariance, shared)
    return replace(
        no,
        q=np.where(chosen, yes.q, no.q),
        u=np.where(chosen, yes.u, no.u),
        covariance=np.where(matrix, yes.covariance, no.covariance),
        calibration_covariance=shared,
        flags=np.where(chosen, yes.flags, no.flags),
    )
