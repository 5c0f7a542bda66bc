"""Observations of made-up stars through a made-up instrument, by the measurement model written out again."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from hwpol.correction import Standard
from hwpol.stokes import Stokes


@dataclass
class Bench:
    """An instrument with a known truth; `rng` None measures without noise."""

    ip: complex = 0.0061 - 0.0034j
    tel: complex = 0.0
    efficiency: float = 0.985
    zero_angle: float = 3.7
    sense: int = 1
    rng: np.random.Generator | None = None

    @property
    def gain(self) -> complex:
        return self.efficiency * np.exp(2j * np.radians(self.zero_angle))

    def observe(self, p, theta, *, err=1e-4, chi=20.0, eta=None, ip=None, **labels):
        """Stokes in the instrument frame of a star of p (fraction), theta (deg)."""
        z = np.asarray(p) * np.exp(2j * np.radians(np.asarray(theta) - chi))
        z = z if self.sense > 0 else np.conj(z)
        offset = self.ip if ip is None else ip
        if eta is not None:
            offset = offset + self.tel * np.exp(2j * self.sense * np.radians(np.asarray(eta) - chi))
        seen = (offset + self.gain * z) / (1 + np.real(np.conj(offset / self.gain) * z))
        seen = np.asarray(seen)
        if self.rng is not None:
            seen = seen + err * (self.rng.normal(size=seen.shape) + 1j * self.rng.normal(size=seen.shape))
        return Stokes(
            q=seen.real, u=seen.imag, covariance=np.eye(2) * err**2, frame="instrument", position_angle=chi,
            parallactic=eta, sense=self.sense, **{"filter": "V", **labels},
        )  # fmt: skip

    def zero(self, name, *, true=0j, cat_err=3e-4, **how):
        """Return a zero standard; `true` its real polarisation, `cat_err` the catalogue's per component."""
        p, theta = abs(true), np.degrees(np.angle(true)) / 2
        return Standard(self.observe(p, theta, **how), 0.0, np.nan, cat_err * np.sqrt(2), np.nan, name)

    def pol(self, name, p, theta, *, cat_p=None, cat_theta=None, p_err=2e-4, theta_err=0.15, **how):
        """Return a polarised standard; `cat_p`, `cat_theta` what the catalogue says, if not the truth."""
        return Standard(
            self.observe(p, theta, **how), p if cat_p is None else cat_p,
            (theta if cat_theta is None else cat_theta) % 180, p_err, theta_err, name,
        )  # fmt: skip


@pytest.fixture(scope="session")
def bench():
    """Make benches."""
    return Bench
