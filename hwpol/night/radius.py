"""The aperture radius: the smallest on the plateau of q, u against radius."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation import demodulate
from hwpol.errors import InputError
from hwpol.fluxes import Fluxes
from hwpol.linear import invert

Array = NDArray[np.float64]

#: Radii that are tried, in multiples of the full width at half maximum (of the matched Gaussian).
LADDER = np.arange(1.0, 3.51, 0.25)
#: No bright source is measured inside this many fwhm: from there on, a change of seeing of 2 percent in one beam
#: between two positions moves q by less than 7e-4 (Moffat profile, beta = 3, matched width 1.13 fwhm; computed).
SAFE = 1.75
#: Change of q, per fwhm multiple of the ladder, that such a change of seeing makes (same profile and source).
SEEING_CHANGE = {1.0: 2.6e-3, 1.25: 1.6e-3, 1.5: 1.02e-3, 1.75: 6.6e-4, 2.0: 4.4e-4, 3.0: 1.1e-4}
#: Radii up to this factor above the chosen one make the plateau.
REACH = 1.6
#: Significance (standard deviations) of a change of q, u against radius that counts as a slope ...
SLOPE = 3.0
#: ... if it also is this part of the error: a larger aperture gains nothing over less than that.
WORTH = 0.5
#: Standard deviations by which q or u has to leave its value at the chosen radius for the rest to count as drift.
CHANCE = 2.0
#: Radii are compared on frames that all of them have, where those are this part of the frames or more.
COMMON = 0.6


@dataclass(frozen=True)
class RadiusChoice:
    """The radius chosen and why.

    Attributes
    ----------
    index : int
        Number of the radius in the list.
    drift : ndarray, shape (2,)
        Largest change of q and u over the plateau beyond `CHANCE` times its noise: part of the error.
    plateau : bool
        False where q and u change with every radius tried; True also where other stars leave nothing to compare.
    q, u, q_err, u_err : ndarray, shape (R,)
        The curve, instrument frame.
    """

    index: int
    drift: Array
    plateau: bool
    q: Array
    u: Array
    q_err: Array
    u_err: Array


def choose_radius(
    curve: list[Fluxes],
    multiples: Array,
    foreign: Array | None = None,
    *,
    method: str = "least-squares",
    gain: str = "visit",
) -> RadiusChoice:
    """Choose among aperture radii by the source's own q and u.

    Parameters
    ----------
    curve : list of Fluxes
        One source, a Fluxes for each radius, smallest first.
    multiples : ndarray, shape (R,)
        The radii in fwhm.
    foreign : ndarray, shape (R,), optional
        Error of q that the light of other stars can make at each radius.

    Notes
    -----
    Apertures are nested: what a larger one adds is independent of the smaller one (`_change_noise`).
    A faint source may go below `SAFE` where that lowers its error by more than it stands to lose by seeing.
    """
    curve = _on_common_frames(curve, multiples)
    values = []
    for fluxes in curve:
        try:
            stokes = demodulate(fluxes, method=method, gain=gain)
            values.append((stokes.q[0], stokes.u[0], stokes.random_covariance[0]))
        except InputError:
            values.append((np.nan, np.nan, np.full((2, 2), np.nan)))
    value = np.asarray([v[:2] for v in values], dtype=float)
    covariance = np.asarray([v[2] for v in values])
    errors = np.sqrt(np.einsum("rii->ri", covariance))
    usable = np.isfinite(value).all(axis=1)
    alien = np.zeros(len(multiples)) if foreign is None else np.nan_to_num(foreign)
    first = _first(multiples, errors, usable, alien)
    # Where other stars come in, q and u follow them and not the source: no plateau is looked for out there.
    usable &= alien <= np.maximum(1.5 * alien[first], 0.3 * float(np.max(errors[first])))
    alone = len(_members(multiples, usable, first)) < 2
    number, plateau = first, alone and bool(usable[first])
    for r in range(first, len(multiples)):
        members = _members(multiples, usable, r)
        if usable[r] and len(members) > 1 and not _sloped(curve, value, covariance, members):
            number, plateau = r, True
            break
    drift = _drift(curve, value, covariance, _members(multiples, usable, number))
    return RadiusChoice(number, drift, plateau, value[:, 0], value[:, 1], errors[:, 0], errors[:, 1])


def _on_common_frames(curve: list[Fluxes], multiples: Array) -> list[Fluxes]:
    """The curve without frames that are lost (to hits, edges) at some radius of the first plateau."""
    within = np.flatnonzero(multiples <= SAFE * REACH + 1e-9)
    if not len(within):
        return curve
    good = np.isfinite(np.array([fluxes.flux for fluxes in curve])).all(axis=(1, 3))
    common = np.logical_and.reduce(good[within])
    if common.sum() < COMMON * good[within[0]].sum() or common.sum() == good[within[0]].sum():
        return curve
    return [replace(fluxes, flux=np.where(common[:, None], fluxes.flux, np.nan)) for fluxes in curve]


def _first(multiples: Array, errors: Array, usable: NDArray[np.bool_], alien: Array) -> int:
    """The smallest radius to consider: at `SAFE`, or less where noise outweighs what seeing can do."""
    known = sorted(SEEING_CHANGE)
    systematic = np.interp(multiples, known, [SEEING_CHANGE[k] for k in known])
    noise = np.sqrt(np.sum(errors**2, axis=1) / 2)
    cost = np.where(usable, np.hypot(np.hypot(noise, systematic), alien), np.inf)
    candidates = np.flatnonzero(multiples <= SAFE + 1e-9)
    if not np.isfinite(cost[candidates]).any():
        return int(np.argmin(cost)) if np.isfinite(cost).any() else 0
    return int(candidates[np.argmin(cost[candidates])])


def _members(multiples: Array, usable: NDArray[np.bool_], start: int) -> NDArray[np.int_]:
    inside = (multiples >= multiples[start] - 1e-9) & (multiples <= multiples[start] * REACH + 1e-9)
    return np.flatnonzero(inside & usable)


def _change_noise(curve: list[Fluxes], covariance: Array, start: int, r: int) -> Array:
    """Covariance of the change of (q, u) from one aperture to a larger one about it, (2, 2).

    The larger one's light is a fraction 1 - e of the smaller one's and e of the ring's, independent of each other, so
    that its Stokes parameters change by e (ring - start).
    """
    inner, outer = curve[start], curve[r]
    both = np.isfinite(inner.flux) & np.isfinite(outer.flux)
    if not both.any():
        return np.full((2, 2), np.nan)
    light, more = inner.flux[both].sum(), outer.flux[both].sum()
    variance, grown = inner.variance[both].sum(), outer.variance[both].sum()
    added = (more - light) / more
    part = (max(grown - variance, 0.0) + added**2 * variance) / variance * (light / more) ** 2
    # A floor of a thousandth keeps rounding from making a slope.
    return np.asarray((part + 1e-3) * covariance[start])


def _sloped(curve: list[Fluxes], value: Array, covariance: Array, members: NDArray[np.int_]) -> bool:
    start = members[0]
    for r in members[1:]:
        change = value[r] - value[start]
        weight = invert(_change_noise(curve, covariance, start, r))
        worth = np.hypot(*change) > WORTH * np.sqrt(np.trace(covariance[start]) / 2)
        if worth and np.all(np.isfinite(weight)) and change @ weight @ change > 2 * SLOPE**2:
            return True
    return False


def _drift(curve: list[Fluxes], value: Array, covariance: Array, members: NDArray[np.int_]) -> Array:
    """How far q and u leave their values at the chosen radius beyond chance, (2,)."""
    result = np.zeros(2)
    for r in members[1:]:
        noise = np.sqrt(np.diag(_change_noise(curve, covariance, members[0], r)))
        change = np.abs(value[r] - value[members[0]])
        result = np.fmax(result, change - CHANCE * noise)
    return result
