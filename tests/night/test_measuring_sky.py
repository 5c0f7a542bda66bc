"""What a bright, polarised, sloping sky does to q and u."""

import numpy as np

from hwpol import Fluxes, demodulate
from hwpol.photometry.measure import measure
from hwpol.photometry.neighbours import light_in_aperture
from hwpol.pixels import Pixels

PSI = np.array([0.0, 22.5, 45.0, 67.5])
BEAMS = np.array([0.0, 90.0])
SIZE, FWHM, RADIUS = 101, 4.5, 8.0


def image_of(electrons):
    """A Moffat star of index 3 in the middle, averaged over 5 x 5 points a pixel."""
    s = (np.arange(SIZE * 5) - SIZE * 5 // 2) / 5
    a2 = FWHM**2 / (4 * (2 ** (1 / 3) - 1))
    light = (1 + (s[None, :] ** 2 + s[:, None] ** 2) / a2) ** -3 * 2 / (np.pi * a2)
    return electrons * light.reshape(SIZE, 5, SIZE, 5).mean(axis=(1, 3))


def test_bias_of_the_sky():
    """Sky as bright as the star in the aperture, 20 percent polarised, 5 percent across the annulus: q and u are off by
    at most 0.05 percent. Without noise, so that nothing but bias is left."""
    total, q, u = 1e6, 0.02, -0.01
    inside = float(light_in_aperture(np.zeros(1), np.array([FWHM]), RADIUS)[0])
    level = total * inside / (np.pi * RADIUS**2)
    ring = np.array([4.0, 6.0]) * FWHM
    slope = 1 + 0.05 * (np.arange(SIZE) - SIZE // 2)[None, :] / (2 * ring[1])

    def images(k, b, box):
        angle = np.radians(4 * PSI[k] - 2 * BEAMS[b])
        star = image_of(0.5 * total * (1 + q * np.cos(angle) + u * np.sin(angle)))
        sky = 0.5 * level * (1 + 0.2 * np.cos(angle - np.radians(50.0))) * slope * np.ones((SIZE, 1))
        data = (star + sky).astype(np.float32)
        pixels = Pixels(data, data + np.float32(25.0), np.zeros(data.shape, np.uint8))
        return pixels if box is None else pixels.cut(box)

    at = np.full((1, 4, 2), SIZE // 2, dtype=float)
    found = measure(images, at, at, radii=[RADIUS], annulus=ring, hdu_of_beam=[0, 1], hits=False)
    stokes = demodulate(Fluxes.from_arrays(found.flux[0], found.variance[0], wave_plate=PSI, analyser=BEAMS))
    assert abs(stokes.q[0] - q) < 5e-4
    assert abs(stokes.u[0] - u) < 5e-4
