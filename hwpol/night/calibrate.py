"""The calibration of a night: from its own standards, or from a file."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import partial
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

#: Part of the standards' distance from their values that must be left for another sense to be believed.
AGREES = 0.2


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
    usable = []
    for item in measured:
        if item.role.entry is None:
            continue
        value = observed_value(item, demodulation, frame)
        if isinstance(value, Stokes) and not np.isfinite(value.q).all():
            notes.append(
                f"{item.name}, visit {item.visit}: its angles do not determine q and u; not used as a standard"
            )
        else:
            usable.append(Standard.from_entry(value, item.role.entry, name=item.name, visit=item.visit))
    if not usable:
        return None, [
            *notes,
            "no standard star of this night can be used: q and u stay in the instrument frame, with its own "
            "polarisation in them; observe at least one zero-polarised and one polarised standard per filter, or give "
            "correction.calibration the calibration file of another night",
        ]
    try:
        calibration = Calibration.fit(
            usable,
            frame=frame,
            field_order=correction.field_order,
            efficiency=correction.efficiency,
            instrument=instrument,
            nights=nights,
            field_range=field_range,
            solver=partial(_solve, demodulation=demodulation),
        )
    except HwpolError as problem:
        return None, [*notes, f"the standards do not give a calibration: {problem}"]
    hint = _sense_hint(calibration, usable, frame)
    return calibration, [*notes, hint] if hint else notes


def _distance(calibration: Calibration) -> float:
    """Root mean square distance of the standards from their catalogue values (fraction)."""
    rows = calibration.standards_table()
    return float(np.sqrt(np.nanmean([row["dq"] ** 2 + row["du"] ** 2 for row in rows])))


def _sense_hint(calibration: Calibration, standards: list[Standard], frame: str) -> str:
    """Words where the standards contradict each other and would agree if angles grew the other way; else empty."""
    chi2 = sum(model.chi2 for model in calibration.filters.values() if np.isfinite(model.chi2))
    dof = sum(model.dof for model in calibration.filters.values())
    doubted = [row for row in calibration.standards_table() if row.get("doubt")]
    if len(doubted) < 2 or any(not isinstance(standard.measured, Stokes) for standard in standards):
        return ""
    mirrored = [
        replace(standard, measured=replace(standard.measured, u=-standard.measured.u)) for standard in standards
    ]
    try:
        other = Calibration.fit(mirrored, frame=frame)
    except HwpolError:
        return ""
    if not _distance(other) < AGREES * _distance(calibration):
        return (
            f"the standards contradict each other (chi2 {chi2:.0f} for {dof} degrees of freedom; {len(doubted)} are "
            "doubted): look at [wave_plate] values, zero and scale, at the beams' analysers and at the catalogues"
        )
    return (
        "the standards contradict each other, and would agree if angles grew the other way: check wave_plate.sense "
        "and orientation.sense (one of them has the wrong sign)"
    )


def observed_value(item: Measured, demodulation: DemodulationConfig, frame: str) -> Stokes | Fluxes:
    """Observed Stokes of a standard, or its fluxes where its field (or the telescope) turned within the visit."""
    _, spread = mean_angle(item.fluxes.position_angle)
    _, turn = mean_angle(item.fluxes.parallactic - item.fluxes.position_angle)
    turn = 0.0 if np.isnan(turn) or frame == "instrument" else turn
    if max(spread, turn) > ROTATION_LIMIT / 10:
        return item.fluxes
    stokes = _solve(item.fluxes, None, demodulation)
    extra = np.diag(np.asarray(item.drift, dtype=float) ** 2)
    covariance = stokes.covariance.copy()
    covariance[..., :2, :2] += extra
    return replace(stokes, covariance=covariance)


def _solve(fluxes: Fluxes, calibration: Calibration | None, demodulation: DemodulationConfig) -> Stokes:
    gain = "fixed" if demodulation.gain == "night" else demodulation.gain
    try:
        solution = solve_visit(fluxes, method=demodulation.method, gain=gain, calibration=calibration)
    except HwpolError:
        return demodulate(fluxes, calibration=calibration)
    return solution.stokes
