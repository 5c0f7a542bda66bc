"""Sets of frames from several sets, and from images that are in memory already."""

from __future__ import annotations

import tempfile
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

from astropy.io import fits
from astropy.table import vstack

from hwpol.errors import InputError

if TYPE_CHECKING:
    from hwpol.frames.frameset import FrameSet


def merged(*sets: FrameSet) -> FrameSet:
    """Join sets of frames of one instrument; a file in two of them stands once. Visits keep their numbers."""
    if not sets or any(one.instrument != sets[0].instrument for one in sets):
        raise InputError("frames of different instruments cannot be joined; read them with the same instrument file")
    tables = [one.table for one in sets if len(one)]
    if not tables:
        return sets[0]
    table = vstack(tables, metadata_conflicts="silent")
    seen: set[str] = set()
    keep = [not (name in seen or seen.add(name)) for name in table["file"]]  # type: ignore[func-returns-value]
    return type(sets[0])(sets[0].instrument, table[keep])


def stored(image: Any, number: int) -> Path:
    """Keep a CCDData of raw adu as a file for as long as the program runs; everything downstream reads files.

    Raises
    ------
    InputError
        When its unit is not adu: calibrated images have lost what the noise model needs.
    """
    if str(image.unit) != "adu":
        raise InputError(f"frames: a CCDData in {image.unit}, expected raw images in adu")
    path = Path(_folder().name) / f"image_{number:05d}_{id(image):x}.fits"
    fits.PrimaryHDU(image.data, header=fits.Header(image.header)).writeto(path, overwrite=True)
    return path


@lru_cache(maxsize=1)
def _folder() -> tempfile.TemporaryDirectory[str]:
    return tempfile.TemporaryDirectory(prefix="hwpol-images-")
