from __future__ import annotations

from collections.abc import Callable
from dataclasses import fields

import numpy as np
import pytest
from scipy.stats import chi2

from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.instrument.description import Section
from hwpol.photometry.measure import Measurement, Stars, measure
from hwpol.pixels import Box, PixelMask, Pixels

SIZE, OFFSET = 220, 110
STRIPS = [Section(0, SIZE, 0, OFFSET), Section(0, SIZE, OFFSET, 2 * OFFSET)]


class Field:
    """A field in four frames and two strips; stars of given flux, fwhm 3.5 px."""

    def __init__(self, star: Callable[..., np.ndarray], seed: int, flux: float, x: list[float], y: list[float]) -> None:
        rng = np.random.default_rng(seed)
        shift = rng.uniform(-2, 2, (4, 1, 2))
        self.x = np.array(x)[:, None, None] + shift[None, ..., 0] + np.zeros((1, 1, 2))
        self.y = np.array(y)[:, None, None] + shift[None, ..., 1] + OFFSET * np.arange(2)
        self.frames = []
        for k in range(4):
            expected = np.full((2 * OFFSET, SIZE), 60.0)
            for s in range(len(x)):
                for b in range(2):
                    ix, iy = round(self.x[s, k, b]), round(self.y[s, k, b])
                    stamp = flux * star(25, self.x[s, k, b] - ix, self.y[s, k, b] - iy, 3.5)
                    for row in range(25):
                        for column in range(25):
                            r, c = iy + row - 12, ix + column - 12
                            if 0 <= r < expected.shape[0] and 0 <= c < SIZE:
                                expected[r, c] += stamp[row, column]
            data = rng.poisson(expected) + rng.normal(0, 5, expected.shape)
            mask = np.zeros(expected.shape, np.uint8)
            self.frames.append(Pixels(data.astype(np.float32), (expected + 25).astype(np.float32), mask))

    def images(self, k: int, b: int, box: Box | None = None) -> Pixels:
        return self.frames[k] if box is None else self.frames[k].cut(box)

    def measure(self, **options: object) -> Measurement:
        settings = {"radii": [5.0, 8.0], "annulus": (11.0, 17.0), "sections": STRIPS}
        return measure(self.images, self.x, self.y, **(settings | options))


@pytest.fixture(name="field")
def _field(star: Callable[..., np.ndarray]) -> Field:
    return Field(star, 1, 3e4, [40.0, 110.0, 180.0, 40.0, 110.0, 5.0], [30.0, 30.0, 30.0, 80.0, 80.0, 55.0])


def test_stamps_equal_whole_frames_bit_for_bit(field: Field) -> None:
    field.frames[1].mask[33, 41] = PixelMask.BAD
    whole, stamps = field.measure(stamps=False), field.measure(stamps=True)
    for column in fields(Measurement):
        assert np.array_equal(getattr(whole, column.name), getattr(stamps, column.name), equal_nan=True), column.name


def test_edge_leaves_the_frame_out_in_all_beams(field: Field) -> None:
    result = field.measure()
    assert np.isnan(result.flux[1, 5]).all()
    assert ((result.flags[1, 5] & Flag.EDGE) != 0).all()
    assert np.isfinite(result.flux[:, :5]).all()
    assert not (result.flags[:, :5] & (Flag.EDGE | Flag.COSMIC_RAY)).any()


def test_a_strip_ends_where_its_section_does(field: Field) -> None:
    low = [Section(0, SIZE, 0, 85), STRIPS[1]]
    assert ((field.measure(sections=low).flags[1, 3] & Flag.EDGE) != 0).all()
    assert not (field.measure().flags[1, 3] & Flag.EDGE).any()


@pytest.mark.parametrize(
    ("bit", "flag"), [(PixelMask.SATURATED, Flag.SATURATED), (PixelMask.COSMIC_RAY, Flag.COSMIC_RAY)]
)
def test_a_spoiled_beam_drops_the_pair(field: Field, bit: PixelMask, flag: Flag) -> None:
    x, y = round(field.x[1, 2, 1]), round(field.y[1, 2, 1])
    field.frames[2].mask[y, x] = bit
    result = field.measure()
    assert np.isnan(result.flux[:, 1, 2]).all()
    assert np.isnan(result.variance[:, 1, 2]).all()
    assert ((result.flags[:, 1, 2] & flag) != 0).all()
    assert np.isfinite(result.flux[:, 1, [0, 1, 3]]).all()
    assert np.isfinite(result.flux[:, [0, 2, 3, 4]]).all()


def test_bad_pixels_are_bridged_in_the_rim_and_spoil_in_the_core(field: Field) -> None:
    for s, away in ((0, 4), (1, 0)):
        x, y = round(field.x[s, 0, 0]), round(field.y[s, 0, 0])
        field.frames[0].mask[y, x + away] = PixelMask.BAD
    result = field.measure()
    assert np.isfinite(result.flux[:, 0, 0]).all()
    assert ((result.flags[:, 0, 0, 0] & Flag.BAD_PIXELS) != 0).all()
    assert np.isnan(result.flux[:, 1, 0]).all()


def test_a_hit_is_seen_without_a_mask(field: Field) -> None:
    x, y = round(field.x[4, 3, 0]), round(field.y[4, 3, 0])
    field.frames[3].data[y + 2, x - 1 : x + 2] += 2000.0
    result = field.measure()
    assert np.isnan(result.flux[:, 4, 3]).all()
    assert ((result.flags[:, 4, 3] & Flag.COSMIC_RAY) != 0).all()
    assert np.isfinite(field.measure(hits=False).flux[:, 4, 3]).all()


def test_a_wrong_noise_model_is_flagged(field: Field) -> None:
    assert not (field.measure().flags & Flag.NOISE_DOUBTFUL).any()
    for frame in field.frames:
        frame.variance[:] *= 2.0
    assert ((field.measure().flags[:, :5] & Flag.NOISE_DOUBTFUL) != 0).all()


def test_errors_of_fluxes_are_true(star: Callable[..., np.ndarray]) -> None:
    """Pulls of 240 fluxes about their own expectation, 0.1 percent false alarm on each side."""
    pulls = []
    for seed in range(6):
        field = Field(star, 10 + seed, 4e3, [40.0, 110.0, 180.0, 40.0, 110.0], [30.0, 30.0, 30.0, 80.0, 80.0])
        quiet = Field(star, 10 + seed, 4e3, [40.0, 110.0, 180.0, 40.0, 110.0], [30.0, 30.0, 30.0, 80.0, 80.0])
        for frame in quiet.frames:
            frame.data[:] = frame.variance - 25
        got, expected = field.measure(hits=False), quiet.measure(hits=False)
        pulls.append((got.flux[1] - expected.flux[1]) / np.sqrt(got.variance[1]))
    pull = np.concatenate([p.ravel() for p in pulls])
    assert chi2.ppf(0.0005, pull.size) < (pull**2).sum() < chi2.ppf(0.9995, pull.size)
    assert abs(pull.mean()) < 3.3 / np.sqrt(pull.size)


def test_positions_that_are_unknown_and_radii_by_frame(field: Field) -> None:
    field.x[2, 1, 0] = np.nan
    radii = np.array([[5.0, 6.0, 5.5, 5.0]])
    result = field.measure(radii=radii)
    assert np.isnan(result.flux[0, 2, 1]).all()
    np.testing.assert_allclose(result.area[0, 0, :, 0], np.pi * radii[0] ** 2)


def test_known_stars_are_kept_out_of_the_sky(field: Field) -> None:
    near = Stars(field.x + 14.0, field.y, np.full(len(field.x), 5.0))
    one = slice(0, 1)
    for k, frame in enumerate(field.frames):
        for b in range(2):
            x, y = round(field.x[0, k, b] + 14), round(field.y[0, k, b])
            frame.data[y - 3 : y + 4, x - 3 : x + 4] += 40.0
    known = measure(
        field.images, field.x[one], field.y[one], radii=[5.0], annulus=(11.0, 17.0), sections=STRIPS, stars=near
    )
    assert np.abs((known.sky - 60.0) / known.sky_err).max() < 5
    assert (known.sky < field.measure().sky[one]).all()


def test_shapes_that_do_not_fit_are_refused(field: Field) -> None:
    with pytest.raises(InputError, match="source, frame, beam"):
        measure(field.images, [1.0], [2.0], radii=[5.0], annulus=(8, 12))
    with pytest.raises(InputError, match="annulus"):
        field.measure(annulus=(8, 12, 13))
    with pytest.raises(InputError, match="radii"):
        field.measure(radii=[-1.0])
    with pytest.raises(InputError, match="beams"):
        field.measure(hdu_of_beam=[0])
