from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from photutils.aperture import CircularAperture, aperture_photometry
from photutils.geometry import circular_overlap_grid

from hwpol.errors import InputError
from hwpol.photometry.aperture import aperture_sums, circle_overlap, window
from hwpol.pixels import PixelMask, Pixels

ROUNDING = 1e-12
"""Second differences of numbers up to pi r^2 ~ 1e3: about 1e3 x 2e-16, and the same in the oracle."""


def flat(shape: tuple[int, int] = (60, 60), value: float = 7.0) -> Pixels:
    return Pixels(np.full(shape, value, np.float32), np.full(shape, 4.0, np.float32), np.zeros(shape, np.uint8))


@settings(deadline=None, max_examples=60)
@given(st.floats(-0.5, 0.5), st.floats(-0.5, 0.5), st.floats(0.05, 15.0))
def test_overlap_equals_the_oracle_and_adds_up(fx: float, fy: float, radius: float) -> None:
    half = window(radius)
    overlap = circle_overlap(np.array([fx]), np.array([fy]), radius, half)[0]
    edge = half + 0.5
    size = 2 * half + 1
    oracle = circular_overlap_grid(-edge - fx, edge - fx, -edge - fy, edge - fy, size, size, radius, 1, 1)
    np.testing.assert_allclose(overlap, oracle, rtol=0, atol=ROUNDING)
    assert overlap.sum() == pytest.approx(np.pi * radius**2, rel=ROUNDING)


def test_sums_equal_photutils_and_variance_has_squared_weights() -> None:
    rng = np.random.default_rng(1)
    data = rng.normal(100, 10, (90, 80)).astype(np.float32)
    variance = rng.uniform(50, 150, data.shape).astype(np.float32)
    pixels = Pixels(data, variance, np.zeros(data.shape, np.uint8), x0=30, y0=-7)
    x, y, radii = rng.uniform(15, 64, 40), rng.uniform(15, 74, 40), [0.4, 2.5, 6.0, 11.3]
    sums = aperture_sums(pixels, x + 30, y - 7, radii)
    apertures = [CircularAperture(np.column_stack([x, y]), r) for r in radii]
    table = aperture_photometry(data.astype(np.float64), apertures, method="exact")
    for i, aperture in enumerate(apertures):
        np.testing.assert_allclose(
            sums.flux[:, i], table[f"aperture_sum_{i}"], rtol=1e-10
        )  # x + 30 - 30 costs 1e-14 px
        weights = [m.to_image(data.shape) for m in aperture.to_mask(method="exact")]
        expected = [(w**2 * variance).sum() for w in weights]
        np.testing.assert_allclose(sums.variance[:, i], expected, rtol=1e-10)
        np.testing.assert_allclose(sums.area[:, i], np.pi * radii[i] ** 2, rtol=ROUNDING)
    assert sums.usable.all()
    assert not sums.bad.any()


def test_result_of_a_source_does_not_depend_on_its_company() -> None:
    rng = np.random.default_rng(2)
    pixels = Pixels(*(rng.uniform(1, 9, (2, 200, 200)).astype(np.float32)), np.zeros((200, 200), np.uint8))
    x, y = rng.uniform(20, 180, (2, 300))
    together = aperture_sums(pixels, x, y, [3.0, 5.5])
    alone = [aperture_sums(pixels, x[i : i + 1], y[i : i + 1], [3.0, 5.5]) for i in range(300)]
    assert np.array_equal(together.flux, np.concatenate([a.flux for a in alone]))
    assert np.array_equal(together.variance, np.concatenate([a.variance for a in alone]))


@pytest.mark.parametrize(("bit", "kind"), [(PixelMask.SATURATED, 1), (PixelMask.COSMIC_RAY, 2), (PixelMask.OUTSIDE, 3)])
def test_masked_pixels_are_counted_by_kind_and_spoil(bit: PixelMask, kind: int) -> None:
    pixels = flat()
    pixels.mask[30, 34] = bit
    sums = aperture_sums(pixels, [30.0], [30.0], [2.0, 6.0])
    assert sums.bad[0, 1, kind] == 1
    assert sums.bad[0].sum() == 1
    assert sums.usable.tolist() == [[True, False]]
    assert sums.area[0, 1] == pytest.approx(np.pi * 36 - 1)


def test_off_the_edge_and_unknown_positions() -> None:
    sums = aperture_sums(flat(), [3.0, np.nan, 56.0], [30.0, 30.0, 30.0], [3.4, 3.6])
    assert sums.usable.tolist() == [[True, False], [False, False], [True, False]]
    assert np.isnan(sums.flux[1]).all()
    assert (sums.bad[[0, 2], 1, 3] > 0).all()


def test_few_bad_pixels_in_the_rim_are_bridged_but_not_in_the_core() -> None:
    pixels = flat()
    for column, value in ((34, np.nan), (26, 1e6)):
        pixels.data[30, column] = value
        pixels.mask[30, column] = PixelMask.BAD
    sums = aperture_sums(pixels, [30.0], [30.0], [6.0], core=3.0)
    assert sums.flux[0, 0] == pytest.approx(7.0 * np.pi * 36)
    assert sums.bad[0, 0, 0] == 2
    assert sums.usable[0, 0]
    assert not aperture_sums(pixels, [30.0], [30.0], [6.0], core=5.0).usable[0, 0]
    pixels.mask[28:33, 34] = PixelMask.BAD
    assert not aperture_sums(pixels, [30.0], [30.0], [6.0], core=3.0).usable[0, 0]


def test_value_that_is_not_finite_counts_as_bad() -> None:
    pixels = flat()
    pixels.data[30, 30] = np.nan
    sums = aperture_sums(pixels, [30.0], [30.0], [4.0])
    assert np.isfinite(sums.flux).all()
    assert sums.bad[0, 0, 0] == 1
    assert not sums.usable[0, 0]


@pytest.mark.parametrize("radii", [[0.0], [-1.0], [np.nan], [[1.0]]])
def test_impossible_radii_are_refused(radii: list[float]) -> None:
    with pytest.raises(InputError, match="radii"):
        aperture_sums(flat(), [30.0], [30.0], radii)
