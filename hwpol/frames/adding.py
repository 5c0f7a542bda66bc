"""Light added to raw frames: what electrons become in raw numbers, and the copy of a file that holds them too."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.frames.calibrator import Calibrator
from hwpol.frames.masters import overscan_level, readout_of
from hwpol.frames.opening import _hdu, _opened, file_mark, layout_of, read_box

Array = NDArray[np.float64]

_NEWTON_STEPS = 4


def added_adu(
    calibrator: Calibrator,
    file: str | Path,
    beam: int,
    light: Array,
    rng: np.random.Generator,
    *,
    filter: str,
    exposure: float,
    gain: float | None = None,
    psi: float | None = None,
) -> Array:
    """Raw adu that more light in one beam adds to a frame, its photon noise drawn.

    Parameters
    ----------
    calibrator : Calibrator
        Undoes what is done here: flat, gain and linearity are those of its masters.
    light : ndarray, shape (ny, nx)
        Expected electrons as `Calibrator.pixels` would hand them out (flat removed), over the whole array.
    rng : Generator
        Draws the electrons of each pixel from a Poisson law.
    beam, filter, exposure, gain, psi
        As in `Calibrator.pixels`.

    Returns
    -------
    ndarray, shape (ny, nx)
        Not rounded to digits; not limited to the scale.

    Raises
    ------
    InputError
        A file that cannot be read, or light of another shape.
    """
    plan = calibrator._plan(file, beam, filter, exposure, gain, np.nan if psi is None else psi)
    readout = readout_of(calibrator.instrument, beam)
    shape = layout_of(file, readout.extension).shape
    if light.shape != shape:
        raise InputError(f"light: shape {light.shape}, expected {shape} as in {file}")
    seen = np.asarray(light, dtype=float)
    if plan.inverse_flat is not None:
        with np.errstate(divide="ignore", invalid="ignore"):
            seen = seen / plan.inverse_flat
    lit = np.isfinite(seen) & (seen > 0)
    adu = np.zeros(shape)
    adu[lit] = rng.poisson(seen[lit]) / plan.gain
    if readout.linearity == (1.0,):
        return adu
    raw = read_box(file, readout.extension)
    overscan = overscan_level(file, readout)
    level = raw.data.astype(float)
    if overscan is not None:
        level -= overscan.over(raw.box)
    if plan.bias is not None:
        level -= plan.bias
    return _bent(np.nan_to_num(level), adu, readout.linearity)


def _bent(level: Array, more: Array, coefficients: tuple[float, ...]) -> Array:
    """Raw adu to add to `level` so that its linear value grows by `more`, by Newton's method."""
    linear = np.polynomial.Polynomial((0.0, *coefficients))
    slope = linear.deriv()
    goal = linear(level) + more
    raw = level + more / slope(level)
    for _ in range(_NEWTON_STEPS):
        raw = raw - (linear(raw) - goal) / slope(raw)
    return np.asarray(np.where(more > 0, raw - level, 0.0))


def copy_with(
    file: str | Path,
    target: str | Path,
    more: Mapping[int | str, Array],
    rng: np.random.Generator,
    history: str,
) -> None:
    """Write a copy of a raw file with adu added to some of its HDUs; all else is kept.

    Parameters
    ----------
    file : path
        Raw frame, in any form that can be read; only read.
    target : path
        New file, FITS without a wrapping compression.
    more : mapping of extension to ndarray, shape (ny, nx)
        adu. Integers are rounded up or down by chance so that the mean is kept (a variance of up to 1/4 adu^2 a
        pixel with added light), and end at the scale's last number. Pixels without a value stay without.
    rng : Generator
    history : str
        Sentence for the HISTORY of the altered HDUs.

    Raises
    ------
    InputError
        As `layout_of`, or `target` exists.
    """
    if Path(target).exists():
        raise InputError(f"{target}: exists already; expected a new file")
    mark = file_mark(file)
    layouts = {extension: layout_of(file, extension) for extension in more}
    with _opened(mark) as hdus:
        for extension, adu in more.items():
            layout, hdu = layouts[extension], _hdu(hdus, mark, extension)
            stored = hdu.data
            wanted = adu.reshape(stored.shape) / layout.scale
            touched = wanted != 0
            if layout.blank is not None and stored.dtype.kind in "iu":
                touched &= stored != layout.blank
            stored[touched] = _digits(stored[touched], wanted[touched], rng)
            for card in ("CHECKSUM", "DATASUM"):
                hdu.header.remove(card, ignore_missing=True)
            hdu.header.add_history(history)
        _write(hdus, target)


def _digits(stored: NDArray[Any], more: Array, rng: np.random.Generator) -> NDArray[Any]:
    total = stored.astype(float) + more
    if stored.dtype.kind not in "iu":
        return total.astype(stored.dtype)
    ends = np.iinfo(stored.dtype)
    return np.clip(np.floor(total + rng.random(total.shape)), ends.min, ends.max).astype(stored.dtype)


def _write(hdus: fits.HDUList, target: str | Path) -> None:
    try:
        hdus.writeto(target, output_verify="ignore")
    except OSError as error:
        raise InputError(
            f"{target}: cannot be written ({error.strerror or error}); expected a writable folder"
        ) from None
