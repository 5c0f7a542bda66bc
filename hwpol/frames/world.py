"""Between sky and pixels by the world coordinates that a frame's header holds."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class World:
    """Celestial world coordinates of one image; pixels 0-based in the raw array."""

    wcs: WCS

    def pixel(self, ra: ArrayLike, dec: ArrayLike) -> tuple[Array, Array]:
        """Pixels (x, y) of ICRS coordinates (deg); NaN where the projection does not reach."""
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            try:
                x, y = self.wcs.all_world2pix(np.atleast_1d(ra), np.atleast_1d(dec), 0, quiet=True)
            except Exception:
                # Each projection has its own way to say that a place lies outside it.
                nothing = np.full(np.atleast_1d(ra).shape, np.nan)
                return nothing, nothing
        return np.asarray(x), np.asarray(y)

    def sky(self, x: ArrayLike, y: ArrayLike) -> tuple[Array, Array]:
        """ICRS coordinates (deg) of pixels."""
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            ra, dec = self.wcs.all_pix2world(np.atleast_1d(x), np.atleast_1d(y), 0)
        return np.mod(ra, 360.0), np.asarray(dec)


def read_world(path: str | Path, extension: int | str = 0) -> World | None:
    """World coordinates of one HDU; None where its header holds none that make sense."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            with fits.open(path, memmap=False, lazy_load_hdus=True) as hdus:
                header = hdus[extension].header
                if "CRVAL1" not in header or "CTYPE1" not in header:
                    return None
                wcs = WCS(header).celestial
        except Exception:
            # A header that cannot be understood is a header without coordinates; the frame itself may still serve.
            return None
        if wcs.naxis != 2 or not wcs.has_celestial or not np.all(np.isfinite(wcs.wcs.crval)):
            return None
        scale = np.abs(np.linalg.det(wcs.pixel_scale_matrix))
    return World(wcs) if np.isfinite(scale) and scale > 0 else None
