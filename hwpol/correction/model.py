"""The calibration of one filter as a linear model: instrumental polarisation, efficiency and zero angle.

    z_observed = (ip + A z_instrument) / (1 + Re[conj(ip / A) z_instrument]),   A = efficiency exp(2 i zero_angle)

``ip`` is a sum of terms, each a real parameter times a known complex factor:

====================  ==========================================================================
``ip_q``, ``ip_u``    constant in the instrument frame
``ip_q_xy``, ...      polynomial in detector position, x and y scaled to [-1, 1] over `field_range`
``tel_q``, ``tel_u``  fixed to the telescope: turned by sense (eta - chi)
``ip_q_t``, ...       drift, per day from `epoch`
``a_re``, ``a_im``    real and imaginary part of A
====================  ==========================================================================
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError
from hwpol.stokes import (
    instrument_from_sky,
    observed_from_instrument,
    observed_slopes,
    real_slopes,
    sky_slopes,
    telescope_to_instrument,
)

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

FRAMES = ("instrument", "telescope", "both")
AMPLITUDE = ("a_re", "a_im")


def field_powers(order: int) -> list[str]:
    """Names of the field terms of a polynomial, constant left out: order 2 gives x, y, xx, xy, yy."""
    return ["x" * (total - n) + "y" * n for total in range(1, order + 1) for n in range(total + 1)]


def term_names(frame: str, order: int = 0, drift: bool = False) -> tuple[str, ...]:
    """Parameters of a model, ip first, A last."""
    if frame not in FRAMES:
        raise InputError(f"frame = {frame!r}: expected one of {', '.join(map(repr, FRAMES))}")
    names = [] if frame == "telescope" else ["ip_q", "ip_u"]
    names += [f"ip_{part}_{power}" for power in field_powers(order) for part in "qu"]
    names += ["tel_q", "tel_u"] if frame != "instrument" else []
    home = "tel" if frame == "telescope" else "ip"
    names += [f"{home}_q_t", f"{home}_u_t"] if drift else []
    return (*names, *AMPLITUDE)


@dataclass(frozen=True)
class Setting:
    """How observations were made: chi, eta (deg), scaled x, y, days from the epoch; all of one shape S."""

    chi: Array
    eta: Array
    sense: int
    x: Array
    y: Array
    days: Array


def setting(
    shape: tuple[int, ...],
    chi: ArrayLike,
    eta: ArrayLike | None,
    sense: int,
    x: ArrayLike | None,
    y: ArrayLike | None,
    mjd: ArrayLike | None,
    field_range: ArrayLike,
    epoch: float,
) -> Setting:
    """Bring what describes observations to one shape S; positions that are not known count as the field centre.

    Arrays of fewer axes than S are aligned from the left for x and y (sources) and from the right for the others.
    """

    def spread(value: ArrayLike | None, missing: float) -> Array:
        array = np.asarray(missing if value is None else value, dtype=float)
        return np.broadcast_to(np.where(np.isfinite(array), array, missing), shape)

    def by_source(value: ArrayLike | None) -> ArrayLike | None:
        if value is None:
            return None
        array = np.asarray(value, dtype=float)
        return array.reshape(array.shape + (1,) * (len(shape) - array.ndim)) if 0 < array.ndim < len(shape) else array

    limits = np.asarray(field_range, dtype=float)
    centre, half = limits.mean(axis=1), np.maximum(np.ptp(limits, axis=1) / 2, 1e-9)
    across, along = ((spread(by_source(v), c) - c) / h for v, c, h in zip((x, y), centre, half, strict=True))
    days = spread(mjd, epoch) - epoch if np.isfinite(epoch) else np.zeros(shape)
    return Setting(spread(chi, np.nan), spread(eta, np.nan), sense, across, along, days)


def basis(names: tuple[str, ...], where: Setting) -> Complex:
    """Factor of each ip parameter, shape (parameters, S); zero for those of A."""
    one = np.ones(where.chi.shape, dtype=complex)
    rows = []
    turned: Complex | None = None
    for name in names:
        if name in AMPLITUDE:
            rows.append(0 * one)
            continue
        home, part, *rest = name.split("_")
        factor = one * (1j if part == "u" else 1.0)
        for letter in rest[0] if rest else "":
            factor = factor * {"x": where.x, "y": where.y, "t": where.days}[letter]
        if home == "tel":
            if turned is None:
                if np.any(np.isnan(where.eta)):
                    raise InputError(
                        "instrumental polarisation that turns with the telescope needs the parallactic angle of every "
                        'measurement; give the site and positions, or use frame = "instrument"'
                    )
                turned = telescope_to_instrument(1.0, where.chi, where.eta, where.sense)
            factor = factor * turned
        rows.append(factor)
    return np.array(rows)


def real_pair(z: ArrayLike) -> Array:
    """(q, u) of complex values on a new last axis."""
    return np.stack([np.real(z), np.imag(z)], axis=-1)


@dataclass(frozen=True)
class FilterModel:
    """The calibration of one filter: parameters with their covariance, and how they came about.

    Parameters
    ----------
    names, values, covariance
        Parameters as the table at the top of this module says, their values and covariance (n,), (n, n).
    field_range : ndarray, shape (2, 2)
        Pixels that x = -1, 1 and y = -1, 1 stand for.
    epoch : float
        MJD from which drift counts; NaN without drift.
    frame : str
        "instrument", "telescope" or "both".
    held : tuple of str
        Parameters that the standards did not determine (or the user fixed); they stand at their default, without error.
    chi2, dof
        Of the fit.
    scatter : tuple of float
        Intrinsic scatter per component added to (zero-polarised, polarised) standards.
    used, left_out : tuple
        Names of standards; names with the reason.
    mjd : tuple of float
        First and last time of the standards; NaN where not known.
    flags : int
        Bits of `hwpol.Flag` that every result inherits.
    """

    names: tuple[str, ...]
    values: Array
    covariance: Array
    field_range: Array
    epoch: float = float("nan")
    frame: str = "instrument"
    held: tuple[str, ...] = ()
    chi2: float = float("nan")
    dof: int = 0
    scatter: tuple[float, float] = (0.0, 0.0)
    used: tuple[str, ...] = ()
    left_out: tuple[tuple[str, str], ...] = ()
    mjd: tuple[float, float] = (float("nan"), float("nan"))
    flags: int = 0

    def value(self, name: str) -> float:
        """Value of a parameter; 0 for one the model does not have."""
        return float(self.values[self.names.index(name)]) if name in self.names else 0.0

    def error(self, name: str) -> float:
        """Error of a parameter; NaN for one held or not in the model."""
        if name not in self.names or name in self.held:
            return float("nan")
        place = self.names.index(name)
        return float(np.sqrt(self.covariance[place, place]))

    @property
    def amplitude(self) -> complex:
        """A = efficiency exp(2 i zero_angle)."""
        return complex(self.value("a_re"), self.value("a_im"))

    @property
    def efficiency(self) -> float:
        """|A|."""
        return abs(self.amplitude)

    @property
    def zero_angle(self) -> float:
        """arg(A) / 2 (deg), in (-90, 90]."""
        angle = float(np.degrees(np.angle(self.amplitude)) / 2)
        return angle if angle > -90.0 else 90.0

    def _along(self, direction: complex) -> float:
        places = [self.names.index(n) for n in AMPLITUDE]
        vector = np.array([direction.real, direction.imag]) / abs(direction)
        variance = float(vector @ self.covariance[np.ix_(places, places)] @ vector)
        return float(np.sqrt(max(variance, 0.0)))

    @property
    def efficiency_err(self) -> float:
        """Error of the efficiency; NaN where it was assumed."""
        return float("nan") if "efficiency" in self.held or "a_re" in self.held else self._along(self.amplitude)

    @property
    def zero_angle_err(self) -> float:
        """Error of the zero angle (deg); NaN where it was assumed."""
        if "a_im" in self.held:
            return float("nan")
        return float(np.degrees(self._along(1j * self.amplitude) / self.efficiency / 2))

    def setting(
        self,
        shape: tuple[int, ...],
        chi: ArrayLike,
        eta: ArrayLike | None,
        sense: int,
        x: ArrayLike | None = None,
        y: ArrayLike | None = None,
        mjd: ArrayLike | None = None,
    ) -> Setting:
        """Bring what describes observations to one shape S, x and y scaled to this model's field.

        A drift is not carried beyond the standards' times.
        """
        if mjd is not None and np.isfinite(self.mjd).all():
            mjd = np.clip(np.asarray(mjd, dtype=float), *self.mjd)
        return setting(shape, chi, eta, sense, x, y, mjd, self.field_range, self.epoch)

    def ip(self, where: Setting) -> Complex:
        """Instrumental polarisation in the instrument frame, shape S."""
        return np.asarray(np.tensordot(self.values, basis(self.names, where), axes=1))

    def observed(self, z_sky: ArrayLike, where: Setting) -> Complex:
        """What demodulation would return for light of z_sky, shape S."""
        z = instrument_from_sky(z_sky, where.chi, where.sense)
        return observed_from_instrument(z, self.ip(where), self.amplitude)

    def sky_jacobian(self, z: ArrayLike, where: Setting) -> Array:
        """Slopes of the calibrated (q, u) on the sky with the parameters, shape S + (2, parameters).

        `z` is the calibrated value in the instrument frame; the observed value stays as it is.
        """
        value = np.asarray(z, dtype=complex)
        factors = basis(self.names, where)
        ip, gain = np.tensordot(self.values, factors, axes=1), self.amplitude
        observed = observed_from_instrument(value, ip, gain)
        changes = []
        for name, factor in zip(self.names, factors, strict=True):
            step = {"a_re": 1.0 + 0j, "a_im": 1j}.get(name, 0j)
            tilt = factor / gain - ip * step / gain**2
            changes.append(factor + step * value - observed * np.real(np.conj(tilt) * value))
        below = 1 + np.real(np.conj(ip / gain) * value)
        with np.errstate(invalid="ignore"):  # values that are not known stay so
            push = real_pair(np.moveaxis(np.array(changes) / below, 0, -1))  # (S, parameters, 2)
        forward = real_slopes(*observed_slopes(value, ip, gain))
        to_sky = real_slopes(*sky_slopes(where.chi, where.sense))
        back = to_sky @ np.linalg.inv(forward)
        return np.asarray(-np.einsum("...ij,...pj->...ip", back, push))


def describe(model: FilterModel) -> dict[str, Any]:
    """Return the headline numbers of a model: ip, efficiency, zero angle (deg) with errors."""
    names = [n for n in ("ip_q", "ip_u", "tel_q", "tel_u") if n in model.names]
    numbers: dict[str, Any] = {name: model.value(name) for name in names}
    numbers |= {"efficiency": model.efficiency, "zero_angle": model.zero_angle}
    numbers |= {f"{name}_err": model.error(name) for name in names}
    return numbers | {"efficiency_err": model.efficiency_err, "zero_angle_err": model.zero_angle_err}
