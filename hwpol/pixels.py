"""A box of calibrated pixels: what the detector stage hands to registration and photometry."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntFlag
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray


class PixelMask(IntFlag):
    """Bits of `Pixels.mask`; 0 is a good pixel."""

    BAD = 1
    SATURATED = 2
    COSMIC_RAY = 4
    OUTSIDE = 8


class Box(NamedTuple):
    """Half-open pixel bounds in the raw array: x0 <= x < x1, y0 <= y < y1 (0-based)."""

    x0: int
    y0: int
    x1: int
    y1: int


@dataclass(frozen=True)
class Pixels:
    """Calibrated pixels of one box of one detector array in one frame.

    Attributes
    ----------
    data : ndarray, shape (ny, nx), float32
        Electrons, bias, dark and flat removed; sky still in.
    variance : ndarray, shape (ny, nx), float32
        Electrons squared: photons + read noise (+ masters).
    mask : ndarray, shape (ny, nx), uint8
        Bits of `PixelMask`.
    x0, y0 : int
        Raw-array pixel of ``data[0, 0]`` (0-based, x fastest).
    """

    data: NDArray[np.float32]
    variance: NDArray[np.float32]
    mask: NDArray[np.uint8]
    x0: int = 0
    y0: int = 0

    @property
    def box(self) -> Box:
        """The bounds this box covers."""
        ny, nx = self.data.shape
        return Box(self.x0, self.y0, self.x0 + nx, self.y0 + ny)

    def cut(self, box: Box) -> Pixels:
        """Return the part of this box inside `box` (a view; may be empty)."""
        own = self.box
        x0, x1 = (min(max(v, own.x0), own.x1) for v in (box.x0, box.x1))
        y0, y1 = (min(max(v, own.y0), own.y1) for v in (box.y0, box.y1))
        window = (slice(y0 - own.y0, max(y1, y0) - own.y0), slice(x0 - own.x0, max(x1, x0) - own.x0))
        return Pixels(self.data[window], self.variance[window], self.mask[window], x0, y0)
