"""Interstellar foreground: known or from field stars, carried to the band, subtracted as a vector with its error."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq

from hwpol.correction.calibration import Calibration
from hwpol.correction.catalogue.bands import LAMBDA_MAX, transfer
from hwpol.correction.model import Array
from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.stokes import Stokes

#: Most interstellar polarisation per reddening: 9 percent per magnitude (Serkowski, Mathewson & Ford 1975).
MOST_PER_REDDENING = 0.09
#: Foreground over remaining error above which the result is flagged.
DOMINATES = 3.0
#: A field star further from the median than this many times the spread of the field is not of the foreground.
OUTLIER = 4.0
#: Times the median absolute deviation that gives the standard deviation of a normal distribution.
MAD_TO_SIGMA = 1.482602218505602


@dataclass(frozen=True)
class Foreground:
    """Interstellar polarisation on the sky.

    Parameters
    ----------
    q, u : float
        Fractions.
    covariance : ndarray, shape (2, 2)
        Its error, without the part the calibration shares with the targets.
    shared : ndarray, shape (2, 2)
        That part, for a mean of calibrated field stars; zero for a value given.
    slopes : ndarray, shape (2, parameters), or None
        Of q, u with the parameters of the calibration in `filter`, for a mean of field stars.
    filter : str
    wavelength : float
        Micron; NaN where not known.
    stars, scatter : int, float
        Field stars used and their intrinsic scatter per component.
    note : str
        What speaks against it; empty for nothing.
    """

    q: float
    u: float
    covariance: Array
    shared: Array
    wavelength: float = float("nan")
    slopes: Array | None = None
    filter: str = ""
    stars: int = 0
    scatter: float = 0.0
    note: str = ""

    @property
    def p(self) -> float:
        """Degree of polarisation."""
        return float(np.hypot(self.q, self.u))

    @property
    def total_covariance(self) -> Array:
        """Error of the foreground itself, calibration included."""
        return np.asarray(self.covariance + self.shared)

    @staticmethod
    def of_value(
        q: float, u: float, q_err: float, u_err: float, *, wavelength: float = float("nan"),
        reddening: float | None = None,
    ) -> Foreground:  # fmt: skip
        """Foreground from given q, u (sky, fractions) with errors; `reddening` E(B-V) (mag) for the check.

        Raises
        ------
        InputError
            When a value is not finite, an error negative or missing.
        """
        for name, value in (("q", q), ("u", u), ("q_err", q_err), ("u_err", u_err)):
            if value is None or not np.isfinite(value) or (name.endswith("err") and value < 0):
                raise InputError(f"foreground.{name} = {value}: expected a finite fraction, errors >= 0")
        if np.hypot(q, u) > 1:
            raise InputError(f"foreground: p = {np.hypot(q, u):g}, expected fractions, not percent")
        out = Foreground(float(q), float(u), np.diag([q_err**2, u_err**2]), np.zeros((2, 2)), wavelength)
        return replace(out, note=excess_note(out.p, reddening))

    @staticmethod
    def of_field(
        stars: Sequence[Stokes],
        calibration: Calibration | None = None,
        *,
        wavelength: float = float("nan"),
        reddening: float | None = None,
    ) -> Foreground:
        """Weighted mean of field stars on the sky, in one filter.

        Weights hold the errors and the stars' own scatter (estimated so that chi2 equals its degrees of freedom;
        Paule & Mandel 1982, J. Res. NBS 87, 377); stars far from all others are left out. The error of the mean
        holds that scatter and, in `shared`, what the calibration adds to all alike, which more stars do not reduce.

        Raises
        ------
        InputError
            When fewer than two stars are given, or they are not on the sky.
        """
        if any(item.frame != "sky" for item in stars):
            raise InputError("foreground from the field: its stars are in the instrument frame; calibrate them first")
        if len({item.filter for item in stars}) > 1:
            raise InputError("foreground from the field: stars of several filters; give those of one")
        pairs = [np.stack([s.q.ravel(), s.u.ravel()], axis=-1) for s in stars]
        values = np.concatenate(pairs) if pairs else np.zeros((0, 2))
        covariance = np.concatenate([s.random_covariance.reshape(-1, 2, 2) for s in stars]) if pairs else values
        good = np.isfinite(values).all(axis=-1) & np.isfinite(covariance).all(axis=(-1, -2))
        if good.sum() < 2:
            raise InputError(f"foreground from the field: {int(good.sum())} usable stars, expected at least 2")
        good[good] = _together(values[good], covariance[good])
        scatter, mean, error, weights = _mean(values[good], covariance[good])
        shared, slopes, name = np.zeros((2, 2)), None, stars[0].filter
        if calibration is not None:
            each = [calibration.sky_jacobian(s) for s in stars]
            flat = np.concatenate([j.reshape(-1, *j.shape[-2:]) for j in each])[good]
            slopes = np.einsum("nab,nbp->ap", weights, flat)
            shared = slopes @ calibration.model(name).covariance @ slopes.T
        out = Foreground(
            float(mean[0]), float(mean[1]), error, shared, wavelength, slopes, name, int(good.sum()), scatter
        )
        return replace(out, note=excess_note(out.p, reddening))

    def at(self, wavelength: float, *, lambda_max: float = LAMBDA_MAX, law: str = "whittet") -> Foreground:
        """The foreground at another wavelength (micron) by the Serkowski law, the angle kept.

        Raises
        ------
        InputError
            When its own wavelength is not known.
        """
        if not self.wavelength > 0:
            raise InputError("foreground: its wavelength is not known, so it cannot be carried to another band")
        p = self.p
        ratio, ratio_err = transfer(1.0, 0.0, self.wavelength, wavelength, lambda_max, law)
        along = np.array([self.q, self.u]) * ratio_err
        return replace(
            self,
            q=self.q * ratio,
            u=self.u * ratio,
            covariance=self.covariance * ratio**2 + (np.outer(along, along) if p > 0 else 0.0),
            shared=self.shared * ratio**2,
            slopes=None if self.slopes is None else self.slopes * ratio,
            wavelength=wavelength,
        )

    def subtract(self, stokes: Stokes, calibration: Calibration | None = None) -> Stokes:
        """Remove the foreground from values on the sky.

        Its own error joins the random covariance. What a field mean and the target of the same filter share through
        the `calibration` (an error of ip moves both alike) is taken together; without it, or in another filter, the
        two parts of `calibration_covariance` add up. A foreground larger than three times the error that remains is
        flagged.

        Raises
        ------
        InputError
            When the values are in the instrument frame.
        """
        if stokes.frame != "sky":
            raise InputError("foreground: the values are in the instrument frame; calibrate them first")
        covariance = stokes.covariance.copy()
        covariance[..., :2, :2] += self.covariance
        if calibration is not None and self.slopes is not None and stokes.filter == self.filter:
            slopes = calibration.sky_jacobian(stokes) - self.slopes
            shared = slopes @ calibration.model(stokes.filter).covariance @ np.swapaxes(slopes, -1, -2)
        else:
            shared = self.shared + (0.0 if stokes.calibration_covariance is None else stokes.calibration_covariance)
        out = replace(
            stokes, q=stokes.q - self.q, u=stokes.u - self.u, covariance=covariance, calibration_covariance=shared
        )
        error = np.sqrt(np.trace(out.total_covariance, axis1=-2, axis2=-1) / 2)
        dominated = np.where(self.p > DOMINATES * error, int(Flag.FOREGROUND_DOMINATES), 0)
        return replace(out, flags=out.flags | dominated)


def excess_note(p: float, reddening: float | None) -> str:
    """Note where an interstellar p (fraction) exceeds 9 percent per magnitude of E(B-V); empty otherwise.

    The limit is empirical and exceeded in places: a reason to look, not to refuse.
    """
    if reddening is None or not p > MOST_PER_REDDENING * max(reddening, 0.0):
        return ""
    return (
        f"p = {100 * p:.2f} percent exceeds 9 percent x E(B-V) = {900 * 0.01 * max(reddening, 0.0):.2f} percent, the "
        f"usual most of interstellar polarisation (Serkowski et al. 1975): part of it may be of another origin"
    )


def _together(values: Array, covariance: Array) -> Array:
    """Stars that belong to the field: within four times its spread of the median."""
    offset = values - np.median(values, axis=0)
    spread = MAD_TO_SIGMA * np.median(np.abs(offset), axis=0)
    allowed = np.sqrt(spread**2 + np.einsum("nii->ni", covariance))
    keep = (np.abs(offset) <= OUTLIER * allowed).all(axis=-1)
    return keep if keep.sum() >= 2 else np.ones(len(values), dtype=bool)


def _mean(values: Array, covariance: Array) -> tuple[float, Array, Array, Array]:
    """Scatter per component, weighted mean (2,), its covariance (2, 2) and the weights (n, 2, 2)."""

    def at(variance: float) -> tuple[float, Array, Array, Array]:
        inverse = np.linalg.inv(covariance + variance * np.eye(2))
        error = np.linalg.inv(inverse.sum(axis=0))
        weights = error @ inverse
        mean = np.einsum("nab,nb->a", weights, values)
        offset = values - mean
        chi2 = float(np.einsum("na,nab,nb->", offset, inverse, offset))
        return chi2 - 2 * (len(values) - 1), mean, error, weights

    variance = 0.0
    if at(0.0)[0] > 0:
        top = float(np.sum(np.var(values, axis=0))) + 1e-12
        while at(top)[0] > 0:
            top *= 2
        variance = float(brentq(lambda v: at(v)[0], 0.0, top))
    _, mean, error, weights = at(variance)
    return float(np.sqrt(variance)), mean, error, weights
