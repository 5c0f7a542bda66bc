"""The simulator's matrices against a general-purpose library and printed vectors."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from py_pol import mueller as library
from py_pol import utils

from hwpol.simulate import mueller

ROUNDING = 1e-12  # a few dozen operations on numbers of order one
PRINTED = 6e-11  # half a unit of the tenth decimal, the last one printed
ANGLES = [-140.0, -22.5, 0.0, 11.0, 45.0, 61.7, 90.0, 171.0]

angles = st.floats(-360, 360)


def _library():
    return library.Mueller("part")


def _square(element):
    return np.asarray(element.M, dtype=float).reshape(4, 4)


@pytest.mark.parametrize("angle", ANGLES)
@pytest.mark.parametrize("retardance", [0.0, 90.0, 170.0, 180.0, 213.0])
def test_retarder_equals_library(angle, retardance):
    part = _library()
    part.retarder_linear(R=np.deg2rad(retardance), azimuth=np.deg2rad(angle))
    np.testing.assert_allclose(mueller.retarder(retardance, angle), _square(part), rtol=0, atol=ROUNDING)


@pytest.mark.parametrize("angle", ANGLES)
def test_analyser_equals_library(angle):
    part = _library()
    part.diattenuator_perfect(azimuth=np.deg2rad(angle))
    np.testing.assert_allclose(mueller.analyser(angle), _square(part), rtol=0, atol=ROUNDING)


@pytest.mark.parametrize("angle", ANGLES)
@pytest.mark.parametrize("strength", [0.0, 0.003, 0.4, 1.0])
def test_diattenuator_equals_library(angle, strength):
    part = _library()
    # p1, p2 are amplitude transmissions; intensities (1 + d)/2 and (1 - d)/2 have the mean 1/2.
    part.diattenuator_linear(p1=np.sqrt((1 + strength) / 2), p2=np.sqrt((1 - strength) / 2), azimuth=np.deg2rad(angle))
    np.testing.assert_allclose(mueller.diattenuator(strength, angle), 2 * _square(part), rtol=0, atol=ROUNDING)


@pytest.mark.parametrize("angle", ANGLES)
def test_turn_equals_library_rotation(angle):
    rotation = utils.rotation_matrix_Mueller(np.deg2rad(angle))
    # The library's matrix reads fixed light in axes turned by +angle.
    np.testing.assert_allclose(mueller.turned(-angle), np.squeeze(rotation), rtol=0, atol=ROUNDING)


def test_depolariser_and_mirror_equal_library():
    part = _library()
    part.depolarizer_diagonal(d=[0.9, 0.9, 1.0])
    np.testing.assert_allclose(mueller.depolariser(0.9), _square(part), rtol=0, atol=ROUNDING)
    part = _library()
    part.mirror()
    np.testing.assert_allclose(mueller.mirror(), _square(part), rtol=0, atol=ROUNDING)


def test_retarder_of_170_at_20_printed():
    """Values computed from the matrix in Hecht, Optics, problem 8.82, and equal to py_pol 1.3."""
    expected = [
        [1, 0, 0, 0],
        [0, 0.1799252482, 0.9773270317, -0.1116188970],
        [0, 0.9773270317, -0.1647330012, 0.1330222216],
        [0, 0.1116188970, -0.1330222216, -0.9848077530],
    ]
    np.testing.assert_allclose(mueller.retarder(170, 20), expected, rtol=0, atol=PRINTED)


def test_analyser_at_30_after_that_retarder_printed():
    """The same source; analyser matrix from the Handbook of Biomedical Optics, ch. 30."""
    chain = mueller.analyser(30) @ mueller.retarder(170, 20)
    np.testing.assert_allclose(2 * chain[0], [1, 0.9363526613, 0.346000552, 0.0593911746], rtol=0, atol=PRINTED)
    assert (chain @ [1, 0.03, -0.02, 0.001])[0] == pytest.approx(0.5106149799874373, abs=ROUNDING)


def test_half_wave_limits_by_hand():
    np.testing.assert_allclose(mueller.retarder(180, 0), np.diag([1, 1, -1, -1]), atol=ROUNDING)
    swap = [[1, 0, 0, 0], [0, 0, 1, 0], [0, 1, 0, 0], [0, 0, 0, -1]]
    np.testing.assert_allclose(mueller.retarder(180, 22.5), swap, atol=ROUNDING)


@given(first=angles, second=angles)
@settings(deadline=None, max_examples=50)
def test_turns_add(first, second):
    both = mueller.turned(first) @ mueller.turned(second)
    np.testing.assert_allclose(both, mueller.turned(first + second), atol=ROUNDING)


@given(angle=angles, retardance=angles, strength=st.floats(0, 0.99))
@settings(deadline=None, max_examples=50)
def test_parts_are_turned_by_turning_the_light(angle, retardance, strength):
    for part in (
        lambda a: mueller.retarder(retardance, a),
        lambda a: mueller.diattenuator(strength, a),
        mueller.analyser,
    ):
        np.testing.assert_allclose(
            part(angle), mueller.turned(angle) @ part(0.0) @ mueller.turned(-angle), atol=ROUNDING
        )


@given(angle=angles, strength=st.floats(0, 0.05))
@settings(deadline=None, max_examples=50)
def test_weak_diattenuator_departs_by_half_the_square(angle, strength):
    weak = mueller.weak_diattenuator(strength * np.cos(np.deg2rad(2 * angle)), strength * np.sin(np.deg2rad(2 * angle)))
    departure = np.abs(weak - mueller.diattenuator(strength, angle)).max()
    assert departure <= 1 - np.sqrt(1 - strength**2) + ROUNDING
