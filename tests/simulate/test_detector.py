"""Noise, digits, response and hits of the detector."""

import numpy as np
import pytest

from hwpol.simulate import Scenario
from hwpol.simulate.detector import _bent, chips, cosmic_rays, read_out
from hwpol.simulate.images import Layout
from hwpol.simulate.plan import Exposure

FALSE_ALARM = 3.29  # sigma: one in a thousand, two-sided


def _chip(tree):
    scenario = Scenario.from_dict(tree)
    return chips(scenario, Layout.of(scenario))[0], scenario.array


def _expose(tree, level, seed=1, seconds=10.0, hits=None):
    chip, array = _chip(tree)
    light = np.full((array.shape[1], array.shape[0]), float(level))
    one = Exposure(1, "science", 0, seconds=seconds)
    hits = np.zeros_like(light) if hits is None else hits
    return read_out(chip, light, one, array, hits, np.random.default_rng(seed)), chip


@pytest.mark.parametrize("level", [0.0, 30.0, 20000.0])
def test_mean_and_variance_of_pixels(small, level):
    """Mean: level; variance: Poisson + read noise + rounding (gain^2/12); false alarm 1 in 1000 each."""
    image, chip = _expose(small, level)
    electrons = (image.astype(float) - 1000.0) * 2.0
    n, variance = image.size, level + 4.0**2 + 2.0**2 / 12
    assert abs(electrons.mean() - level) < FALSE_ALARM * np.sqrt(variance / n)
    # The fourth moment of a Poisson sum adds level/n to the variance of the variance.
    spread = np.sqrt(2 * variance**2 / n + level / n)
    assert abs(electrons.var() - variance) < FALSE_ALARM * spread
    assert chip.gain == 2.0


def test_dark_grows_with_time_and_overscan_sees_no_light(small):
    small["array"]["dark"] = 5.0
    small["instrument"]["detector"].update(trim="[1:70,1:124]", overscan="[71:80,1:124]")
    small["instrument"]["beam"][0]["section"] = "[1:70,1:60]"
    small["instrument"]["beam"][1]["section"] = "[1:70,65:124]"
    image, _ = _expose(small, 200.0, seconds=100.0)
    electrons = (image.astype(float) - 1000) * 2
    assert electrons[:, :70].mean() == pytest.approx(700.0, abs=FALSE_ALARM * np.sqrt(716 / (70 * 124)))
    assert electrons[:, 70:].mean() == pytest.approx(0.0, abs=FALSE_ALARM * np.sqrt(17 / 1240))


def test_digits_end_at_sixteen_bits(small):
    image, _ = _expose(small, 5e5)
    assert image.dtype == np.uint16
    assert (image == 65535).all()


def test_linearity_polynomial_brings_the_truth_back():
    true = np.linspace(0, 60000, 50)
    for c in [(1.0, 1e-7), (1.02, -2e-7, 1e-12)]:
        raw = _bent(true, c)
        np.testing.assert_allclose(raw * np.polynomial.Polynomial(c)(raw), true, rtol=1e-12, atol=1e-9)


def test_bad_pixels_are_in_the_mask(small):
    small["array"].update(bad_pixels=10, bad_columns=[7])
    image, chip = _expose(small, 4000.0)
    assert chip.mask[:, 7].all()
    assert 124 + 9 <= chip.mask.sum() <= 124 + 10
    electrons = (image.astype(float) - 1000) * 2
    assert np.abs(electrons[chip.dead]).max() < 6 * 4.0
    assert (electrons[chip.mask == 0] > 3000).all()


def test_response_has_the_scatter_asked_for(small):
    small["array"]["pixel_response"] = 0.01
    chip, _ = _chip(small)
    n = chip.response.size
    assert chip.response.std() == pytest.approx(0.01, abs=FALSE_ALARM * 0.01 / np.sqrt(2 * n))


def test_hits_come_at_the_rate_asked_for():
    rng = np.random.default_rng(2)
    counts = [cosmic_rays((50, 60), 3.0, rng) for _ in range(400)]
    numbers = np.array([count for _, count in counts])
    assert numbers.mean() == pytest.approx(3.0, abs=FALSE_ALARM * np.sqrt(3.0 / 400))
    assert all(image.any() or count == 0 for image, count in counts[:20])


def test_hits_reach_the_digits(small):
    hits = np.zeros((124, 80))
    hits[30, 20] = 5000.0
    with_hit, _ = _expose(small, 100.0, hits=hits)
    without, _ = _expose(small, 100.0)
    difference = with_hit.astype(int) - without.astype(int)
    assert difference[30, 20] == pytest.approx(2500, abs=1)
    difference[30, 20] = 0
    assert not difference.any()


def test_two_arrays_have_their_own_gain_and_response(small):
    small["array"]["pixel_response"] = 0.01
    for number, beam in enumerate(small["instrument"]["beam"]):
        beam.update(extension=number + 1, section="[1:80,1:60]", gain=1.0 + number, offset=[0.0, 0.0])
    scenario = Scenario.from_dict(small)
    first, second = chips(scenario, Layout.of(scenario))
    assert (first.gain, second.gain) == (1.0, 2.0)
    assert not np.allclose(first.response, second.response)
