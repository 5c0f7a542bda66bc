"""The aperture radius: the smallest on the plateau of q, u against radius."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.demodulation import demodulate
from hwpol.errors import InputError
from hwpol.fluxes import Fluxes
from hwpol.linear import invert

Array = NDArray[np.float64]

#: Radii that are tried, in multiples of the full width at half maximum.
LADDER = np.arange(1.0, 3.51, 0.25)
#: No bright source is measured inside this many fwhm: there a change of seeing of 2 percent between positions moves
#: q by 0.14 percent, and by more further in (Moffat profile, beta = 3; computed).
SAFE = 1.5
#: Change of q, per fwhm multiple of the ladder, that a 2 percent differential change of seeing makes (same source).
SEEING_CHANGE = {1.0: 3.3e-3, 1.5: 1.4e-3, 2.0: 6.4e-4, 3.0: 1.7e-4}
#: Radii up to this factor above the chosen one make the plateau.
REACH = 1.6
#: Significance (standard deviations) of a change of q, u against radius that counts as a slope.
SLOPE = 3.0


@dataclass(frozen=True)
class RadiusChoice:
    """The radius chosen and why.

    Attributes
    ----------
    index : int
        Number of the radius in the list.
    drift : ndarray, shape (2,)
        Spread of q and u over the plateau beyond what counts explain: part of the error.
    plateau : bool
        False where no plateau was found.
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
    Apertures are nested: what a larger one adds is independent of the smaller one, so that the variance of a
    difference is the difference of the variances (plus the photons' correlation through the ratio, neglected).
    A faint source may go below 1.5 fwhm where that lowers its error by more than it stands to lose by seeing.
    """
    values = []
    for fluxes in curve:
        try:
            stokes = demodulate(fluxes, method=method, gain=gain)
            values.append((stokes.q[0], stokes.u[0], stokes.random_covariance[0]))
        except InputError:
            values.append((np.nan, np.nan, np.full((2, 2), np.nan)))
    q, u = np.asarray([v[0] for v in values]), np.asarray([v[1] for v in values])
    covariance = np.asarray([v[2] for v in values])
    errors = np.sqrt(np.einsum("rii->ri", covariance))
    usable = np.isfinite(q) & np.isfinite(u)
    alien = np.zeros(len(multiples)) if foreign is None else np.nan_to_num(foreign)
    first = _first(multiples, errors, usable, alien)
    # Where other stars come in, q and u follow them and not the source: no plateau is looked for out there.
    usable &= alien <= np.maximum(1.5 * alien[first], 0.3 * float(np.max(errors[first])))
    number, plateau = first, False
    for r in range(first, len(multiples)):
        if (
            usable[r]
            and len(_members(multiples, usable, r)) > 1
            and not _sloped(q, u, covariance, _members(multiples, usable, r))
        ):
            number, plateau = r, True
            break
    drift = _drift(q, u, errors, _members(multiples, usable, number))
    return RadiusChoice(number, drift, plateau, q, u, errors[:, 0], errors[:, 1])


def _first(multiples: Array, errors: Array, usable: NDArray[np.bool_], alien: Array) -> int:
    """The smallest radius to consider: at 1.5 fwhm, or less where noise outweighs what seeing can do."""
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


def _sloped(q: Array, u: Array, covariance: Array, members: NDArray[np.int_]) -> bool:
    if len(members) < 2:
        return False
    start = members[0]
    for r in members[1:]:
        difference = np.array([q[r] - q[start], u[r] - u[start]])
        # The added ring can only add noise; a floor of a tenth keeps rounding from making a slope.
        noise = np.abs(covariance[r] - covariance[start]) * np.eye(2) + 0.01 * covariance[start] * np.eye(2)
        weight = invert(noise)
        if np.all(np.isfinite(weight)) and difference @ weight @ difference > 2 * SLOPE**2:
            return True
    return False


def _drift(q: Array, u: Array, errors: Array, members: NDArray[np.int_]) -> Array:
    if len(members) < 2:
        return np.zeros(2)
    result = []
    for value, error in ((q, errors[:, 0]), (u, errors[:, 1])):
        change = value[members] - value[members[0]]
        noise = np.abs(error[members] ** 2 - error[members[0]] ** 2)
        result.append(np.sqrt(max(float(np.mean(change**2 - noise)), 0.0)))
    return np.asarray(result)
