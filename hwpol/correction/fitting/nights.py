"""Whether the nights behind one calibration agree with one another."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from scipy.stats import chi2 as chi2_distribution

from hwpol.correction.calibration import Calibration
from hwpol.correction.fitting.gather import Observed, gather
from hwpol.correction.fitting.least_squares import Data, Frame, Linear, add_up, linearise, solve
from hwpol.correction.fitting.selection import subset
from hwpol.correction.model import AMPLITUDE, Array, FilterModel, real_pair
from hwpol.correction.standard import Standard
from hwpol.errors import InputError
from hwpol.stokes import instrument_from_sky

#: Error of a night's own A above which its standards say nothing on it (only zero-polarised ones, say).
NIGHT_LIMIT = 0.1


def compare_nights(
    standards: Sequence[Standard], nights: Sequence[str], calibration: Calibration
) -> list[dict[str, Any]]:
    """How far every night departs from the others, in every filter.

    Each night in turn gets an ip and an A of its own beside the common ones. Catalogue errors are common to the
    visits of a star in all nights, so that they do not blur the comparison where the same stars were observed.

    Parameters
    ----------
    standards : sequence of Standard
        Measured as Stokes in the instrument frame; those the calibration left out are left out here.
    nights : sequence of str
        Night of every standard.
    calibration : Calibration
        Fitted to all of them.

    Returns
    -------
    list of dict
        filter, night, d_ip_q, d_ip_u, d_efficiency, d_zero_angle (deg), night minus the others, with ``_err``; NaN
        where the night's standards do not tell. chi2, dof, chance of a departure at least as large. Nothing for a
        filter of a single night.

    Raises
    ------
    InputError
        When the lengths differ or a standard was not measured as Stokes.
    """
    if len(standards) != len(nights):
        raise InputError(f"{len(standards)} standards, but {len(nights)} nights; give the night of each")
    if not all(hasattr(s.measured, "q") for s in standards):
        raise InputError("comparison of nights: standards measured as Stokes are needed; demodulate them first")
    rows = []
    for name, model in calibration.filters.items():
        chosen = [(s, night) for s, night in zip(standards, nights, strict=True) if s.measured.filter == name]
        left = {who for who, _ in model.left_out}
        gathered = gather(name, [Observed(s, s.measured) for s, _ in chosen], model.frame, "best", model.field_range)
        night_of = {id(s): night for s, night in chosen}
        labels = np.array([night_of[id(item.standard)] for item in gathered.items])
        kept = np.array([star.name not in left for star in gathered.stars])
        data, labels = subset(gathered.data, kept), labels[kept[gathered.data.star]]
        if len(set(labels)) > 1:
            rows += [{"filter": name, **_night(data, model, labels == night, night)} for night in dict.fromkeys(labels)]
    return rows


def _night(data: Data, model: FilterModel, own: Array, night: str) -> dict[str, Any]:
    names = tuple(n for n in model.names if not n.endswith("_t"))
    values = np.array([model.value(n) for n in names])
    z = instrument_from_sky(data.sky[data.star], data.where.chi, data.where.sense)
    plain = FilterModel(names, values, np.zeros((len(names),) * 2), model.field_range, frame=model.frame)
    linear = linearise(data, names, plain.ip(data.where), model.amplitude)
    one = np.ones_like(z)
    extra = np.stack([real_pair(column * own) for column in (one, 1j * one, z, 1j * z)], axis=-1)
    wide = Linear(np.concatenate([linear.design, extra], axis=-1), linear.values, linear.slopes)
    sums = add_up(data, wide, model.scatter)
    everyone = np.ones(len(data.sky), dtype=bool)
    held = set(model.held) | (set(AMPLITUDE) if "efficiency" in model.held else set())
    start = np.concatenate([values, np.zeros(4)])
    free = [k for k, n in enumerate(names) if n not in held]
    base = solve(sums, _frame(start, free), everyone)
    out: dict[str, Any] = {"night": str(night)}
    offsets: tuple[int, ...]
    for offsets in ((0, 1, 2, 3), (0, 1), (2, 3)):
        fit = solve(sums, _frame(start, [*free, *(len(names) + k for k in offsets)]), everyone)
        errors = np.sqrt(np.maximum(np.diag(fit.covariance)[len(names) :], 0.0))
        if fit.determined and np.all(errors[2:] < NIGHT_LIMIT):
            break
    else:
        offsets, fit, errors = (), base, np.zeros(4)
    shift = fit.theta[len(names) :]
    gain = model.amplitude
    along = np.array([gain.real, gain.imag]) / abs(gain)
    turn = np.array([along, [-along[1], along[0]]])
    part = fit.covariance[len(names) + 2 :, len(names) + 2 :]
    shifts = [*shift[:2], *(turn @ shift[2:]) * [1.0, np.degrees(0.5 / abs(gain))]]
    spread = np.sqrt(np.maximum(np.diag(turn @ part @ turn.T), 0.0)) * [1.0, np.degrees(0.5 / abs(gain))]
    for k, key in enumerate(("ip_q", "ip_u", "efficiency", "zero_angle")):
        known = (k if k < 2 else 2) in offsets
        out[f"d_{key}"] = float(shifts[k]) if known else float("nan")
        out[f"d_{key}_err"] = float([*errors[:2], *spread][k]) if known else float("nan")
    gain_chi2, values_ = max(base.chi2 - fit.chi2, 0.0), base.dof - fit.dof
    chance = float(chi2_distribution.sf(gain_chi2, values_)) if values_ else float("nan")
    return out | {"chi2": gain_chi2, "dof": values_, "chance": chance}


def _frame(start: Array, free: list[int]) -> Frame:
    turn = np.eye(len(start))[:, free]
    fixed = start.copy()
    fixed[free] = 0.0
    return Frame(fixed, turn)
