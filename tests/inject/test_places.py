"""Free places: inside every strip in every frame, away from known stars, and empty as measured."""

from types import SimpleNamespace

import numpy as np

from hwpol.inject.places import free_places
from hwpol.instrument.description import Section
from hwpol.night.sources import NEAR_XY
from hwpol.photometry.profiles import grid, moffat
from hwpol.pixels import Pixels

SECTIONS = [Section(0, 200, 0, 100), Section(0, 200, 110, 210)]
FWHM, RADIUS, ANNULUS = 3.0, 5.0, (12.0, 18.0)
SKY = 100.0


class Placed:
    """Two beams 110 pixels apart, three frames that shift by 4 pixels; `known` stars of the first beam."""

    def __init__(self, known):
        places = np.reshape(np.asarray(known, dtype=float), (-1, 2))
        self.stars = Listed(places[:, 0], places[:, 1])

    def positions(self, x, y):
        shift = np.array([0.0, 4.0, -4.0])[:, None]
        x, y = (np.asarray(a, dtype=float)[:, None, None] for a in (x, y))
        return x + shift + np.zeros((1, 3, 2)), y + shift + np.array([0.0, 110.0])


class Listed(SimpleNamespace):
    """Places of stars."""

    def __init__(self, x, y):
        super().__init__(x=x, y=y)

    def __len__(self):
        return len(self.x)


class Images:
    """Noise and stars, both beams in one array (`planes` [0, 0]) or each in its own."""

    def __init__(self, placed, stars=(), planes=(0, 1)):
        rng = np.random.default_rng(8)
        self.hdu_of_beam = list(planes)
        self.frames = [rng.poisson(SKY, (210, 200)).astype(float) for _ in range(3)]
        for x, y, flux in stars:
            px, py = placed.positions([x], [y])
            for k, image in enumerate(self.frames):
                for b in range(2):
                    cx, cy = round(px[0, k, b]), round(py[0, k, b])
                    shape = np.array([[0.0, 0.0, 0.12, 0.0, 0.12]])
                    disc = moffat(grid(21), shape, 3.0)[0].reshape(21, 21)
                    image[cy - 10 : cy + 11, cx - 10 : cx + 11] += flux * disc / disc.sum()

    def __call__(self, k, b, box=None):
        data = self.frames[k].astype(np.float32)
        pixels = Pixels(data, np.full_like(data, SKY + 9.0), np.zeros(data.shape, np.uint8))
        return pixels if box is None else pixels.cut(box)


def find(placed, images, wanted=6, seed=1, targets=((100.0, 50.0),)):
    where = np.asarray(targets, dtype=float).T
    return free_places(
        placed, images, SECTIONS, (where[0], where[1]), wanted, FWHM, RADIUS, ANNULUS, np.random.default_rng(seed)
    )


def test_places_keep_their_distances():
    known = [(30.0, 30.0), (150.0, 70.0)]
    placed = Placed(known)
    x, y, noise = find(placed, Images(placed))
    assert len(x) == 6
    # Three frames, two beams, a circle of 5 pixels with 109 electrons^2 each; the sky's error adds a few percent.
    assert 1.0 < noise / (6 * np.pi * RADIUS**2 * (SKY + 9.0)) < 1.2
    px, py = placed.positions(x, y)
    for b, section in enumerate(SECTIONS):
        assert np.all((px[..., b] - section.x0 > RADIUS) & (section.x1 - 1 - px[..., b] > RADIUS))
        assert np.all((py[..., b] - section.y0 > RADIUS) & (section.y1 - 1 - py[..., b] > RADIUS))
    others_x, others_y = np.append(x, [100.0, 30.0, 150.0]), np.append(y, [50.0, 30.0, 70.0])
    distance = np.hypot(x[:, None] - others_x, y[:, None] - others_y)
    assert np.min(distance[distance > 0]) > NEAR_XY


def test_a_star_that_nobody_listed_is_seen():
    placed = Placed([])
    hidden = [(40.0 + 24 * i, 26.0 + 24 * j, 3000.0) for i in range(6) for j in range(3)]
    free = find(placed, Images(placed), wanted=12)
    x, y, _ = find(placed, Images(placed, hidden), wanted=12)
    near = np.min([np.hypot(x - star[0], y - star[1]) for star in hidden], axis=0)
    blind = np.min([np.hypot(free[0] - star[0], free[1] - star[1]) for star in hidden], axis=0)
    assert np.min(blind) < RADIUS
    assert len(near) > 0
    assert np.min(near) > RADIUS


def test_beams_of_one_array_mind_each_other():
    placed = Placed([(100.0, 160.0)])
    x, y, _ = find(placed, Images(placed, planes=(0, 0)), wanted=20)
    # The star's first-beam image lies where the second beam of a place at (100, 50) would.
    assert np.min(np.hypot(x - 100.0, y + 110.0 - 160.0)) > NEAR_XY


def test_a_crowded_field_has_fewer_places_or_none():
    some = Placed([(x, y) for x in range(0, 130, 12) for y in range(0, 100, 12)])
    x, _, _ = find(some, Images(some), wanted=20)
    assert 0 < len(x) < 20
    assert np.min(x) > 120
    full = Placed([(x, y) for x in range(0, 200, 12) for y in range(0, 100, 12)])
    assert len(find(full, Images(full))[0]) == 0
