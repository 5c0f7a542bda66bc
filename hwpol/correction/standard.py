"""A standard as the fit takes it: what was measured, and what the catalogue says."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from hwpol.correction.catalogue import Entry
from hwpol.errors import InputError
from hwpol.stokes import Stokes

#: ``solver(fluxes, calibration or None) -> Stokes``: on the sky with a calibration, in the instrument frame without.
Solver = Callable[[Any, Any], Stokes]


@dataclass(frozen=True)
class Standard:
    """One standard star, measured.

    Parameters
    ----------
    measured : Stokes or Fluxes
        Observed values, instrument frame, of one filter. Values along the first axis of an array are different
        stars with the same catalogue value (a field of unpolarised stars, say); further axes are repeats.
    p, theta : float
        Catalogue values, fraction and deg. A star with p = 0 or theta NaN is a zero-polarisation standard: z = 0 with
        error sqrt(p^2 + p_err^2) / sqrt(2) per component.
    p_err, theta_err : float
        Their errors; theta_err does not matter for a zero-polarisation standard.
    name : str
        Standards of one name share the error of their catalogue value.
    star : str
        Its catalogue name, which takes the place of `name` in this where it is given.
    visit : int
        Number of the visit, for the table.
    provenance, reference : str
        Of the catalogue value; "memory" is flagged in everything calibrated with it.
    """

    measured: Any
    p: float
    theta: float
    p_err: float
    theta_err: float
    name: str = ""
    visit: int = -1
    provenance: str = ""
    reference: str = ""
    star: str = ""

    def __post_init__(self) -> None:
        place = f"standard {self.name or '(unnamed)'}"
        for key in ("p", "theta", "p_err", "theta_err"):
            value = getattr(self, key)
            if hasattr(value, "to_value"):
                value = value.to_value("" if key in {"p", "p_err"} else "deg")
            object.__setattr__(self, key, float(value))
        if not 0 <= self.p < 1:
            raise InputError(f"{place}: p = {self.p:g}, expected a fraction of 0 to 1 (not percent)")
        if not (np.isfinite(self.p_err) and self.p_err >= 0):
            raise InputError(f"{place}: p_err = {self.p_err:g}, expected a fraction >= 0; a standard needs its error")
        if not self.is_zero and not (np.isfinite(self.theta_err) and self.theta_err >= 0):
            raise InputError(f"{place}: theta_err = {self.theta_err:g}, expected deg >= 0; a standard needs its error")

    @staticmethod
    def from_entry(measured: Any, entry: Entry, *, name: str = "", visit: int = -1) -> Standard:
        """Standard with the catalogue's value; `name` (as in the header) defaults to the catalogue's."""
        return Standard(
            measured, entry.p, entry.theta, entry.p_err, entry.theta_err, name or entry.name, visit,
            entry.provenance, entry.reference, entry.name,
        )  # fmt: skip

    @property
    def is_zero(self) -> bool:
        """Whether it is a zero-polarisation standard."""
        return self.p == 0 or not np.isfinite(self.theta)

    @property
    def role(self) -> str:
        """ "zero-polarised" or "polarised"."""
        return "zero-polarised" if self.is_zero else "polarised"

    @property
    def z(self) -> complex:
        """Catalogue value on the sky, q + i u; 0 for a zero-polarisation standard."""
        return 0j if self.is_zero else complex(self.p * np.exp(2j * np.radians(self.theta)))

    @property
    def z_covariance(self) -> np.ndarray[Any, np.dtype[np.float64]]:
        """Covariance (2, 2) of the catalogue's q, u on the sky."""
        if self.is_zero:
            return np.eye(2) * (self.p**2 + self.p_err**2) / 2
        cos, sin = np.cos(2 * np.radians(self.theta)), np.sin(2 * np.radians(self.theta))
        turn = np.array([[cos, -sin], [sin, cos]])
        across = 2 * self.p * np.radians(self.theta_err)
        return np.asarray(turn @ np.diag([self.p_err**2, across**2]) @ turn.T)
