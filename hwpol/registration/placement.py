"""The result of registration: where any place of the first frame falls in every frame and beam."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.registration.beams import BeamMap
from hwpol.registration.detection import Stars

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Wobble:
    """Circle that the images describe as the wave plate turns: displacement r (cos, sin)(sense psi + phase).

    Attributes
    ----------
    radius, radius_err : float
        Pixels.
    phase : float
        Direction of the displacement at psi = 0, degrees from +x towards +y.
    sense : int
        +1 where the displacement turns from +x to +y with psi.
    rms : float
        Of the shifts about drift and circle, per axis, pixels.
    significant : bool
        Radius above four times its error.
    """

    radius: float
    radius_err: float
    phase: float
    sense: int
    rms: float
    significant: bool


@dataclass(frozen=True)
class Placement:
    """Where sources fall: K frames, B beams.

    A place (x, y) of the first frame and beam falls at  map_b(pivot + R(rotation_k) ((x, y) - pivot) + shift_k) +
    beam_shift_kb, R turning +x towards +y.

    Attributes
    ----------
    stars : Stars
        Stars of the reference frame, first beam, that have their partner in every beam; x, y are their mean places
        over the visit, reduced to the first frame.
    shift, shift_err : ndarray, shape (K, 2) and (K,)
        Pixels; the error is per axis, NaN where the shift was not measured.
    rotation : ndarray, shape (K,)
        Degrees.
    pivot : tuple
        Pixels.
    matched : ndarray of int, shape (K,)
        Star images (all beams) behind each frame's shift.
    fwhm, ellipticity : ndarray, shape (K, B)
        Medians over the stars; NaN where none was measured.
    beam_map : tuple of BeamMap
        From the first beam to each.
    beam_shift : ndarray, shape (K, B, 2)
        What a beam moves by on its own, pixels; zero where not significant.
    wobble : Wobble or None
        Fitted where wave-plate angles were given and frames suffice.
    ok : ndarray of bool, shape (K,)
        False: the shift was interpolated from the neighbours.
    target : tuple or None
        Place of the target in the first frame and beam.
    target_index : int
        Its place in `stars`; -1 where it is not one of them.
    guessed : bool
        The target is the brightest star for want of a hint.
    notes : tuple of str
        What was doubtful, in words.
    """

    stars: Stars
    shift: Floats
    shift_err: Floats
    rotation: Floats
    pivot: tuple[float, float]
    matched: NDArray[np.int64]
    fwhm: Floats
    ellipticity: Floats
    beam_map: tuple[BeamMap, ...]
    beam_shift: Floats
    wobble: Wobble | None
    ok: NDArray[np.bool_]
    target: tuple[float, float] | None
    target_index: int
    guessed: bool
    notes: tuple[str, ...]

    def positions(self, x: ArrayLike, y: ArrayLike) -> tuple[Floats, Floats]:
        """Places of sources in every frame and beam.

        Parameters
        ----------
        x, y : array_like, shape (S,)
            Raw pixels of the first frame, first beam.

        Returns
        -------
        x, y : ndarray, shape (S, K, B)
            Raw pixels of each beam's array.
        """
        xs, ys = np.atleast_1d(np.asarray(x, dtype=float)), np.atleast_1d(np.asarray(y, dtype=float))
        moved = move(xs, ys, self.shift, self.rotation, self.pivot)
        mapped = [m.apply(*moved) for m in self.beam_map]
        return (
            np.stack([m[0].T for m in mapped], axis=-1) + self.beam_shift[None, :, :, 0],
            np.stack([m[1].T for m in mapped], axis=-1) + self.beam_shift[None, :, :, 1],
        )


def move(x: Floats, y: Floats, shift: Floats, rotation: Floats, pivot: tuple[float, float]) -> tuple[Floats, Floats]:
    """Places (K, S) of points (S,) after each frame's rotation (K,) about the pivot and shift (K, 2)."""
    c, s = np.cos(np.radians(rotation))[:, None], np.sin(np.radians(rotation))[:, None]
    dx, dy = (x - pivot[0])[None, :], (y - pivot[1])[None, :]
    return pivot[0] + c * dx - s * dy + shift[:, :1], pivot[1] + s * dx + c * dy + shift[:, 1:]


def fit_wobble(shift: Floats, error: Floats, psi: ArrayLike, times: Floats) -> Wobble | None:
    """Fit drift and wobble circle to frame shifts.

    The shift as a complex number is a polynomial of time (linear; quadratic from ten frames on) plus
    r exp(i(phase + sense psi)); the sense that fits better is taken. A wedge in the plate deviates the beam by a
    fixed angle whose direction turns with the plate, hence once per turn of psi (common practice).

    Parameters
    ----------
    shift : ndarray, shape (K, 2)
        Pixels; rows with a NaN error are left out.
    error : ndarray, shape (K,)
        Per axis, pixels.
    psi : array_like, shape (K,)
        Degrees.
    times : ndarray, shape (K,)
        Any unit.

    Returns
    -------
    Wobble or None
        None where frames or angles do not separate a circle from drift.
    """
    angle = np.radians(np.asarray(psi, dtype=float))
    use = np.isfinite(error) & np.isfinite(angle)
    degree = 2 if use.sum() >= 10 else 1
    if use.sum() < degree + 3:
        return None
    z = shift[use, 0] + 1j * shift[use, 1]
    t = times[use] - times[use].mean()
    t = t / max(float(np.abs(t).max()), 1e-12)
    weight = 1.0 / np.maximum(error[use], 1e-3)
    best: Wobble | None = None
    for sense in (1, -1):
        design = np.column_stack([*(t**j for j in range(degree + 1)), np.exp(1j * sense * angle[use])])
        scaled = design * weight[:, None]
        gram = scaled.conj().T @ scaled
        if np.linalg.cond(gram / np.sqrt(np.outer(np.diag(gram).real, np.diag(gram).real))) > 1e5:
            continue
        c = np.linalg.solve(gram, scaled.conj().T @ (z * weight))
        residual = z - design @ c
        free = 2 * (len(z) - design.shape[1])
        chi2 = float((np.abs(residual * weight) ** 2).sum()) / free
        radius_err = float(np.sqrt(np.linalg.inv(gram)[-1, -1].real * max(chi2, 1.0)))
        rms = float(np.sqrt((np.abs(residual) ** 2).sum() / free))
        radius = float(abs(c[-1]))
        phase = float(np.degrees(np.angle(c[-1])) % 360.0)
        if best is None or rms < best.rms:
            best = Wobble(radius, radius_err, phase, sense, rms, radius > 4 * radius_err)
    return best
