"""Stokes parameters with their covariance, and the only home of signs, angles and rotations.

z = q + i u throughout. On the sky z has its angle from north through east
(IAU 1973: Q > 0 north-south, U > 0 north-east/south-west); in the instrument
frame from the instrument's +Q axis. All angles in degrees.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

#: Spread (deg) of position angle or parallactic angle within one value above which `Calibration.apply` flags it.
ROTATION_LIMIT = 1.0


def turn(angle: ArrayLike) -> Complex:
    """Return exp(2 i angle): multiplying z by it adds `angle` (deg) to the position angle."""
    return np.asarray(np.exp(2j * np.radians(np.asarray(angle, dtype=float))))


def sky_from_instrument(z: ArrayLike, chi: ArrayLike, sense: int) -> Complex:
    """Bring z from the instrument frame to the sky: exp(2 i chi) z, or exp(2 i chi) conj(z) for sense -1 (mirrored)."""
    value = np.asarray(z, dtype=complex)
    return np.asarray(turn(chi) * (value if sense > 0 else np.conj(value)))


def instrument_from_sky(z: ArrayLike, chi: ArrayLike, sense: int) -> Complex:
    """Bring z from the sky to the instrument frame; the inverse of `sky_from_instrument`."""
    value = np.asarray(z, dtype=complex) * np.conj(turn(chi))
    return np.asarray(value if sense > 0 else np.conj(value))


def telescope_to_instrument(ip_tel: ArrayLike, chi: ArrayLike, eta: ArrayLike, sense: int) -> Complex:
    """Polarisation fixed to the telescope as seen in the instrument frame: ip_tel exp(2 i sense (eta - chi))."""
    difference = np.asarray(eta, dtype=float) - np.asarray(chi, dtype=float)
    return np.asarray(np.asarray(ip_tel, dtype=complex) * turn(sense * difference))


def observed_from_instrument(z: ArrayLike, ip: ArrayLike, amplitude: ArrayLike) -> Complex:
    """Observed z for a true z in the instrument frame: (ip + A z) / (1 + Re[conj(ip / A) z]).

    `ip` is what an unpolarised star shows, `amplitude` A = efficiency x exp(2 i zero_angle). The denominator is
    the second order of a weak diattenuator in front of the plate.
    """
    value, offset, gain = (np.asarray(a, dtype=complex) for a in (z, ip, amplitude))
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        return np.asarray((offset + gain * value) / (1 + np.real(np.conj(offset / gain) * value)))


def observed_slopes(z: ArrayLike, ip: ArrayLike, amplitude: ArrayLike) -> tuple[Complex, Complex]:
    """Slopes (a, b) of `observed_from_instrument`: d z_observed = a dz + b conj(dz)."""
    value, offset, gain = (np.asarray(a, dtype=complex) for a in (z, ip, amplitude))
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        tilt = offset / gain
        below = 1 + np.real(np.conj(tilt) * value)
        observed = (offset + gain * value) / below
        return np.asarray((gain - observed * np.conj(tilt) / 2) / below), np.asarray(-observed * tilt / (2 * below))


def instrument_from_observed(z: ArrayLike, ip: ArrayLike, amplitude: ArrayLike) -> Complex:
    """True z in the instrument frame from the observed one; the exact inverse of `observed_from_instrument`."""
    value, offset, gain = (np.asarray(a, dtype=complex) for a in (z, ip, amplitude))
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        tilt = np.conj(offset / gain)
        share = np.real(tilt * (value - offset) / gain) / (1 - np.real(tilt * value / gain))
        return np.asarray((value - offset + value * share) / gain)


def real_slopes(a: ArrayLike, b: ArrayLike) -> Array:
    """Real 2 x 2 Jacobian, shape (..., 2, 2), of  dz' = a dz + b conj(dz)  in (q, u)."""
    plus = np.asarray(a, dtype=complex) + np.asarray(b, dtype=complex)
    minus = np.asarray(a, dtype=complex) - np.asarray(b, dtype=complex)
    return np.stack([np.stack([plus.real, -minus.imag], axis=-1), np.stack([plus.imag, minus.real], axis=-1)], axis=-2)


def sky_slopes(chi: ArrayLike, sense: int) -> tuple[Complex, Complex]:
    """Slopes (a, b) of `sky_from_instrument`: dz_sky = a dz + b conj(dz)."""
    factor = turn(chi)
    return (factor, np.zeros_like(factor)) if sense > 0 else (np.zeros_like(factor), factor)


def position_angle(z: ArrayLike) -> Array:
    """Position angle (deg) of z in [0, 180); NaN for z = 0."""
    value = np.asarray(z, dtype=complex)
    angle = np.mod(np.degrees(np.angle(value)) / 2, 180.0)
    return np.where(np.abs(value) > 0, np.where(angle >= 180.0, 0.0, angle), np.nan)


def angle_difference(first: ArrayLike, second: ArrayLike) -> Array:
    """Difference (deg) of two position angles, first - second, in [-90, 90)."""
    return np.mod(np.asarray(first, dtype=float) - np.asarray(second, dtype=float) + 90.0, 180.0) - 90.0


def mean_angle(angles: ArrayLike, period: float = 360.0) -> tuple[float, float]:
    """Mean and full spread (deg) of angles that wrap with `period`; NaN values are left out."""
    values = np.asarray(angles, dtype=float)
    values = values[np.isfinite(values)]
    if values.size == 0:
        return float("nan"), float("nan")
    centre = np.angle(np.mean(np.exp(2j * np.pi * values / period))) * period / (2 * np.pi)
    offset = np.mod(values - centre + period / 2, period) - period / 2
    return float(centre + np.mean(offset)), float(np.ptp(offset))


def plain(value: Any, unit: str = "") -> Any:
    """Return a float array from an array or a Quantity (converted to `unit`)."""
    if hasattr(value, "to_value"):
        value = value.to_value(unit)
    return np.asarray(value, dtype=float)


@dataclass(frozen=True, kw_only=True, eq=False)
class Stokes:
    """Normalised Stokes parameters with covariance: arrays of one shape over sources (or source, cycle).

    Parameters
    ----------
    q, u : array_like, shape S
        Q/I and U/I, fractions.
    covariance : array_like, shape S + (2, 2), or S + (3, 3) with v
        Random covariance of (q, u) or (q, u, v).
    i : array_like, optional
        Intensity (electrons, all beams), shape S.
    v : array_like, optional
        V/I, shape S.
    frame : {"sky", "instrument"}
        Frame of q and u.
    position_angle : array_like
        chi (deg): position angle on the sky of the instrument's +Q axis, mean over the frames used.
    parallactic : array_like, optional
        eta (deg), mean over the frames used.
    sense : {1, -1}
        -1 where the image is mirrored.
    filter : str
    x, y : array_like, optional
        Detector position (pixels), shape of the sources.
    mjd : array_like, optional
    calibration_covariance : array_like, optional, shape S + (2, 2)
        Part of the error that comes from the calibration and is shared by all values of a filter.
    spread, turn : array_like
        Full spread (deg) of chi, and of eta - chi, over the frames behind a value.
    flags : array_like of int
        Bits of `hwpol.Flag`.
    name : str
        Target.

    Raises
    ------
    InputError
        When shapes do not fit, the frame is unknown or the covariance is missing.
    """

    q: Array
    u: Array
    covariance: Array
    i: Array | None = None
    v: Array | None = None
    frame: str = "sky"
    position_angle: Any = 0.0
    parallactic: Any = None
    sense: int = 1
    filter: str = ""
    x: Any = None
    y: Any = None
    mjd: Any = None
    calibration_covariance: Array | None = None
    spread: Any = 0.0
    turn: Any = 0.0
    flags: Any = 0
    name: str = ""
    chi2: Any = None
    dof: Any = None

    def __post_init__(self) -> None:
        q, u = plain(self.q), plain(self.u)
        if q.shape != u.shape:
            raise InputError(f"Stokes: q has shape {q.shape} and u {u.shape}, expected the same")
        if self.covariance is None:
            raise InputError("Stokes: covariance is missing; expected an array of shape q.shape + (2, 2)")
        covariance = plain(self.covariance)
        size = 2 if self.v is None else 3
        if covariance.shape[-2:] not in {(2, 2), (size, size)}:
            raise InputError(f"Stokes: covariance has shape {covariance.shape}, expected {(*q.shape, size, size)}")
        try:
            covariance = np.broadcast_to(covariance, q.shape + covariance.shape[-2:]).copy()
        except ValueError:
            raise InputError(
                f"Stokes: covariance has shape {covariance.shape}, expected {(*q.shape, size, size)}"
            ) from None
        if self.frame not in {"sky", "instrument"}:
            raise InputError(f"Stokes: frame = {self.frame!r}, expected 'sky' or 'instrument'")
        if self.sense not in {1, -1}:
            raise InputError(f"Stokes: sense = {self.sense!r}, expected 1 or -1")
        values: dict[str, Any] = {"q": q, "u": u, "covariance": covariance, "sense": int(self.sense)}
        for name, unit in (("i", ""), ("v", ""), ("x", "pix"), ("y", "pix"), ("mjd", "d"), ("chi2", "")):
            value = getattr(self, name)
            if value is not None:
                values[name] = plain(value, unit)
        values["position_angle"] = plain(self.position_angle, "deg")
        if self.parallactic is not None:
            values["parallactic"] = plain(self.parallactic, "deg")
        if self.calibration_covariance is not None:
            values["calibration_covariance"] = np.broadcast_to(
                plain(self.calibration_covariance), (*q.shape, 2, 2)
            ).copy()
        values["flags"] = np.broadcast_to(np.asarray(self.flags, dtype=int), q.shape).copy()
        values["spread"], values["turn"] = plain(self.spread, "deg"), plain(self.turn, "deg")
        for name, value in values.items():
            object.__setattr__(self, name, value)

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of q."""
        return self.q.shape

    @property
    def z(self) -> Complex:
        """q + i u."""
        return np.asarray(self.q + 1j * self.u)

    @property
    def random_covariance(self) -> Array:
        """Random covariance of (q, u), shape S + (2, 2)."""
        return self.covariance[..., :2, :2]

    @property
    def total_covariance(self) -> Array:
        """Random and calibration covariance of (q, u) together, shape S + (2, 2)."""
        if self.calibration_covariance is None:
            return self.random_covariance
        return np.asarray(self.random_covariance + self.calibration_covariance)

    @property
    def q_err(self) -> Array:
        """Random error of q."""
        return np.sqrt(self.covariance[..., 0, 0])

    @property
    def u_err(self) -> Array:
        """Random error of u."""
        return np.sqrt(self.covariance[..., 1, 1])

    @property
    def v_err(self) -> Array | None:
        """Random error of v; None without v."""
        return None if self.v is None or self.covariance.shape[-1] < 3 else np.sqrt(self.covariance[..., 2, 2])

    @property
    def p(self) -> Array:
        """Degree of linear polarisation sqrt(q^2 + u^2), not de-biased."""
        return np.hypot(self.q, self.u)

    @property
    def p_err(self) -> Array:
        """Error of p along the direction of polarisation, random and calibration together."""
        from hwpol.statistics import p_and_error

        return np.asarray(p_and_error(self.q, self.u, self.total_covariance)[1])

    @property
    def theta(self) -> Array:
        """Position angle (deg) in [0, 180); NaN where p = 0."""
        return position_angle(self.z)

    @property
    def theta_err(self) -> Array:
        """Standard deviation (deg) of the exact angle distribution at the de-biased p; 51.96 at p = 0."""
        from hwpol.statistics import theta_error

        return np.asarray(theta_error(self.q, self.u, self.total_covariance))

    def debiased(self, method: str = "modified-asymptotic") -> Array:
        """p with its noise bias removed; see `hwpol.statistics.debias` for the methods."""
        from hwpol.statistics import debias

        return np.asarray(debias(self.q, self.u, self.total_covariance, method=method))

    def interval(self, level: float = 0.6827, kind: str = "bayes") -> tuple[Array, Array]:
        """Interval (low, high) of the true p at a level; kinds "bayes", "bayes-qu", "frequentist"."""
        from hwpol.statistics import interval

        return interval(self.q, self.u, self.total_covariance, level=level, kind=kind)

    def upper_limit(self, level: float = 0.95) -> Array:
        """One-sided upper limit of the true p, flat in p."""
        from hwpol.statistics import upper_limit

        return np.asarray(upper_limit(self.q, self.u, self.total_covariance, level=level))

    def theta_interval(self, level: float = 0.6827) -> tuple[Array, Array]:
        """Interval (low, high) of theta (deg) at a level; the full range where the angle is undetermined."""
        from hwpol.statistics import theta_interval

        return theta_interval(self.q, self.u, self.total_covariance, level=level)

    def ellipse(self) -> tuple[Array, Array, Array]:
        """Semi-axes and direction (deg, in the q-u plane, from +q towards +u) of the 1 sigma error ellipse."""
        from hwpol.statistics import ellipse

        return ellipse(self.q, self.u, self.total_covariance)

    def rotated(self, angle: ArrayLike) -> Stokes:
        """Return the same light with `angle` (deg) added to theta; v is untouched."""
        added = plain(angle, "deg")
        factor = np.broadcast_to(turn(added), self.shape) if np.ndim(added) <= self.q.ndim else turn(added)
        z = self.z * factor
        slopes = real_slopes(factor, np.zeros_like(factor))
        return replace(
            self,
            q=z.real,
            u=z.imag,
            covariance=carry(self.covariance, slopes),
            calibration_covariance=None
            if self.calibration_covariance is None
            else carry(self.calibration_covariance, slopes),
        )

    def __getitem__(self, index: Any) -> Stokes:
        """Select along the leading axes of q and u."""
        changes: dict[str, Any] = {}
        for name in ("q", "u", "covariance", "i", "v", "calibration_covariance", "flags", "chi2", "dof"):
            value = getattr(self, name)
            changes[name] = value if value is None or np.ndim(value) == 0 else value[index]
        for name in ("x", "y", "mjd", "position_angle", "parallactic", "spread", "turn"):
            value = getattr(self, name)
            if value is not None and np.shape(value)[:1] == self.shape[:1] and self.shape:
                if np.shape(value) == self.shape:
                    value = value[index]
                else:
                    value = value[index[0] if isinstance(index, tuple) else index]
            changes[name] = value
        return replace(self, **changes)

    def to_table(self) -> Any:
        """Return a QTable, a row per value: q, u, errors, covariance, p, theta and what is known beside them."""
        from hwpol.stokes_table import stokes_table

        return stokes_table(self)

    @staticmethod
    def combine(values: Iterable[Stokes]) -> Stokes:
        """Combine measurements of the same light, one Stokes each, in q and u (never in p).

        The mean is weighted with the inverse random covariances and robust (`hwpol.statistics.combine`); its
        covariance is the larger of what counts and scatter of repeats tell. The calibration part, shared by
        all, is averaged and not reduced.

        Raises
        ------
        InputError
            When nothing is given, or frames or filters differ.
        """
        from hwpol.statistics import adopt, combine

        items = list(values)
        if not items:
            raise InputError("Stokes.combine: nothing to combine, expected at least one Stokes")
        first = items[0]
        for item in items[1:]:
            if item.frame != first.frame or item.filter != first.filter:
                raise InputError(
                    f"Stokes.combine: frame {item.frame!r}, filter {item.filter!r} beside {first.frame!r}, "
                    f"{first.filter!r}; expected the same"
                )
            if item.shape != first.shape:
                raise InputError(f"Stokes.combine: shape {item.shape} beside {first.shape}; expected the same")
        result = combine(
            np.stack([s.q for s in items], axis=-1),
            np.stack([s.u for s in items], axis=-1),
            np.stack([s.random_covariance for s in items], axis=-3),
        )
        shared = [s.calibration_covariance for s in items if s.calibration_covariance is not None]
        flags = np.bitwise_or.reduce([s.flags for s in items])
        times = [s.mjd for s in items if s.mjd is not None]
        intensities = [s.i for s in items if s.i is not None]
        return replace(
            first,
            q=result.q,
            u=result.u,
            covariance=adopt(result.covariance, result.scatter_covariance, result.chi2, result.dof)[0],
            i=np.sum(intensities, axis=0) if len(intensities) == len(items) else None,
            v=None,
            mjd=np.mean(times, axis=0) if times else None,
            calibration_covariance=np.mean(shared, axis=0) if shared else None,
            flags=flags,
            chi2=result.chi2,
            dof=result.dof,
        )


def carry(covariance: ArrayLike, slopes: ArrayLike) -> Array:
    """Carry a covariance (..., 2, 2) or (..., 3, 3) through a Jacobian of (q, u), shape (..., 2, 2); v stays."""
    matrix = np.asarray(covariance, dtype=float)
    jacobian = np.asarray(slopes, dtype=float)
    if matrix.shape[-1] == 3:
        full = np.zeros((*jacobian.shape[:-2], 3, 3))
        full[..., :2, :2] = jacobian
        full[..., 2, 2] = 1.0
        jacobian = full
    return np.asarray(jacobian @ matrix @ np.swapaxes(jacobian, -1, -2))
