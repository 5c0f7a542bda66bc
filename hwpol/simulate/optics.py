"""The optical train: what every beam makes of light from the sky, by Mueller matrices alone.

The chain of one beam, light entering on the right::

    Analyser(alpha_b) . Plate(delta, psi) . Depolariser(efficiency) . Turned(zero_angle) . WeakDiattenuator(d)
        . [Mirror if sense = -1] . Turned(-chi) . S_sky

with d = ip / A, A = efficiency exp(2 i zero_angle), so that unpolarised light
is observed with exactly ``ip`` and any other with
(ip + A z) / (1 + Re[conj(ip / A) z]). The plate is a retarder and, where asked
for, a diattenuator along the same axes.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError
from hwpol.simulate import mueller


@dataclass(frozen=True)
class Train:
    """The constants of the optical train in one filter.

    Attributes
    ----------
    analyser : tuple of float
        Angle of each beam's analyser, instrument frame (deg).
    throughput : tuple of float
        Throughput of each beam relative to the first.
    retardance : float
        Of the plate (deg).
    plate_diattenuation : float
        Of the plate, along its fast axis; seen as a 2 psi term.
    ip, ip_tel : complex
        Instrumental polarisation q + i u as observed on an unpolarised star:
        the part fixed in the instrument, and the part turning with the
        telescope, ip_tel exp(2 i sense (eta - chi)).
    ip_field : mapping of str to complex
        Coefficients of the field-dependent part: names are products of "x"
        and "y" ("x", "y", "xx", "xy", "yy", ...), x and y scaled to [-1, 1]
        over the detector.
    efficiency, zero_angle : float
        Modulus and half the argument (deg) of A.
    sense : int
        +1 where instrument angles grow as sky angles do, -1 where mirrored.
    """

    analyser: tuple[float, ...] = (0.0, 90.0)
    throughput: tuple[float, ...] = (1.0, 1.0)
    retardance: float = 180.0
    plate_diattenuation: float = 0.0
    ip: complex = 0j
    ip_tel: complex = 0j
    ip_field: Mapping[str, complex] = field(default_factory=dict)
    efficiency: float = 1.0
    zero_angle: float = 0.0
    sense: int = 1

    def __post_init__(self) -> None:
        if len(self.analyser) != len(self.throughput):
            raise InputError(f"throughput: {len(self.throughput)} values for {len(self.analyser)} beams")
        if not 0 < self.efficiency <= 1:
            raise InputError(f"efficiency = {self.efficiency}: expected 0 < efficiency <= 1")
        if self.sense not in (1, -1):
            raise InputError(f"sense = {self.sense}: expected 1 or -1")

    def ip_at(self, chi: ArrayLike, eta: ArrayLike, x: ArrayLike = 0.0, y: ArrayLike = 0.0) -> NDArray[np.complex128]:
        """Instrumental polarisation as observed, in the instrument frame; arguments broadcast (deg; scaled x, y)."""
        turn = np.deg2rad(2.0 * self.sense * (np.asarray(eta, dtype=float) - np.asarray(chi, dtype=float)))
        x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
        total = self.ip + self.ip_tel * np.exp(1j * turn) + np.zeros(np.broadcast(x, y).shape, dtype=complex)
        for name, coefficient in self.ip_field.items():
            total = total + coefficient * x ** name.count("x") * y ** name.count("y")
        return total

    def rows(
        self, psi: ArrayLike, chi: ArrayLike = 0.0, eta: ArrayLike = 0.0, x: ArrayLike = 0.0, y: ArrayLike = 0.0
    ) -> NDArray[np.float64]:
        """First rows of the whole chain, twice: the beam's signal per Stokes parameter on the sky.

        Parameters
        ----------
        psi, chi, eta : array_like, deg
            Plate angle (NaN where no plate is in the beam), position angle of
            the instrument's +Q axis, parallactic angle; they broadcast with x, y.
        x, y : array_like
            Position scaled to [-1, 1] over the detector.

        Returns
        -------
        ndarray, shape (..., beam, 4)
            f = T g / 2 x (row . (I, Q, U, V)_sky), throughput g left out.
        """
        ip = self.ip_at(chi, eta, x, y)
        before = ip / (self.efficiency * np.exp(2j * np.deg2rad(self.zero_angle)))
        chain = mueller.turned(-np.asarray(chi, dtype=float))
        if self.sense < 0:
            chain = mueller.mirror() @ chain
        chain = mueller.weak_diattenuator(before.real, before.imag) @ chain
        chain = mueller.depolariser(self.efficiency) @ mueller.turned(self.zero_angle) @ chain
        psi = np.asarray(psi, dtype=float)
        without = np.isnan(psi)
        angle = np.where(without, 0.0, psi)
        plate = mueller.diattenuator(self.plate_diattenuation, angle) @ mueller.retarder(self.retardance, angle)
        chain = np.where(without[..., None, None], np.eye(4), plate) @ chain
        beams = mueller.analyser(np.asarray(self.analyser, dtype=float))
        return 2.0 * (beams @ chain[..., None, :, :])[..., 0, :]


def simulate_fluxes(
    stokes: ArrayLike,
    train: Train,
    psi: ArrayLike,
    *,
    chi: ArrayLike = 0.0,
    eta: ArrayLike = 0.0,
    x: ArrayLike = 0.0,
    y: ArrayLike = 0.0,
    exposure: ArrayLike = 1.0,
    rng: np.random.Generator | None = None,
) -> NDArray[np.float64]:
    """Electrons of every source in every frame and beam, sky removed, no pixels involved.

    f = 1/2 T g_b (row_b . S_sky), the rows those of `Train.rows`.

    Parameters
    ----------
    stokes : array_like, shape (4,) or (source, 4) or (source, frame, 4)
        I, Q, U, V on the sky; I in electrons per unit of `exposure`.
    train : Train
        The optical train.
    psi, chi, eta : array_like, shape (frame,) or scalar, deg
        Plate angle, position angle of +Q, parallactic angle.
    x, y : array_like, shape (source, 1) or (source, frame)
        Positions scaled to [-1, 1]; matter for a field-dependent ip alone.
    exposure : array_like, shape (frame,) or scalar
        T_k, exposure times transparency.
    rng : Generator, optional
        Draw Poisson counts; without it the expected values come back.

    Returns
    -------
    ndarray, shape (source, frame, beam)
        Electrons.
    """
    light = np.asarray(stokes, dtype=float)
    if light.shape[-1:] != (4,) or light.ndim > 3:
        raise InputError(f"stokes of shape {light.shape}: expected (4,), (source, 4) or (source, frame, 4)")
    light = light[(None,) * (2 - light.ndim)] if light.ndim < 2 else light
    light = light[:, None, :] if light.ndim == 2 else light
    frames = np.broadcast_shapes(*(np.shape(np.atleast_1d(v)) for v in (psi, chi, eta, exposure)))
    psi, chi, eta, exposure = (np.broadcast_to(np.asarray(v, dtype=float), frames) for v in (psi, chi, eta, exposure))
    rows = train.rows(psi, chi, eta, x, y)
    signal = np.einsum("...bi,...i->...b", rows, light)
    fluxes = 0.5 * exposure[:, None] * np.asarray(train.throughput, dtype=float) * signal
    if rng is None:
        return np.asarray(fluxes, dtype=float)
    return rng.poisson(fluxes).astype(float)
