"""Fluxes: counted electrons as arrays (source, frame, beam), whatever counted them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError
from hwpol.stokes import plain

Array = NDArray[np.float64]

_SOLVERS: list[Callable[..., Any]] = []


def register_solver(solver: Callable[..., Any]) -> None:
    """Make known what solves fluxes; `hwpol.demodulation` does so when it is loaded."""
    _SOLVERS[:] = [solver]


@dataclass(frozen=True, kw_only=True, eq=False)
class Fluxes:
    """Photometry of S sources in K frames and B beams, of one target field in one filter.

    Attributes
    ----------
    flux, variance : ndarray, shape (S, K, B)
        Electrons, sky removed, and electrons squared. NaN: not measured.
    wave_plate : ndarray, shape (K,)
        psi (deg), the plate's fast axis in the instrument frame; NaN where there is no plate.
    analyser : ndarray, shape (K, B)
        alpha (deg) in the instrument frame.
    retardance : ndarray, shape (K,)
        delta (deg).
    cycle : ndarray of int, shape (K,)
    position_angle, parallactic : ndarray, shape (K,)
        chi and eta (deg) at mid-exposure; eta NaN where unknown.
    sense : {1, -1}
    exposure : ndarray, shape (K,)
        Seconds; relative brightness of frames is known from it only for a single beam.
    throughput, throughput_err : ndarray, shape (B,)
        Known throughputs relative to the first beam; errors NaN where none is given.
    x, y : ndarray, shape (S,)
        Pixels in the first beam and first frame; NaN where unknown.
    mjd, airmass : ndarray, shape (K,)
    sky : ndarray or None, shape (S, K, B)
        Electrons per pixel.
    flags : ndarray of int, shape (S, K, B)
        Bits of `hwpol.Flag`.
    filter, target : str
    frames : tuple of str
        Name of each frame, for messages.
    """

    flux: Array
    variance: Array
    wave_plate: Array
    analyser: Array
    retardance: Array
    cycle: NDArray[np.int_]
    position_angle: Array
    parallactic: Array
    sense: int
    exposure: Array
    throughput: Array
    throughput_err: Array
    x: Array
    y: Array
    mjd: Array
    airmass: Array
    flags: NDArray[np.int_]
    sky: Array | None = None
    filter: str = ""
    target: str = ""
    frames: tuple[str, ...] = ()

    @property
    def shape(self) -> tuple[int, int, int]:
        """(sources, frames, beams)."""
        sources, frames, beams = self.flux.shape
        return sources, frames, beams

    @classmethod
    def from_arrays(
        cls,
        flux: ArrayLike,
        variance: ArrayLike,
        *,
        wave_plate: ArrayLike | None,
        analyser: ArrayLike,
        retardance: ArrayLike = 180.0,
        cycle: ArrayLike | None = None,
        position_angle: ArrayLike = 0.0,
        parallactic: ArrayLike | None = None,
        sense: int = 1,
        filter: str = "",
        x: ArrayLike | None = None,
        y: ArrayLike | None = None,
        mjd: ArrayLike | None = None,
        exposure: ArrayLike = 1.0,
        throughput: ArrayLike = 1.0,
        throughput_err: ArrayLike | None = None,
        airmass: ArrayLike | None = None,
        sky: ArrayLike | None = None,
        flags: ArrayLike = 0,
        target: str = "",
        frames: tuple[str, ...] = (),
    ) -> Fluxes:
        """Take photometry made elsewhere.

        Parameters
        ----------
        flux, variance : array_like, shape (source, frame, beam) or (frame, beam)
            Electrons and electrons squared. NaN marks what was not measured.
        wave_plate : array_like, shape (frame,), or None
            psi (deg); None for no plate.
        analyser : array_like, shape (beam,) or (frame, beam)
            alpha (deg).
        retardance : float or array_like, shape (frame,)
            delta (deg).
        cycle : array_like of int, shape (frame,), optional
            One cycle where not given.
        position_angle, parallactic : float or array_like, shape (frame,)
            chi and eta (deg).
        sense : {1, -1}
            -1 where the image is mirrored.
        x, y : array_like, shape (source,), optional
        mjd, exposure, airmass : array_like, shape (frame,), optional
        throughput, throughput_err : array_like, shape (beam,), optional

        Raises
        ------
        InputError
            When shapes do not fit, a variance is not positive or an angle is not finite.
        """
        counts, noise = np.asarray(plain(flux, "electron")), np.asarray(plain(variance, "electron2"))
        if counts.ndim == 2:
            counts, noise = counts[None], noise[None] if noise.ndim == 2 else noise
        if counts.ndim != 3:
            raise InputError(f"flux: shape {np.shape(flux)}, expected (source, frame, beam) or (frame, beam)")
        noise = _spread("variance", noise, counts.shape)
        if np.any(noise[np.isfinite(counts) & ~np.isnan(noise)] <= 0):
            raise InputError("variance: zero or negative values, expected electrons squared > 0")
        sources, number, beams = counts.shape
        if wave_plate is None:
            psi = np.full(number, np.nan)
        else:
            psi = _spread("wave_plate", plain(wave_plate, "deg"), (number,))
            if not np.all(np.isfinite(psi)):
                raise InputError("wave_plate: not a finite angle in every frame; leave such frames out")
        alpha = plain(analyser, "deg")
        if alpha.ndim < 2:
            alpha = np.broadcast_to(alpha, (beams,)) if alpha.size in {1, beams} else alpha
        alpha = _spread("analyser", alpha, (number, beams))
        if not np.all(np.isfinite(alpha)):
            raise InputError("analyser: not a finite angle in every beam")
        if sense not in {1, -1}:
            raise InputError(f"sense = {sense!r}: expected 1 or -1")
        times = np.full(number, np.nan) if mjd is None else plain(mjd, "d")
        return cls(
            flux=counts,
            variance=noise,
            wave_plate=psi,
            analyser=alpha,
            retardance=_spread("retardance", plain(retardance, "deg"), (number,)),
            cycle=np.ones(number, dtype=int)
            if cycle is None
            else _spread("cycle", np.asarray(cycle), (number,)).astype(int),
            position_angle=_spread("position_angle", plain(position_angle, "deg"), (number,)),
            parallactic=np.full(number, np.nan)
            if parallactic is None
            else _spread("parallactic", plain(parallactic, "deg"), (number,)),
            sense=int(sense),
            exposure=_spread("exposure", plain(exposure, "s"), (number,)),
            throughput=_spread("throughput", plain(throughput), (beams,)),
            throughput_err=np.full(beams, np.nan)
            if throughput_err is None
            else _spread("throughput_err", plain(throughput_err), (beams,)),
            x=np.full(sources, np.nan) if x is None else _spread("x", plain(x, "pix"), (sources,)),
            y=np.full(sources, np.nan) if y is None else _spread("y", plain(y, "pix"), (sources,)),
            mjd=_spread("mjd", times, (number,)),
            airmass=np.full(number, np.nan) if airmass is None else _spread("airmass", plain(airmass), (number,)),
            flags=_spread("flags", np.asarray(flags), counts.shape).astype(int),
            sky=None if sky is None else _spread("sky", plain(sky), counts.shape),
            filter=filter,
            target=target,
            frames=tuple(frames) or tuple(f"frame {k + 1}" for k in range(number)),
        )

    def demodulated(self, calibration: Any = None) -> Any:
        """Solve by least squares: what `hwpol.demodulate` does, for those who must not import it.

        Raises
        ------
        InputError
            Before `hwpol.demodulation` was loaded.
        """
        if not _SOLVERS:
            raise InputError("these fluxes are not demodulated yet; call hwpol.demodulate on them first")
        return _SOLVERS[-1](self, calibration=calibration)

    def take_frames(self, index: Any) -> Fluxes:
        """Return only some frames (a mask or indices along the frame axis)."""
        chosen = np.arange(self.shape[1])[index]
        changes: dict[str, Any] = {
            name: getattr(self, name)[chosen]
            for name in (
                "wave_plate",
                "analyser",
                "retardance",
                "cycle",
                "position_angle",
                "parallactic",
                "exposure",
                "mjd",
                "airmass",
            )
        }
        for name in ("flux", "variance", "flags", "sky"):
            value = getattr(self, name)
            changes[name] = None if value is None else value[:, chosen]
        return replace(self, frames=tuple(self.frames[k] for k in chosen), **changes)

    def take_sources(self, index: Any) -> Fluxes:
        """Return only some sources (a mask, a slice or indices along the source axis)."""
        chosen = np.atleast_1d(np.arange(self.shape[0])[index])
        changes: dict[str, Any] = {
            name: None if getattr(self, name) is None else getattr(self, name)[chosen]
            for name in ("flux", "variance", "flags", "sky", "x", "y")
        }
        return replace(self, **changes)


def _spread(name: str, value: NDArray[Any], shape: tuple[int, ...]) -> NDArray[Any]:
    try:
        return np.broadcast_to(value, shape).copy()
    except ValueError:
        raise InputError(f"{name}: shape {np.shape(value)}, expected {shape}") from None
