"""From a list of standards to a `Calibration`: gathers the data of each filter, fits, and tells what came of it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from hwpol.correction.calibration import Calibration
from hwpol.correction.fitting.gather import Gathered, Item, Observed, gather
from hwpol.correction.fitting.least_squares import Data
from hwpol.correction.fitting.one_model import Fit
from hwpol.correction.fitting.robust import SCATTER_ALARM
from hwpol.correction.fitting.selection import Selected, select
from hwpol.correction.model import Array, FilterModel
from hwpol.correction.standard import Solver, Standard
from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.stokes import Stokes, angle_difference, instrument_from_sky, observed_slopes, real_slopes, sky_slopes

#: Rounds in which standards measured as Fluxes are solved again with the calibration they gave.
FLUX_ROUNDS = 4
#: Departure (sigma) from which a standard is doubted even where the others are too few to blame it.
SUSPECT = 3.0


def fit_calibration(
    standards: list[Standard],
    *,
    frame: str,
    field_order: int | str,
    efficiency: float | str | Mapping[str, float],
    instrument: str,
    nights: tuple[str, ...],
    field_range: ArrayLike | None,
    solver: Solver | None,
) -> Calibration:
    """See `Calibration.fit`."""
    if not standards:
        raise InputError("Calibration.fit: no standards; observe at least one zero-polarised and one polarised star")
    if field_order != "best" and not (isinstance(field_order, int) and 0 <= field_order <= 6):
        raise InputError(f'field_order = {field_order!r}: expected 0 to 6, or "best"')
    observed = [Observed(s, _resolve(s, None, solver)) for s in standards]
    for item in observed:
        if item.stokes.frame != "instrument":
            raise InputError(
                f"standard {item.standard.name}: its Stokes parameters are on the sky; give the observed ones, "
                f'frame = "instrument"'
            )
    _one_role(standards)

    def fit(items: list[Observed]) -> Calibration:
        filters: dict[str, FilterModel] = {}
        rows: list[dict[str, Any]] = []
        for name in dict.fromkeys(item.stokes.filter for item in items):
            chosen = [item for item in items if item.stokes.filter == name]
            model, table = _fit_filter(name, chosen, frame, field_order, _level(efficiency, name), field_range)
            filters[name] = model
            rows += table
        return Calibration(filters, instrument, nights, tuple(rows))

    calibration = fit(observed)
    if all(hasattr(s.measured, "q") for s in standards):
        return calibration
    for _ in range(FLUX_ROUNDS):
        before = np.concatenate([m.values for m in calibration.filters.values()])
        observed = [Observed(s, _observed_again(s, o.stokes, calibration, solver)) for s, o in
                    zip(standards, observed, strict=True)]  # fmt: skip
        calibration = fit(observed)
        after = np.concatenate([m.values for m in calibration.filters.values()])
        if before.shape == after.shape and np.max(np.abs(after - before)) < 1e-9:
            break
    return calibration


def _resolve(standard: Standard, calibration: Calibration | None, solver: Solver | None) -> Stokes:
    measured = standard.measured
    if hasattr(measured, "q"):
        return measured
    if solver is None and hasattr(measured, "demodulated"):
        return measured.demodulated(calibration)
    if solver is None:
        raise InputError(
            f"standard {standard.name or '(unnamed)'}: measured is {type(measured).__name__}, expected Stokes in the "
            f"instrument frame; demodulate it first"
        )
    return solver(measured, calibration)


def _observed_again(standard: Standard, stokes: Stokes, calibration: Calibration, solver: Solver | None) -> Stokes:
    """Observed value at the mean angles that stands for fluxes whose field turned.

    The fluxes are solved for the sky with every frame's own angles; what a measurement without rotation would have
    given for that sky enters the linear fit. Where nothing turns this is the observed value itself.
    """
    if hasattr(standard.measured, "q"):
        return stokes
    sky = _resolve(standard, calibration, solver)
    model = calibration.model(sky.filter)
    where = model.setting(sky.shape, stokes.position_angle, stokes.parallactic, sky.sense, sky.x, sky.y, sky.mjd)
    z = instrument_from_sky(sky.z, where.chi, where.sense)
    observed = model.observed(sky.z, where)
    forward = real_slopes(*observed_slopes(z, model.ip(where), model.amplitude))
    slopes = forward @ np.linalg.inv(real_slopes(*sky_slopes(where.chi, where.sense)))
    covariance = slopes @ sky.random_covariance @ np.swapaxes(slopes, -1, -2)
    return replace(stokes, q=observed.real, u=observed.imag, v=None, covariance=covariance)


def _one_role(standards: list[Standard]) -> None:
    roles: dict[str, str] = {}
    for standard in standards:
        if standard.name and roles.setdefault(standard.name, standard.role) != standard.role:
            raise InputError(
                f"standard {standard.name}: given both as zero-polarised and as polarised; it can be one of them only"
            )


def _level(efficiency: float | str | Mapping[str, float], name: str) -> float | None:
    value: Any = efficiency.get(name, "fit") if isinstance(efficiency, Mapping) else efficiency
    if value == "fit":
        return None
    if isinstance(value, bool) or not isinstance(value, int | float) or not 0 < value <= 1.2:
        raise InputError(f'efficiency = {value!r}: expected "fit", a number of 0 to 1.2, or a table of them by filter')
    return float(value)


def _fit_filter(
    name: str,
    observed: list[Observed],
    frame: str,
    field_order: int | str,
    efficiency: float | None,
    field_range: ArrayLike | None,
) -> tuple[FilterModel, list[dict[str, Any]]]:
    gathered = gather(name, observed, frame, field_order, field_range)
    data, items = gathered.data, gathered.items
    selected = select(data, frame, field_order, efficiency)
    model = _model(selected, gathered, frame)
    return model, _table(name, model, selected, data, items)


def _model(selected: Selected, gathered: Gathered, frame: str) -> FilterModel:
    fit, stars, times = selected.fit, gathered.stars, gathered.times
    solution, kept = fit.solution, fit.choice.kept
    flags = Flag(0)
    if {"ip_q", "tel_q"} & set(selected.held):
        flags |= Flag.IP_UNCALIBRATED
    if "a_re" in selected.held:
        flags |= Flag.ANGLE_UNCALIBRATED | Flag.EFFICIENCY_ASSUMED
    if "efficiency" in selected.held:
        flags |= Flag.EFFICIENCY_ASSUMED
    taken = [item for item, used in zip(stars, selected.stars, strict=True) if used]
    if any(item.standard.provenance == "memory" for item, used in zip(taken, kept, strict=True) if used):
        flags |= Flag.FROM_MEMORY
    scale = 1.0
    if solution.dof > 0 and solution.chance < SCATTER_ALARM:
        scale = solution.chi2 / solution.dof
    left = [(item.name, "measured too poorly to fix the angle") for item, used in
            zip(stars, selected.stars, strict=True) if not used]  # fmt: skip
    left += [(item.name, _reason(fit, star)) for star, item in enumerate(taken) if not kept[star]]
    return FilterModel(
        names=fit.names,
        values=solution.theta,
        covariance=solution.covariance * scale,
        field_range=gathered.limits,
        epoch=gathered.epoch if selected.drift else float("nan"),
        frame=frame,
        held=selected.held,
        chi2=solution.chi2,
        dof=solution.dof,
        scatter=fit.choice.scatter,
        used=tuple(item.name for item, used in zip(taken, kept, strict=True) if used),
        left_out=tuple(left),
        mjd=(float(times.min()), float(times.max())) if times.size else (float("nan"),) * 2,
        flags=int(flags),
    )


def _reason(fit: Fit, star: int) -> str:
    return f"differs from what the other standards predict by {fit.departure[star]:.1f} sigma"


def _table(name: str, model: FilterModel, selected: Selected, data: Data, items: list[Item]) -> list[dict[str, Any]]:
    fit = selected.fit
    calibration = Calibration({name: model})
    number = np.cumsum(selected.stars) - 1
    rows_in_fit = np.cumsum(selected.stars[data.star]) - 1
    number_of = len(fit.choice.kept)
    rows = []
    where = data.where
    everything = calibration.apply(
        Stokes(
            q=data.z.real,
            u=data.z.imag,
            covariance=data.covariance,
            frame="instrument",
            filter=name,
            position_angle=where.chi,
            parallactic=where.eta,
            sense=where.sense,
            x=_pixel(where.x, model.field_range[0]),
            y=_pixel(where.y, model.field_range[1]),
            mjd=None if np.isnan(model.epoch) else model.epoch + where.days,
        )
    )
    for k, item in enumerate(items):
        star = int(data.star[k])
        taken = bool(selected.stars[star])
        standard = item.standard
        sky = everything[k]
        used = taken and bool(fit.choice.kept[number[star]])
        departure = float(fit.departure[number[star]]) if taken else float("nan")
        chance = float(fit.choice.chance[number[star]]) if taken else 1.0
        predicted = fit.predicted[rows_in_fit[k]] if taken else complex(np.nan, np.nan)
        difference = sky.z - standard.z
        if np.isnan(departure):
            total = sky.total_covariance + standard.z_covariance
            pair = np.array([difference.real, difference.imag])
            departure = float(np.sqrt(pair @ np.linalg.solve(total, pair)))
        doubt = ""
        if not used:
            doubt = next(reason for who, reason in model.left_out if who == item.name)
        elif chance * number_of < 0.05:
            doubt = f"differs from what the other standards predict by {departure:.1f} sigma; kept"
        elif departure > SUSPECT:
            doubt = f"disagrees by {departure:.1f} sigma; the standards are too few to tell which of them is wrong"
        rows.append(
            {
                "name": item.name,
                "filter": name,
                "visit": standard.visit,
                "role": standard.role,
                "q": float(sky.q),
                "u": float(sky.u),
                "q_err": float(sky.q_err),
                "u_err": float(sky.u_err),
                "p": float(sky.p),
                "p_err": float(np.sqrt(_along(sky))),
                "theta": float(sky.theta),
                "theta_err": float(np.degrees(np.sqrt(_along(sky, 1j)) / sky.p / 2)) if sky.p > 0 else float("nan"),
                "cat_p": standard.p,
                "cat_p_err": standard.p_err,
                "cat_theta": float("nan") if standard.is_zero else standard.theta,
                "cat_theta_err": float("nan") if standard.is_zero else standard.theta_err,
                "cat_q": standard.z.real,
                "cat_u": standard.z.imag,
                "dq": float(difference.real),
                "du": float(difference.imag),
                "dp": float(sky.p - abs(standard.z)),
                "dtheta": float("nan") if standard.is_zero else float(angle_difference(sky.theta, standard.theta)),
                "sigma": departure,
                "predicted_q": float(predicted.real),
                "predicted_u": float(predicted.imag),
                "used": used,
                "doubt": doubt,
                "provenance": standard.provenance,
                "reference": standard.reference,
            }
        )
    return rows


def _pixel(scaled: Array, limits: Array) -> Array:
    return np.asarray(limits.mean() + scaled * np.ptp(limits) / 2)


def _along(sky: Stokes, turn: complex = 1.0) -> float:
    """Random variance along the direction of z (or across it)."""
    direction = complex(sky.z) * turn
    unit = np.array([direction.real, direction.imag]) / (abs(direction) or 1.0)
    return float(unit @ sky.random_covariance @ unit) if abs(direction) else float(sky.covariance[0, 0])
