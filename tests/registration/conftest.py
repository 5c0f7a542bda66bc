"""Small star fields with a known truth, for the tests of this folder."""

from __future__ import annotations

from collections.abc import Callable
from types import SimpleNamespace

import numpy as np
import pytest
from numpy.typing import ArrayLike, NDArray
from scipy.special import erf

from hwpol.pixels import Box, PixelMask, Pixels


def star_image(
    shape: tuple[int, int],
    x: ArrayLike,
    y: ArrayLike,
    flux: ArrayLike,
    fwhm: float,
    *,
    profile: str = "gaussian",
    axis_ratio: float = 1.0,
) -> NDArray[np.float64]:
    """Sum of pixel-integrated stars: Gaussian exactly, Moffat (beta 3.5) and donuts on a 5 x 5 sub-grid."""
    ny, nx = shape
    image = np.zeros(shape)
    half = int(np.ceil((2.2 if profile != "moffat" else 8.0) * fwhm * 1.5)) + 2
    for xs, ys, f in zip(np.atleast_1d(x), np.atleast_1d(y), np.atleast_1d(flux), strict=True):
        cx, cy = round(float(xs)), round(float(ys))
        x0, x1, y0, y1 = max(cx - half, 0), min(cx + half + 1, nx), max(cy - half, 0), min(cy + half + 1, ny)
        if x0 >= x1 or y0 >= y1:
            continue
        if profile == "gaussian":
            s = fwhm / 2.354820045
            gx = np.diff(0.5 * erf((np.arange(x0, x1 + 1) - 0.5 - xs) / (s * np.sqrt(2))))
            gy = np.diff(0.5 * erf((np.arange(y0, y1 + 1) - 0.5 - ys) / (s * axis_ratio * np.sqrt(2))))
            image[y0:y1, x0:x1] += f * gy[:, None] * gx[None, :]
            continue
        sub = (np.arange(5) - 2) / 5
        px = (np.arange(x0, x1)[:, None] + sub).ravel() - xs
        py = (np.arange(y0, y1)[:, None] + sub).ravel() - ys
        r2 = px[None, :] ** 2 + py[:, None] ** 2
        if profile == "moffat":
            beta = 3.5
            a2 = (fwhm / 2) ** 2 / (2 ** (1 / beta) - 1)
            star = (beta - 1) / (np.pi * a2) * (1 + r2 / a2) ** -beta
        else:
            outer, inner = fwhm / 2, 0.35 * fwhm / 2
            star = ((r2 < outer**2) & (r2 > inner**2)) / (np.pi * (outer**2 - inner**2))
        image[y0:y1, x0:x1] += f * star.reshape(y1 - y0, 5, x1 - x0, 5).mean(axis=(1, 3))
    return image


def noisy(
    image: NDArray[np.float64], rng: np.random.Generator, *, sky: float | NDArray[np.float64] = 200.0, read: float = 5.0
) -> Pixels:
    """Poisson and read noise on stars plus sky, as calibrated pixels; variance from the noisy counts."""
    expected = np.maximum(image + sky, 0.0)
    data = rng.poisson(expected) + rng.normal(0.0, read, image.shape)
    variance = np.maximum(data, 1.0) + read**2
    return Pixels(data.astype(np.float32), variance.astype(np.float32), np.zeros(image.shape, np.uint8))


class Visit:
    """Frames of one field in two (or more) beams, with every position known.

    `beam_of` maps first-beam places to each beam; `arrays` says which beams share an array; `sections` cuts it.
    """

    def __init__(
        self,
        rng: np.random.Generator,
        *,
        shape: tuple[int, int] = (512, 512),
        x: ArrayLike,
        y: ArrayLike,
        flux: ArrayLike,
        frames: int = 8,
        shift: NDArray[np.float64] | None = None,
        rotation: ArrayLike | None = None,
        beam_of: list[Callable[..., tuple[NDArray[np.float64], NDArray[np.float64]]]] | None = None,
        arrays: tuple[int, ...] = (0, 0),
        sections: tuple[Box, Box] | None = None,
        fwhm: ArrayLike = 4.0,
        clouds: ArrayLike = 1.0,
        sky: float = 200.0,
        beam_wander: NDArray[np.float64] | None = None,
        defects: Callable[[NDArray[np.float32]], None] | None = None,
        extra: NDArray[np.float64] | None = None,
        profile: str = "gaussian",
    ) -> None:
        self.x, self.y, self.flux = (np.atleast_1d(np.asarray(v, dtype=float)) for v in (x, y, flux))
        self.frames, self.arrays = frames, arrays
        self.shift = np.zeros((frames, 2)) if shift is None else shift
        self.rotation = np.zeros(frames) if rotation is None else np.asarray(rotation, dtype=float)
        self.beam_of = beam_of or [lambda a, b: (a, b), lambda a, b: (a + 3.0, b + 62.0)]
        beams = len(self.beam_of)
        self.wander = np.zeros((frames, beams, 2)) if beam_wander is None else beam_wander
        self.extra = np.zeros((frames, len(self.x), 2)) if extra is None else extra
        box = sections[0] if sections else Box(0, 0, shape[1], shape[0])
        self.pivot = (0.5 * (box.x0 + box.x1 - 1), 0.5 * (box.y0 + box.y1 - 1))
        width = np.broadcast_to(fwhm, frames)
        dim = np.broadcast_to(clouds, frames)
        self.truth = np.zeros((len(self.x), frames, beams, 2))
        self.pixels: list[dict[int, Pixels]] = []
        for k in range(frames):
            total = {a: np.zeros(shape) for a in set(arrays)}
            for b in range(beams):
                px, py = self.beam_of[b](*self.moved(k))
                px, py = px + self.wander[k, b, 0], py + self.wander[k, b, 1]
                self.truth[:, k, b] = np.column_stack([px, py])
                image = star_image(shape, px, py, dim[k] * self.flux, float(width[k]), profile=profile)
                if sections:
                    keep = np.zeros(shape, bool)
                    s = sections[b]
                    keep[s.y0 : s.y1, s.x0 : s.x1] = True
                    image[~keep] = 0.0
                total[arrays[b]] += image
            frame = {a: noisy(image, rng, sky=sky) for a, image in total.items()}
            for pixels in frame.values():
                if defects is not None:
                    defects(pixels.data)
                if sections:
                    pixels.mask[:] = int(PixelMask.OUTSIDE)
                    for s in sections:
                        pixels.mask[s.y0 : s.y1, s.x0 : s.x1] = 0
            self.pixels.append(frame)

    def moved(self, k: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """First-beam places of all stars in frame k."""
        c, s = np.cos(np.radians(self.rotation[k])), np.sin(np.radians(self.rotation[k]))
        dx = self.x + self.extra[k, :, 0] - self.pivot[0]
        dy = self.y + self.extra[k, :, 1] - self.pivot[1]
        return self.pivot[0] + c * dx - s * dy + self.shift[k, 0], self.pivot[1] + s * dx + c * dy + self.shift[k, 1]

    def images(self, k: int, b: int, box: Box | None = None) -> Pixels:
        """What the detector stage would hand over."""
        pixels = self.pixels[k][self.arrays[b]]
        return pixels if box is None else pixels.cut(box)


@pytest.fixture(scope="session")
def fields() -> SimpleNamespace:
    """The makers of star fields of this file."""
    return SimpleNamespace(star_image=star_image, noisy=noisy, Visit=Visit)
