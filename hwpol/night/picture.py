"""A small picture of a visit's field, for maps of its stars."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.instrument.description import Section
from hwpol.pixels import Box, PixelMask, Pixels

#: Longest side of a picture, in its own pixels.
LARGEST = 400


@dataclass(frozen=True)
class FieldPicture:
    """Mean of blocks of pixels.

    Attributes
    ----------
    data : ndarray, shape (ny, nx), float32
        Electrons a detector pixel, sky still in; NaN where a block has no good pixel.
    corner : tuple of float
        Raw-array coordinates (x, y) of the centre of ``data[0, 0]``.
    step : int
        Detector pixels along a side of a block.
    """

    data: NDArray[np.float32]
    corner: tuple[float, float]
    step: int


def field_picture(images: Callable[[int, int, Box | None], Pixels], section: Section | None) -> FieldPicture:
    """Picture of the first beam in the first frame, its strip alone where it has one."""
    pixels = images(0, 0, None)
    if section is not None:
        pixels = pixels.cut(Box(section.x0, section.y0, section.x1, section.y1))
    rows, columns = pixels.data.shape
    step = max(1, -(-max(rows, columns) // LARGEST))
    ny, nx = rows // step, columns // step
    good = (pixels.mask & int(PixelMask.BAD)) == 0
    light = np.where(good, pixels.data, 0.0)[: ny * step, : nx * step].reshape(ny, step, nx, step).sum(axis=(1, 3))
    number = good[: ny * step, : nx * step].reshape(ny, step, nx, step).sum(axis=(1, 3))
    with np.errstate(invalid="ignore", divide="ignore"):
        data = np.where(number > 0, light / number, np.nan).astype(np.float32)
    half = (step - 1) / 2
    return FieldPicture(data, (pixels.x0 + half, pixels.y0 + half), step)
