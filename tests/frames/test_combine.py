"""The clipped mean against astropy's sigma clipping, its variance, and outliers among few frames."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from astropy.stats import SigmaClip
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.frames.combine import clipped_mean, combine_frames, comparators

ROUNDING = 4 * np.finfo(np.float32).eps
"""A mean in float32 of values about their median: rounding of the median, the mean deviation and their sum."""


@pytest.mark.parametrize("n", [*range(2, 20), 31, 32, 50])
def test_comparators_sort_every_zero_one_pattern(n: int) -> None:
    # A network sorts everything if it sorts zeros and ones (Knuth, 5.3.4, theorem Z).
    rng = np.random.default_rng(n)
    if n <= 12:
        values = (np.arange(2**n)[None, :] >> np.arange(n)[:, None]) & 1
    else:
        values = (rng.random((n, 3000)) < rng.random(3000)).astype(int)
    values = values.copy()
    for i, j in comparators(n):
        values[i], values[j] = np.minimum(values[i], values[j]), np.maximum(values[i], values[j])
    assert np.all(np.diff(values, axis=0) >= 0)


@given(
    n=st.integers(1, 24),
    sigma=st.sampled_from([2.0, 3.0, 4.0]),
    seed=st.integers(0, 2**31),
    missing=st.sampled_from([0.0, 0.1, 0.5]),
)
@settings(deadline=None, max_examples=40)
def test_mean_count_and_variance_equal_astropy(n: int, sigma: float, seed: int, missing: float) -> None:
    rng = np.random.default_rng(seed)
    stack = rng.normal(1000.0, 5.0, (n, 13, 17)).astype(np.float32)
    stack[rng.random(stack.shape) < 0.05] += 400.0
    stack[rng.random(stack.shape) < missing] = np.nan
    before = stack.copy()
    result = clipped_mean(stack, sigma=sigma, pooled=False)
    np.testing.assert_array_equal(stack, before)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        kept = SigmaClip(sigma, maxiters=10)(stack.astype(float), axis=0, masked=False)
        kept = np.broadcast_to(kept, stack.shape)
        count = np.isfinite(kept).sum(axis=0)
        mean = np.nanmean(kept, axis=0)
        variance = np.where(count > 1, np.nanvar(kept, axis=0, ddof=1), np.nan) / count
    np.testing.assert_array_equal(result.count, count)
    np.testing.assert_allclose(result.mean, mean, rtol=ROUNDING)
    # The deviations are of order 5 to 400 with absolute rounding of 1000 eps.
    np.testing.assert_allclose(result.variance, variance, rtol=1e-4, atol=1e-6)


@pytest.mark.parametrize("n", [3, 5, 8])
def test_a_hit_among_few_frames_is_clipped_by_the_pooled_noise(n: int) -> None:
    rng = np.random.default_rng(n)
    stack = rng.normal(300.0, 4.0, (n, 64, 512)).astype(np.float32)
    stack[1, ::8, ::8] += 200.0
    result = clipped_mean(stack)
    assert np.all(result.count[::8, ::8] == n - 1)
    clean = np.ones(result.count.shape, bool)
    clean[::8, ::8] = False
    # 6e-5 of normal values lie outside 4 sigma; the bound allows for the median of few not being normal.
    assert np.mean(result.count[clean] < n) < 1e-3 * n
    # 1.6 percent of hits move the cut at 0.9 by as much: up to 4 percent more for two degrees of freedom.
    assert np.mean(result.variance[clean] * result.count[clean]) / 16.0 == pytest.approx(1.0, abs=0.05)


def test_pull_of_the_mean_with_its_variance() -> None:
    rng = np.random.default_rng(11)
    for n in (5, 20):
        stack = rng.normal(50.0, 3.0, (n, 100, 100)).astype(np.float32)
        result = clipped_mean(stack)
        pull = (result.mean - 50.0) / np.sqrt(9.0 / n)
        # 1e4 normal values: the variance of the pull is 1 +- 0.014; 5 sigma, false alarm 6e-7; clipping adds < 0.01.
        assert np.mean(pull**2) == pytest.approx(1.0, abs=0.08)
        assert np.median(result.variance) == pytest.approx(9.0 / n, rel=0.06)


def test_quantised_frames_without_noise_clip_nothing_but_the_odd_one() -> None:
    stack = np.full((5, 16, 300), 100.0, np.float32)
    result = clipped_mean(stack)
    assert np.all(result.mean == 100.0)
    assert np.all(result.count == 5)
    rng = np.random.default_rng(3)
    coarse = np.round(rng.normal(100.3, 0.3, (5, 64, 512))).astype(np.float32)
    result = clipped_mean(coarse)
    # Rounded values: their mean is that of all of them; clipping at 4 sigma keeps 100 and 101 alike.
    assert result.mean.mean() == pytest.approx(coarse.mean(), abs=2e-3)


def test_one_frame_and_no_value() -> None:
    stack = np.ones((1, 4, 5), np.float32)
    stack[0, 1, 1] = np.nan
    result = clipped_mean(stack)
    assert np.isnan(result.mean[1, 1])
    assert result.count[1, 1] == 0
    assert np.nansum(result.mean) == 19.0
    assert np.all(np.isnan(result.variance))


def test_blocks_of_rows_make_no_difference(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(2)
    stack = rng.normal(10.0, 1.0, (15, 70, 40)).astype(np.float32)
    whole = clipped_mean(stack, sigma=2.5)
    monkeypatch.setattr("hwpol.frames.combine.BLOCK_PIXELS", 120)
    np.testing.assert_array_equal(clipped_mean(stack, sigma=2.5).mean, whole.mean)
    monkeypatch.setattr("hwpol.frames.combine.STACK_BYTES", 15 * 40 * 4 * 7)
    asked = []

    def load(i: int, y0: int, y1: int) -> np.ndarray:
        asked.append((y0, y1))
        return stack[i, y0:y1]

    parts = combine_frames(load, 15, (70, 40))
    assert max(y1 - y0 for y0, y1 in asked) == 7
    np.testing.assert_array_equal(parts.mean, clipped_mean(stack).mean)
