"""Brings the standards of one filter into the arrays that a fit takes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from hwpol.correction.fitting.least_squares import Data
from hwpol.correction.model import Array, setting
from hwpol.correction.standard import Standard
from hwpol.errors import InputError
from hwpol.stokes import Stokes


@dataclass(frozen=True)
class Observed:
    """A standard with its resolved values."""

    standard: Standard
    stokes: Stokes


@dataclass(frozen=True)
class Item:
    """One observation: its standard, place in the standard's Stokes, number and name of its star."""

    standard: Standard
    stokes: Stokes
    place: int
    star: int
    name: str


@dataclass(frozen=True)
class Gathered:
    """Data of a filter, its items (one per observation) and stars (the first item of each), and their range."""

    data: Data
    items: list[Item]
    stars: list[Item]
    limits: Array
    epoch: float
    times: Array


def gather(
    name: str, observed: list[Observed], frame: str, field_order: int | str, field_range: ArrayLike | None
) -> Gathered:
    """Collect what was observed in one filter.

    Raises
    ------
    InputError
        When nothing is usable, mirrored and unmirrored values are mixed, or eta or positions are needed and missing.
    """
    items = _items(observed)
    if not items:
        raise InputError(f"filter {name!r}: none of its standards has finite q, u and covariance")
    senses = {item.stokes.sense for item in items}
    if len(senses) > 1:
        raise InputError(f"filter {name!r}: standards with and without mirroring (sense 1 and -1) cannot be mixed")
    chi, eta, x, y, mjd = (_per_value(items, n) for n in ("position_angle", "parallactic", "x", "y", "mjd"))
    if frame != "instrument" and np.any(np.isnan(eta)):
        missing = next(item.name for item, value in zip(items, eta, strict=True) if np.isnan(value))
        raise InputError(
            f'standard {missing}, filter {name!r}: frame = "{frame}" needs its parallactic angle; give the site and '
            f'positions, or use frame = "instrument"'
        )
    limits = _field_range(x, y, field_range, field_order)
    times = mjd[np.isfinite(mjd)]
    epoch = float(times.min() + times.max()) / 2 if times.size else float("nan")
    z = np.array([item.stokes.z.ravel()[item.place] for item in items])
    covariance = np.array([item.stokes.random_covariance.reshape(-1, 2, 2)[item.place] for item in items])
    stars = {item.star: item for item in reversed(items)}
    order = sorted(stars)
    number = {star: k for k, star in enumerate(order)}
    data = Data(
        z,
        covariance,
        np.array([number[item.star] for item in items]),
        setting(z.shape, chi, eta, senses.pop(), x, y, mjd, limits, epoch),
        np.array([stars[star].standard.z for star in order]),
        np.array([stars[star].standard.z_covariance for star in order]),
    )
    return Gathered(data, items, [stars[star] for star in order], limits, epoch, times)


def _items(observed: list[Observed]) -> list[Item]:
    numbers: dict[Any, int] = {}
    items = []
    for order, item in enumerate(observed):
        stokes, standard = item.stokes, item.standard
        shape = stokes.shape or (1,)
        sources = shape[0]
        good = np.isfinite(stokes.z) & np.isfinite(stokes.random_covariance).all(axis=(-1, -2))
        for place in np.flatnonzero(np.ravel(good)):
            source = int(place) // max(int(np.prod(shape[1:])), 1)
            label = standard.name if sources == 1 else f"{standard.name or 'star'} {source + 1}"
            known = standard.star or standard.name
            key = (known, source, standard.p, standard.theta) if known else (order, source)
            items.append(Item(standard, stokes, int(place), numbers.setdefault(key, len(numbers)), label))
    return items


def _per_value(items: list[Item], name: str) -> Array:
    """One number per observation of an attribute of its Stokes, NaN where not known."""
    out = np.full(len(items), np.nan)
    spread: dict[int, Array] = {}
    for k, item in enumerate(items):
        value = getattr(item.stokes, name)
        if value is None:
            continue
        if id(item.stokes) not in spread:
            array = np.asarray(value, dtype=float)
            missing = len(item.stokes.shape) - array.ndim
            if name in {"x", "y"} and array.ndim and missing:
                array = array.reshape(array.shape + (1,) * missing)
            spread[id(item.stokes)] = np.broadcast_to(array, item.stokes.shape).ravel()
        out[k] = spread[id(item.stokes)][item.place]
    return out


def _field_range(x: Array, y: Array, given: ArrayLike | None, order: int | str) -> Array:
    if given is not None:
        limits = np.asarray(given, dtype=float)
        if limits.shape != (2, 2) or not np.all(limits[:, 1] > limits[:, 0]):
            raise InputError(f"field_range = {given!r}: expected [[x0, x1], [y0, y1]] in pixels with x0 < x1, y0 < y1")
        return limits
    if not (np.isfinite(x).any() and np.isfinite(y).any()):
        if order not in (0, "best"):
            raise InputError(f"field_order = {order}: the standards' x and y are not known; give them, or use 0")
        return np.array([[-1.0, 1.0], [-1.0, 1.0]])
    limits = np.array([[np.nanmin(v), np.nanmax(v)] for v in (x, y)])
    return np.where(np.ptp(limits, axis=1)[:, None] > 0, limits, limits + np.array([-1.0, 1.0]))
