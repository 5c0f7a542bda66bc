"""The batched linear solve against numpy and against published covariance."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import InputError
from hwpol.linear import invert, solve

#: float64 rounding through a well-conditioned normal matrix of a few parameters.
ROUNDING = 1e-10


@settings(deadline=None, max_examples=40)
@given(seed=st.integers(0, 2**31), n=st.integers(4, 20), p=st.integers(1, 3))
def test_agrees_with_numpy_lstsq(seed, n, p):
    rng = np.random.default_rng(seed)
    design, values, weights = rng.normal(size=(n, p)), rng.normal(size=n), rng.uniform(0.5, 2, n)
    fit = solve(design, values, weights)
    root = np.sqrt(weights)
    expected = np.linalg.lstsq(design * root[:, None], values * root, rcond=None)[0]
    assert np.allclose(fit.parameters, expected, rtol=1e-6, atol=ROUNDING)
    assert np.allclose(fit.covariance, np.linalg.inv(design.T @ (weights[:, None] * design)), rtol=1e-6, atol=ROUNDING)
    assert fit.dof == n - p


def test_many_systems_at_once_equal_one_by_one():
    rng = np.random.default_rng(5)
    design, values, weights = rng.normal(size=(7, 6, 2)), rng.normal(size=(7, 6)), rng.uniform(0.5, 2, (7, 6))
    together = solve(design, values, weights)
    for k in range(7):
        alone = solve(design[k], values[k], weights[k])
        assert np.allclose(together.parameters[k], alone.parameters, rtol=0, atol=ROUNDING)


def test_zero_weight_and_nan_leave_a_datum_out():
    design = np.array([[1.0, 0], [0, 1], [1, 1]])
    full = solve(design[:2], [1.0, 2.0], [1.0, 1.0])
    for value, weight in ((50.0, 0.0), (np.nan, 1.0)):
        fit = solve(design, [1.0, 2.0, value], [1.0, 1.0, weight])
        assert np.array_equal(fit.parameters, full.parameters)
        assert fit.dof == 0


def test_undetermined_is_nan_whatever_the_units():
    for scale in (1e-8, 1.0, 1e8):
        singular = np.array([[1.0, 1.0], [1.0, 1.0]]) * scale
        assert np.all(np.isnan(invert(singular)))
        good = np.diag([1.0, 1e-12]) * scale
        assert np.allclose(invert(good) @ good, np.eye(2), rtol=0, atol=ROUNDING)


def test_refuses_wrong_shapes_and_negative_weights():
    with pytest.raises(InputError, match="does not fit"):
        solve(np.ones((3, 2)), np.ones(4), np.ones(4))
    with pytest.raises(InputError, match="negative"):
        solve(np.ones((3, 1)), np.ones(3), [1, -1, 1])
