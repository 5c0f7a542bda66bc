"""Bands, their wavelengths, and the wavelength dependence of interstellar polarisation.

The law of Serkowski, Mathewson & Ford (1975, ApJ 196, 261),

    p(lambda) = p_max exp[-K ln^2(lambda_max / lambda)],

carries polarisation from one band to another. K is 1.15 (their value), or tied to
lambda_max (micron) by K = 1.86 lambda_max - 0.10 (Wilking et al. 1982) or
K = 1.66 lambda_max + 0.01 (Whittet et al. 1992, ApJ 386, 562); both relations are
given here from memory. Wavelengths are in micron, p is a fraction.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError

Array = NDArray[np.float64]
KLaw = Literal["whittet", "wilking", "constant"]

#: Intercept and slope of K against lambda_max (micron) for each relation.
K_LAWS: dict[str, tuple[float, float]] = {"whittet": (0.01, 1.66), "wilking": (-0.10, 1.86), "constant": (1.15, 0.0)}
#: Error of K about any of the relations: the published errors of intercept (0.05) and slope (0.09) in quadrature.
K_ERR = 0.10
#: Median lambda_max and half of its range 0.45-0.80 micron taken as two standard deviations (Serkowski et al. 1975).
LAMBDA_MAX, LAMBDA_MAX_ERR = 0.545, 0.09
#: Part of p by which stars depart from the law; recalled broad-band values of standards fit one curve to 0.1 percent
#: at p of 5 percent.
LAW_SCATTER = 0.01

_SLOAN = frozenset("ugriz")
_LETTERS = frozenset("UBVRI") | _SLOAN
_COUSINS = {"R": "Rc", "I": "Ic"}
_SLOAN_WORDS = {"sdss", "sloan"}
_JOHNSON_WORDS = {"johnson", "john"}


def band_name(text: str) -> str | None:
    """Return the band that a filter's name means, None where it means none of UBV(RI)c, (RI)j and ugriz.

    A single letter (case counts: ``R`` is Cousins R, ``r`` Sloan r) beside any other words and numbers:
    ``"Bess R 76"``, ``"SDSS_r"``, ``"g'"``, ``"Rc"``, ``"V_Johnson"``. R and I are those of Cousins unless the
    name says Johnson.
    """
    words = [w for w in re.split(r"[^A-Za-z]+", text) if w]
    lower = {w.lower() for w in words}
    explicit = {"rc": "Rc", "ic": "Ic", "rj": "Rj", "ij": "Ij"}
    found = {explicit[w.lower()] for w in words if w.lower() in explicit and w[0].isupper()}
    letters = [w for w in words if len(w) == 1 and (w in _LETTERS or w.lower() in _SLOAN | {"b", "v"})]
    for letter in letters:
        name = letter if letter in _LETTERS else letter.upper() if letter in "bv" else letter.lower()
        if lower & _SLOAN_WORDS and letter.lower() in _SLOAN:
            name = letter.lower()
        elif name in _COUSINS:
            name = name + "j" if lower & _JOHNSON_WORDS else _COUSINS[name]
        found.add(name)
    return found.pop() if len(found) == 1 else None


def k_of(lambda_max: ArrayLike, law: str = "whittet") -> Array:
    """K of the law for `lambda_max` (micron) by one of the relations "whittet", "wilking" and "constant" (1.15)."""
    if law not in K_LAWS:
        raise InputError(f"K relation {law!r}: expected one of {', '.join(map(repr, K_LAWS))}")
    zero, slope = K_LAWS[law]
    return zero + slope * np.asarray(lambda_max, dtype=float)


def serkowski(wavelength: ArrayLike, lambda_max: ArrayLike, k: ArrayLike) -> Array:
    """p / p_max at `wavelength` (micron)."""
    log = np.log(np.asarray(lambda_max, dtype=float) / np.asarray(wavelength, dtype=float))
    return np.exp(-np.asarray(k, dtype=float) * log**2)


@dataclass(frozen=True)
class Curve:
    """A star's law: p_max (fraction), lambda_max (micron), K, and the covariance of (ln p_max, ln lambda_max, K).

    `law` is the relation K follows while lambda_max varies within its error; "own" keeps K.
    """

    p_max: float
    lambda_max: float
    k: float
    covariance: Array
    law: str = "own"

    def at(self, wavelength: float) -> tuple[float, float]:
        """p (fraction) and its error at a wavelength (micron).

        The error holds those of the parameters and the scatter of stars about the law (1 percent of p).
        """
        log = np.log(self.lambda_max / wavelength)
        p = self.p_max * np.exp(-self.k * log**2)
        slope = -2 * self.k * log
        if self.law != "own":
            slope -= K_LAWS[self.law][1] * self.lambda_max * log**2
        gradient = np.array([1.0, slope, -(log**2)])
        variance = gradient @ self.covariance @ gradient + LAW_SCATTER**2
        return float(p), float(p * np.sqrt(variance))


def fit_curve(wavelength: ArrayLike, p: ArrayLike, p_err: ArrayLike, law: str = "whittet") -> Curve:
    """Fit the law through a star's values in one or more bands.

    Parameters
    ----------
    wavelength : array_like, shape (n,)
        Micron.
    p, p_err : array_like, shape (n,)
        Fractions.
    law : {"whittet", "wilking", "constant"}

    Returns
    -------
    Curve
        lambda_max starts from what stars in general show (0.545 +- 0.09 micron, Serkowski et al. 1975), which alone
        decides where a single band is given, and K from its relation +- 0.10.

    Raises
    ------
    InputError
        When no value is usable or the relation is unknown.
    """
    lam, value, err = (np.atleast_1d(np.asarray(a, dtype=float)) for a in (wavelength, p, p_err))
    good = np.isfinite(lam) & np.isfinite(value) & np.isfinite(err) & (value > 0)
    if not good.any():
        raise InputError("Serkowski law: no band with p > 0 and an error; give at least one tabulated value")
    lam, value, err = lam[good], value[good], err[good]
    weight = 1 / ((err / value) ** 2 + LAW_SCATTER**2)
    prior = np.diag([0.0, (LAMBDA_MAX / LAMBDA_MAX_ERR) ** 2, K_ERR**-2])
    usual = np.array([0.0, np.log(LAMBDA_MAX), 0.0])
    state = np.array([np.log(value.max()), np.log(LAMBDA_MAX), 0.0])
    normal = np.eye(3)
    for _ in range(50):
        peak = np.exp(state[1])
        k = float(k_of(peak, law)) + state[2]
        log = state[1] - np.log(lam)
        residual = np.log(value) - (state[0] - k * log**2)
        slope = -2 * k * log - K_LAWS[law][1] * peak * log**2
        design = np.stack([np.ones_like(lam), slope, -(log**2)], axis=1)
        normal = design.T @ (weight[:, None] * design) + prior
        step = np.linalg.solve(normal, design.T @ (weight * residual) + prior @ (usual - state))
        state = state + np.clip(step, -0.2, 0.2)
        if np.max(np.abs(step)) < 1e-12:
            break
    peak = float(np.exp(state[1]))
    covariance = np.asarray(np.linalg.inv(normal), dtype=float)
    return Curve(float(np.exp(state[0])), peak, float(k_of(peak, law)) + float(state[2]), covariance, law)


def transfer(
    p: float, p_err: float, wavelength: float, to: float, lambda_max: float = LAMBDA_MAX, law: str = "whittet"
) -> tuple[float, float]:
    """Carry an interstellar p (fraction) from one wavelength to another (micron); with its error.

    The error holds those of p, of lambda_max (0.09 micron), of K and of stars about the law, the part common to both
    wavelengths left out.
    """
    if min(wavelength, to, lambda_max) <= 0:
        raise InputError(f"band transfer from {wavelength} to {to}: expected wavelengths > 0 in micron")
    k = float(k_of(lambda_max, law))
    log_from, log_to = np.log(lambda_max / wavelength), np.log(lambda_max / to)
    ratio = np.exp(-k * (log_to**2 - log_from**2))
    slope_k = log_from**2 - log_to**2
    slope = 2 * k * (log_from - log_to) / lambda_max + K_LAWS[law][1] * slope_k
    spread = LAW_SCATTER if to != wavelength else 0.0
    relative = np.sqrt((slope * LAMBDA_MAX_ERR) ** 2 + (slope_k * K_ERR) ** 2 + spread**2)
    return float(p * ratio), float(np.hypot(ratio * p_err, p * ratio * relative))
