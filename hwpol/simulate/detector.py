"""The detector: response, dark, cosmic rays, noise, non-linearity and digits of one exposure."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.instrument import Beam, Detector, Section
from hwpol.simulate.images import Image, Layout
from hwpol.simulate.plan import DETECTOR, Exposure, child
from hwpol.simulate.scenario import Array, Scenario

ADC_TOP = 65535  # 16-bit digits
_HIT_MEDIAN = 1500.0  # electrons; common practice for thick silicon
_HIT_SPREAD = 1.0
_TRACK = 4.0  # pixels, mean length
_HOT = 50.0  # electrons per second of a hot pixel


@dataclass(frozen=True)
class Chip:
    """One detector array: what it does to light, the same all night.

    `response` (relative), `bias` (adu), `dead` and `hot` (electrons/s) have
    shape (ny, nx) or broadcast to it; `lit` is the part that sees light.
    """

    gain: float
    read_noise: float
    linearity: tuple[float, ...]
    lit: Section
    response: Image
    bias: Image
    dead: NDArray[np.bool_]
    hot: NDArray[np.bool_]

    @property
    def mask(self) -> NDArray[np.uint8]:
        """1 where a pixel is bad."""
        return np.asarray(self.dead | self.hot, dtype=np.uint8)


def chips(scenario: Scenario, layout: Layout) -> tuple[Chip, ...]:
    """Make the arrays of a scenario's instrument."""
    return tuple(_chip(scenario, layout, hdu) for hdu in range(len(layout.extensions)))


def _chip(scenario: Scenario, layout: Layout, hdu: int) -> Chip:
    array, detector = scenario.array, scenario.instrument.detector
    beam = scenario.instrument.beams[layout.hdu.index(hdu)]
    nx, ny = array.shape
    rng = child(scenario.seed, DETECTOR, hdu)
    response = 1 + array.pixel_response * rng.standard_normal((ny, nx))
    x, y = np.linspace(-1, 1, nx), np.linspace(-1, 1, ny)[:, None]
    response *= 1 - array.vignetting * (x * x + y * y) / 2
    for _ in range(array.dust):
        cx, cy = rng.uniform(0, nx), rng.uniform(0, ny)
        radius, width, depth = rng.uniform(4, 12), rng.uniform(1.5, 3), rng.uniform(0.01, 0.04)
        distance = np.hypot(np.arange(nx) - cx, np.arange(ny)[:, None] - cy)
        response *= 1 - depth * np.exp(-(((distance - radius) / width) ** 2))
    bias = array.bias + array.bias_columns * rng.standard_normal(nx)
    dead, hot = np.zeros((ny, nx), bool), np.zeros((ny, nx), bool)
    bad = rng.choice(nx * ny, size=min(array.bad_pixels, nx * ny), replace=False)
    dead.flat[bad[::2]] = True
    hot.flat[bad[1::2]] = True
    dead[:, [column for column in array.bad_columns if column < nx]] = True
    hot &= ~dead
    return Chip(
        gain=_gain(array, detector, beam),
        read_noise=_first(array.read_noise, beam.read_noise, detector.read_noise, 4.0),
        linearity=detector.linearity,
        lit=layout.lit[hdu],
        response=np.clip(response, 0, None) * ~dead,
        bias=bias,
        dead=dead,
        hot=hot,
    )


def _gain(array: Array, detector: Detector, beam: Beam) -> float:
    return _first(array.gain, beam.gain, detector.gain, 1.0)


def _first(*values: float | None) -> float:
    return next(value for value in values if value is not None)


def cosmic_rays(shape: tuple[int, int], expected: float, rng: np.random.Generator) -> tuple[Image, int]:
    """Electrons of a Poisson number of cosmic-ray tracks on an array (ny, nx), and their number."""
    image = np.zeros(shape)
    count = int(rng.poisson(expected))
    for _ in range(count):
        total = _HIT_MEDIAN * np.exp(_HIT_SPREAD * rng.standard_normal())
        length, turn = rng.exponential(_TRACK), rng.uniform(0, 2 * np.pi)
        steps = length * (np.arange(int(2 * length) + 1) + 0.5) / (int(2 * length) + 1)
        x = np.floor(rng.uniform(0, shape[1]) + steps * np.cos(turn)).astype(int)
        y = np.floor(rng.uniform(0, shape[0]) + steps * np.sin(turn)).astype(int)
        inside = (x >= 0) & (x < shape[1]) & (y >= 0) & (y < shape[0])
        np.add.at(image, (y[inside], x[inside]), total / len(steps))
    return image, count


def read_out(
    chip: Chip, light: Image, one: Exposure, array: Array, hits: Image, rng: np.random.Generator
) -> NDArray[np.uint16]:
    """Digits of one array of one exposure.

    Parameters
    ----------
    chip : Chip
        The array.
    light : ndarray, shape (ny, nx)
        Expected electrons before the response; seen in the lit part alone.
    one : Exposure
        Gives the exposure time.
    array : Array
        Gives dark current and bias drift.
    hits : ndarray, shape (ny, nx)
        Electrons of cosmic rays.
    rng : Generator
        Of this exposure.

    Returns
    -------
    ndarray of uint16, shape (ny, nx)
        Clipped to 0 .. 65535.
    """
    lit = (slice(chip.lit.y0, chip.lit.y1), slice(chip.lit.x0, chip.lit.x1))
    electrons = np.zeros(light.shape)
    dark = one.seconds * (array.dark + _HOT * chip.hot[lit])
    electrons[lit] = rng.poisson(light[lit] * chip.response[lit] + dark) + hits[lit]
    adu = _bent(electrons / chip.gain, chip.linearity)
    level = chip.bias + array.bias_drift * rng.standard_normal()
    noise = rng.standard_normal(light.shape, dtype=np.float32) * (chip.read_noise / chip.gain)
    return np.clip(np.rint(adu + level + noise), 0, ADC_TOP).astype(np.uint16)


def _bent(true: Image, linearity: tuple[float, ...]) -> Image:
    """Raw level whose corrected value raw (c0 + c1 raw + ...) is `true`, by Newton's method."""
    if linearity == (1.0,):
        return true
    corrected = np.polynomial.Polynomial((0.0, *linearity))
    slope = corrected.deriv()
    raw = true / linearity[0]
    for _ in range(8):
        raw = raw - (corrected(raw) - true) / slope(raw)
    return np.asarray(raw)
