"""Raw pixels from FITS files, whole or a box, the same from every storage form.

Plain files are read by rows straight from their place in the file: a stamp costs a few rows, and a file cut short
is an error message where a memory map would be a crash. Compressed files are decompressed whole and kept briefly.
"""

from __future__ import annotations

import bz2
import gzip
import os
import warnings
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache
from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.utils.exceptions import AstropyWarning
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.pixels import Box

WINDOW_CARDS = ("CCDSUM", "XBINNING", "YBINNING", "CCDSEC", "DETSEC")
"""Header cards that commonly tell binning and window (common practice); compared only where present."""

Form = tuple[tuple[int, int], tuple[tuple[str, str], ...]]
"""(ny, nx) and the binning and window cards: arrays of equal form may be subtracted from each other."""

FileMark = tuple[str, int, int]
"""Path, size (bytes) and modification time (ns): what a file is recognised by."""

_DECOMPRESSORS = {b"\x1f\x8b": gzip.decompress, b"BZ": bz2.decompress}


@dataclass(frozen=True)
class Layout:
    """Where and how one HDU stores its image.

    Attributes
    ----------
    shape : tuple of int
        (ny, nx) of the array.
    form : tuple
        See `Form`.
    full_scale : float
        Largest value (adu) that an integer array can hold; inf for floating point.
    offset : int or None
        Byte where the pixels begin; None for compressed files.
    dtype, scale, zero, blank
        adu = scale x stored + zero; `blank` is the stored integer of pixels without a value.
    """

    shape: tuple[int, int]
    form: Form
    full_scale: float
    offset: int | None
    dtype: np.dtype[Any]
    scale: float
    zero: float
    blank: int | None


@dataclass(frozen=True)
class RawBox:
    """Raw pixels of a box.

    Attributes
    ----------
    data : ndarray, shape (ny, nx), float32
        adu, as stored (pixels without a value are NaN). Integers up to 2**24 are exact.
    box : Box
        Raw-array bounds of `data`, after clipping to the array.
    layout : Layout
        The HDU it comes from.
    """

    data: NDArray[np.float32]
    box: Box
    layout: Layout


def file_mark(file: str | Path) -> FileMark:
    """Return path, size and modification time; InputError where the file cannot be found."""
    try:
        status = os.stat(file)
    except OSError as error:
        raise InputError(f"{file}: cannot be read ({error.strerror}): expected a FITS file") from None
    return os.fspath(file), status.st_size, status.st_mtime_ns


def layout_of(file: str | Path, extension: int | str = 0) -> Layout:
    """Describe the image of one HDU without reading its pixels (cached by path, size and time).

    Raises
    ------
    InputError
        The file is not FITS, is cut short, or holds no two-dimensional image in that HDU.
    """
    return _layout(file_mark(file), extension)


def read_box(file: str | Path, extension: int | str = 0, box: Box | None = None) -> RawBox:
    """Read raw pixels (adu) of one HDU.

    Parameters
    ----------
    file : path
        FITS file; plain, gzip, bzip2 or tile-compressed.
    extension : int or str
        HDU number or name. Number 0 of a tile-compressed file whose first HDU is empty means its first image.
    box : Box, optional
        Half-open raw-array bounds, clipped to the array; default the whole array.

    Returns
    -------
    RawBox

    Raises
    ------
    InputError
        As `layout_of`, or the pixels cannot be read.
    """
    mark = file_mark(file)
    layout = _layout(mark, extension)
    ny, nx = layout.shape
    x0, y0, x1, y1 = box if box is not None else (0, 0, nx, ny)
    x0, x1 = (min(max(int(v), 0), nx) for v in (x0, x1))
    y0, y1 = (min(max(int(v), 0), ny) for v in (y0, y1))
    bounds = Box(x0, y0, max(x1, x0), max(y1, y0))
    rows = slice(bounds.y0, bounds.y1)
    if layout.offset is None:
        stored = _decompressed(mark, extension)[rows]
    else:
        stored = _rows(mark[0], layout, rows)
    return RawBox(_physical(stored[:, bounds.x0 : bounds.x1], layout), bounds, layout)


def _rows(file: str, layout: Layout, rows: slice) -> NDArray[Any]:
    nx = layout.shape[1]
    count = (rows.stop - rows.start) * nx
    start = (layout.offset or 0) + rows.start * nx * layout.dtype.itemsize
    stored = np.fromfile(file, dtype=layout.dtype, count=count, offset=start)
    if stored.size != count:
        raise InputError(f"{file}: cut short: {stored.size} of {count} pixels could be read; copy the file again")
    return stored.reshape(-1, nx)


def _physical(stored: NDArray[Any], layout: Layout) -> NDArray[np.float32]:
    """Turn stored numbers into native float32 adu, NaN where blank."""
    # Integers of up to 16 bits and their usual zero points are exact in float32; wider ones pass through float64.
    work = np.float32 if stored.dtype.itemsize <= 2 or stored.dtype == np.dtype(">f4") else np.float64
    adu: NDArray[Any] = stored.astype(work)
    if layout.scale != 1.0:
        np.multiply(adu, layout.scale, out=adu)
    if layout.zero != 0.0:
        np.add(adu, layout.zero, out=adu)
    if layout.blank is not None and stored.dtype.kind in "iu":
        adu[stored == layout.blank] = np.nan
    return adu.astype(np.float32, copy=False)


@contextmanager
def _opened(mark: FileMark) -> Iterator[fits.HDUList]:
    """Open a file whatever packs it; astropy's warnings on doubtful headers are silenced, errors made plain."""
    with open(mark[0], "rb") as handle, warnings.catch_warnings():
        warnings.simplefilter("ignore", AstropyWarning)
        try:
            unpack = _DECOMPRESSORS.get(handle.read(2))
            handle.seek(0)
            source = handle if unpack is None else BytesIO(unpack(handle.read()))
            hdus = fits.open(source, memmap=False, do_not_scale_image_data=True, lazy_load_hdus=True)
        except (OSError, EOFError, ValueError, TypeError, zlib.error) as error:
            raise InputError(f"{mark[0]}: cannot be read as FITS ({error}): expected a FITS file") from None
        with hdus:
            yield hdus


def _hdu(hdus: fits.HDUList, mark: FileMark, extension: int | str) -> Any:
    try:
        hdu = hdus[extension]
        empty_first = extension == 0 and hdu.header.get("NAXIS", 0) == 0 and len(hdus) > 1
        if empty_first and isinstance(hdus[1], fits.CompImageHDU):
            hdu = hdus[1]
    except (IndexError, KeyError, OSError):
        names = ", ".join(f"{i} {entry.name}".strip() for i, entry in enumerate(hdus))
        raise InputError(f"{mark[0]}: no HDU {extension!r}: the file holds {names}") from None
    if not isinstance(hdu, fits.PrimaryHDU | fits.ImageHDU | fits.CompImageHDU) or len(_shape(hdu)) != 2:
        raise InputError(
            f"{mark[0]}: HDU {extension!r} holds no two-dimensional image (axes {_shape(hdu)}): "
            "set detector.extension or the beam's extension"
        )
    return hdu


def _shape(hdu: Any) -> tuple[int, ...]:
    shape = tuple(getattr(hdu, "shape", ()) or ())
    while len(shape) > 2 and shape[0] == 1:
        shape = shape[1:]
    return shape


@lru_cache(maxsize=2048)
def _layout(mark: FileMark, extension: int | str) -> Layout:
    with _opened(mark) as hdus:
        hdu = _hdu(hdus, mark, extension)
        header = hdu.header
        cards = tuple((key, str(header[key])) for key in WINDOW_CARDS if key in header)
        shape = _shape(hdu)
        bits = int(header["BITPIX"])
        dtype = np.dtype({8: ">u1", 16: ">i2", 32: ">i4", 64: ">i8", -32: ">f4", -64: ">f8"}[bits])
        # As fresh headers of compressed HDUs and unscaled data show it, the cards still hold the stored scaling.
        scale, zero = float(header.get("BSCALE", 1.0)), float(header.get("BZERO", 0.0))
        full = zero + scale * float(np.iinfo(dtype).max) if bits > 0 else np.inf
        plain = not isinstance(hdu, fits.CompImageHDU) and _is_plain(mark[0])
        offset = int(hdu.fileinfo()["datLoc"]) if plain else None
        blank = int(header["BLANK"]) if bits > 0 and "BLANK" in header else None
    if offset is not None and offset + shape[0] * shape[1] * dtype.itemsize > mark[1]:
        raise InputError(f"{mark[0]}: cut short: {mark[1]} bytes hold less than its header says; copy the file again")
    return Layout((shape[0], shape[1]), ((shape[0], shape[1]), cards), full, offset, dtype, scale, zero, blank)


def _is_plain(file: str) -> bool:
    with open(file, "rb") as handle:
        return handle.read(6) == b"SIMPLE"


@lru_cache(maxsize=4)
def _decompressed(mark: FileMark, extension: int | str) -> NDArray[Any]:
    with _opened(mark) as hdus:
        hdu = _hdu(hdus, mark, extension)
        try:
            stored = np.asarray(hdu.data)
        except (OSError, ValueError, TypeError, RuntimeError) as error:
            raise InputError(f"{mark[0]}: HDU {extension!r} cannot be decompressed ({error})") from None
    stored = stored.reshape(_shape(hdu))
    stored.setflags(write=False)
    return stored
