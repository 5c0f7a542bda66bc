"""The calibration of a night: from its own standards, or from a file."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from hwpol.correction import Calibration, Standard
from hwpol.demodulation import demodulate
from hwpol.errors import HwpolError, HwpolWarning
from hwpol.fluxes import Fluxes
from hwpol.night.config_objects import CorrectionConfig, DemodulationConfig
from hwpol.night.roles import Role
from hwpol.night.solve import solve_visit
from hwpol.stokes import ROTATION_LIMIT, Stokes, mean_angle


@dataclass(frozen=True)
class Measured:
    """One target of one visit, as the calibration needs it: `fluxes` hold this source alone."""

    name: str
    visit: int
    fluxes: Fluxes
    role: Role
    drift: Any


def find_calibration(
    measured: Sequence[Measured],
    correction: CorrectionConfig,
    demodulation: DemodulationConfig,
    *,
    frame: str,
    instrument: str,
    nights: tuple[str, ...],
    field_range: list[list[float]] | None,
) -> tuple[Calibration | None, list[str]]:
    """The calibration that the night file asks for, and notes in words.

    None where it is off, or where no standard can be used.
    """
    notes: list[str] = []
    if isinstance(correction.calibration, Path):
        calibration = Calibration.read(correction.calibration)
        calibration.check_instrument(instrument)
        times = [np.nanmean(m.fluxes.mjd) for m in measured if np.isfinite(m.fluxes.mjd).any()]
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always", HwpolWarning)
            if times:
                calibration.warn_outside(float(np.mean(times)))
        notes += [str(w.message) for w in caught]
        return calibration, notes
    if correction.calibration == "off":
        return None, ["calibration off: q and u stay in the instrument frame"]
    standards = [
        Standard.from_entry(_value(m, demodulation), m.role.entry, name=m.name, visit=m.visit)
        for m in measured
        if m.role.entry is not None
    ]
    usable = [s for s in standards if hasattr(s.measured, "demodulated") or np.isfinite(s.measured.q).all()]
    for lost in (s for s in standards if s not in usable):
        notes.append(f"{lost.name}, visit {lost.visit}: its angles do not determine q and u; not used as a standard")
    if not usable:
        return None, [
            *notes,
            "no standard star of this night can be used: q and u stay in the instrument frame, with its own "
            "polarisation in them; observe at least one zero-polarised and one polarised standard per filter, or give "
            "correction.calibration the calibration file of another night",
        ]
    # A list would be compared by value below; identity is meant.
    try:
        calibration = Calibration.fit(
            usable,
            frame=frame,
            field_order=correction.field_order,
            efficiency=correction.efficiency,
            instrument=instrument,
            nights=nights,
            field_range=field_range,
            solver=lambda fluxes, c: _solve(fluxes, demodulation, c),
        )
    except HwpolError as problem:
        return None, [*notes, f"the standards do not give a calibration: {problem}"]
    return calibration, notes


def _value(item: Measured, demodulation: DemodulationConfig) -> Stokes | Fluxes:
    """Observed Stokes of a standard, or its fluxes where the field turned within the visit."""
    _, spread = mean_angle(item.fluxes.position_angle)
    _, turn = mean_angle(item.fluxes.parallactic - item.fluxes.position_angle)
    if np.nanmax([spread, 0.0 if np.isnan(turn) else turn]) > ROTATION_LIMIT / 10:
        return item.fluxes
    return _solve(item.fluxes, demodulation, None)


def _solve(fluxes: Fluxes, demodulation: DemodulationConfig, calibration: Calibration | None) -> Stokes:
    try:
        solution = solve_visit(fluxes, method=demodulation.method, gain=demodulation.gain, calibration=calibration)
    except HwpolError:
        return demodulate(fluxes, calibration=calibration)
    return solution.stokes
