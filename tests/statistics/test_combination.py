"""Combination of repeats: means, robustness, internal and external errors, variability."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from hwpol.errors import InputError
from hwpol.statistics import adopt, combine, variability


def repeats(sets: int, number: int, excess: float = 1.0, seed: int = 61) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Repeats of (0, 0) with covariances of all shapes, and errors larger than they say by ``excess``."""
    rng = np.random.default_rng(seed)
    a = rng.normal(size=(sets, number, 2, 2))
    covariance = a @ np.swapaxes(a, -1, -2) + 0.5 * np.eye(2)
    z = np.einsum("...ij,...j->...i", np.linalg.cholesky(covariance), rng.normal(size=(sets, number, 2))) * excess
    return z[..., 0], z[..., 1], covariance


def unit(*shape: int) -> np.ndarray:
    return np.broadcast_to(np.eye(2), (*shape, 2, 2))


def test_mean_is_the_generalised_least_squares_one() -> None:
    q, u, covariance = repeats(1, 3)
    found = combine(q[0], u[0], covariance[0])
    weights = np.linalg.inv(covariance[0])
    internal = np.linalg.inv(weights.sum(axis=0))
    mean = internal @ sum(w @ z for w, z in zip(weights, np.stack([q[0], u[0]], -1), strict=True))
    residual = np.stack([q[0], u[0]], -1) - mean
    np.testing.assert_allclose([found.q, found.u], mean, rtol=1e-10)
    np.testing.assert_allclose(found.covariance, internal, rtol=1e-10)
    assert found.chi2 == pytest.approx(np.einsum("ni,nij,nj->", residual, weights, residual), rel=1e-10)
    assert found.dof == 4


def test_equal_repeats_give_the_textbook_scatter() -> None:
    z = np.random.default_rng(62).normal(size=(2, 6))
    found = combine(z[0], z[1], unit(6))
    assert found.kept.all()
    np.testing.assert_allclose(found.scatter_covariance, np.cov(z) / 6, rtol=1e-10)


def test_one_outlier_of_sixteen() -> None:
    """At 20 sigma it pulls the mean by under 0.1 sigma of a repeat, wherever it lies: here not at all."""
    rng = np.random.default_rng(63)
    q, u = rng.normal(size=(2, 2000, 16))
    clean = combine(q, u, unit(2000, 16))
    phase = rng.uniform(0, 2 * np.pi, 2000)
    q[:, 5] += 20 * np.cos(phase)
    u[:, 5] += 20 * np.sin(phase)
    spoilt = combine(q, u, unit(2000, 16))
    assert not spoilt.kept[:, 5].any()
    pull = np.hypot(spoilt.q - clean.q, spoilt.u - clean.u)
    # Losing one of 16 good repeats moves the mean by 0.06 sigma on the average; the pull is what is common to all.
    along = (spoilt.q - clean.q) * np.cos(phase) + (spoilt.u - clean.u) * np.sin(phase)
    assert abs(along.mean()) < 0.01
    assert np.median(pull) < 0.1


@pytest.mark.parametrize("number", [4, 6, 16])
def test_outlier_in_small_sets(number: int) -> None:
    rng = np.random.default_rng(64)
    q, u = rng.normal(size=(2, 500, number))
    q[:, 0] += 25
    found = combine(q, u, unit(500, number))
    assert (~found.kept[:, 0]).mean() > 0.97
    assert found.kept[:, 1:].mean() > 0.99


@pytest.mark.parametrize("number", [2, 3])
def test_sets_too_small_to_judge_are_left_alone(number: int) -> None:
    q = np.zeros(number)
    q[0] = 100.0
    assert combine(q, np.zeros(number), unit(number)).kept.all()


@pytest.mark.parametrize("excess", [1.0, 2.5, 20.0])
@pytest.mark.parametrize("number", [4, 8, 32])
def test_overall_scatter_rejects_nothing(excess: float, number: int) -> None:
    q, u, covariance = repeats(2000, number, excess)
    losing = ~combine(q, u, covariance).kept.all(axis=1)
    # 0.5 to 1 percent by construction; 2 is out of reach of the 2000 sets' own scatter of 0.2.
    assert losing.mean() < 0.02


@pytest.mark.parametrize("number", [2, 3, 4, 8])
def test_chi2_and_scatter_are_true(number: int) -> None:
    """False alarm under 1 in 1000 each: chi2 by Kolmogorov-Smirnov, scatter within 4 of its standard errors."""
    q, u, covariance = repeats(6000, number, seed=65)
    found = combine(q, u, covariance)
    assert stats.kstest(found.chi2, stats.chi2(2 * number - 2).cdf).pvalue > 0.001
    scatter = found.scatter_covariance / found.covariance[:, :1, :1]
    for axis in (0, 1):
        ratio = scatter[:, axis, axis] * found.covariance[:, 0, 0] / found.covariance[:, axis, axis]
        assert ratio.mean() == pytest.approx(1.0, abs=4 * ratio.std() / np.sqrt(ratio.size))


def test_unusable_repeats_are_not_kept() -> None:
    q, u, covariance = repeats(3, 6, seed=66)
    q[0, 1], u[1, 2], covariance[2, 3] = np.nan, np.inf, 0.0
    found = combine(q, u, covariance)
    expected = np.ones((3, 6), dtype=bool)
    expected[[0, 1, 2], [1, 2, 3]] = False
    np.testing.assert_array_equal(found.kept, expected)
    alone = combine(np.delete(q[0], 1), np.delete(u[0], 1), np.delete(covariance[0], 1, axis=0))
    np.testing.assert_allclose(found.q[0], alone.q, rtol=1e-10)
    np.testing.assert_allclose(found.scatter_covariance[0], alone.scatter_covariance, rtol=1e-10)
    none = combine([np.nan, np.nan], [0.0, 0.0], unit(2))
    assert np.isnan([none.q, none.u, none.chi2]).all()
    assert none.dof == 0
    single = combine([0.5], [0.25], unit(1))
    assert (single.q, single.u, single.chi2, single.dof) == (0.5, 0.25, 0.0, 0)
    assert np.isnan(single.scatter_covariance).all()
    assert combine(np.empty((2, 0)), np.empty((2, 0)), unit(2, 0)).q.shape == (2,)
    with pytest.raises(InputError, match="no axis of repeats"):
        combine(0.1, 0.1, np.eye(2))


@settings(deadline=None, max_examples=30)
@given(seed=st.integers(0, 1000), number=st.integers(2, 12), turn=st.floats(0, 6.3))
def test_order_is_irrelevant_and_rotation_commutes(seed: int, number: int, turn: float) -> None:
    q, u, covariance = (part[0] for part in repeats(1, number, seed=seed))
    first = combine(q, u, covariance)
    order = np.random.default_rng(seed).permutation(number)
    second = combine(q[order], u[order], covariance[order])
    np.testing.assert_allclose([first.q, first.u], [second.q, second.u], rtol=0, atol=1e-10)
    np.testing.assert_array_equal(first.kept[order], second.kept)
    rotation = np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]])
    z = rotation @ np.stack([q, u])
    turned = combine(z[0], z[1], rotation @ covariance @ rotation.T)
    if (turned.kept == first.kept).all():
        np.testing.assert_allclose([turned.q, turned.u], rotation @ [first.q, first.u], rtol=0, atol=1e-9)
        rotated = rotation @ first.scatter_covariance @ rotation.T
        np.testing.assert_allclose(turned.scatter_covariance, rotated, rtol=1e-7, atol=1e-10)


def test_masking_never_shrinks_the_internal_error() -> None:
    q, u, covariance = (part[0] for part in repeats(1, 8, seed=67))
    full = combine(q, u, covariance).covariance
    q[2] = np.nan
    assert np.linalg.eigvalsh(combine(q, u, covariance).covariance - full).min() > 0


def test_adopting_the_scatter() -> None:
    """Clean data keep the counts' error, an excess of 2.5 is seen, and the pulls stay near one."""
    for number, seen in ((4, 0.8), (8, 0.97), (16, 0.999)):
        q, u, covariance = repeats(4000, number, 1.0, seed=68)
        c = combine(q, u, covariance)
        clean, believed = adopt(c.covariance, c.scatter_covariance, c.chi2, c.dof)
        # 1 percent by construction, standard error 0.16.
        assert believed.mean() < 0.017
        np.testing.assert_array_equal(clean[~believed], c.covariance[~believed])
        c = combine(2.5 * q, 2.5 * u, covariance)
        grown, believed = adopt(c.covariance, c.scatter_covariance, c.chi2, c.dof)
        assert believed.mean() > seen
        assert np.linalg.eigvalsh(grown - c.covariance).min() > -1e-12
        z = np.stack([c.q, c.u], -1)
        inside = np.einsum("mi,mij,mj->m", z, np.linalg.inv(grown), z) < 2 * np.log(2)
        bare = np.einsum("mi,mij,mj->m", z, np.linalg.inv(c.covariance), z) < 2 * np.log(2)
        # Half should lie inside; the counts' ellipse holds a tenth.
        assert inside.mean() > 0.38
        assert bare.mean() < 0.15


def test_adopting_follows_the_direction_of_the_scatter() -> None:
    """Scatter along q alone widens the error along q alone once the repeats are many."""
    q, u = np.random.default_rng(69).normal(size=(2, 200))
    c = combine(5 * q, u, unit(200))
    grown, believed = adopt(c.covariance, c.scatter_covariance, c.chi2, c.dof)
    assert believed
    assert grown[0, 0] * 200 == pytest.approx(25, rel=0.25)
    assert grown[1, 1] * 200 == pytest.approx(1.1, abs=0.25)


def test_adopting_without_repeats_keeps_the_counts() -> None:
    c = combine([0.1], [0.2], unit(1))
    grown, believed = adopt(c.covariance, c.scatter_covariance, c.chi2, c.dof)
    assert not believed
    np.testing.assert_array_equal(grown, np.eye(2))
    nothing, believed = adopt(np.full((2, 2), np.nan), np.full((2, 2), np.nan), np.nan, 0)
    assert np.isnan(nothing).all()
    assert not believed


def test_variability_without_shared_errors_is_the_chi2_of_the_mean() -> None:
    q, u, covariance = (part[0] for part in repeats(1, 7, seed=70))
    found, mean = variability(q, u, covariance), combine(q, u, covariance)
    assert (found.chi2, found.dof) == (pytest.approx(float(mean.chi2), rel=1e-9), 12)
    assert found.p_value == pytest.approx(stats.chi2.sf(found.chi2, 12), rel=1e-9)


def test_variability_with_shared_errors() -> None:
    """A calibration in common within a night: uniform with it, falsely variable without. False alarm 1 in 1000."""
    rng = np.random.default_rng(71)
    shared, group = np.array([[[4.0, 1.0], [1.0, 3.0]], [[2.0, 0.0], [0.0, 5.0]]]), np.array([0, 0, 0, 1, 1, 1])
    q, u, covariance = repeats(1000, 6, seed=71)
    chances, naive = [], []
    for row in range(1000):
        offset = np.array([rng.multivariate_normal([0, 0], block) for block in shared])[group]
        series = q[row] + offset[:, 0], u[row] + offset[:, 1], covariance[row]
        chances.append(variability(*series, shared, group).p_value)
        naive.append(variability(*series).p_value)
    assert stats.kstest(chances, "uniform").pvalue > 0.001
    assert np.mean(np.array(naive) < 0.01) > 0.1


def test_one_shared_error_for_all_does_not_matter() -> None:
    q, u, covariance = (part[0] for part in repeats(1, 5, seed=72))
    common = variability(q, u, covariance, 9 * np.eye(2)[None], np.zeros(5, dtype=int))
    assert common.chi2 == pytest.approx(variability(q, u, covariance).chi2, rel=1e-9)


def test_a_source_that_varies_is_seen_and_gaps_are_skipped() -> None:
    q, u, covariance = (part[0] for part in repeats(1, 9, seed=73))
    q = q + np.linspace(0, 15, 9)
    q[4] = np.nan
    found = variability(q, u, covariance)
    assert found.dof == 14
    assert found.p_value < 1e-4
    assert np.isnan(variability([1.0, np.nan], [1.0, 1.0], unit(2)).p_value)


@pytest.mark.parametrize(
    ("shared", "group", "words"),
    [
        (np.eye(2)[None], None, "belong together"),
        (np.eye(2), np.zeros(3, dtype=int), "expected"),
        (np.eye(2)[None], np.array([0, 0, 1]), "group holds 0 to 1: expected 0 to 0"),
    ],
)
def test_variability_refusals(shared: np.ndarray, group: np.ndarray | None, words: str) -> None:
    with pytest.raises(InputError, match=words):
        variability(np.zeros(3), np.zeros(3), unit(3), shared, group)


def test_one_repeat_that_outweighs_the_rest_leaves_no_scatter() -> None:
    """What the scatter says of the mean is then lost in rounding: unknown, and the counts' error stays."""
    covariance = np.array([1e-17, 1.0, 1.0])[:, None, None] * np.eye(2)
    c = combine([1.0, 1.5, 0.2], [0.0, 0.3, -0.4], covariance)
    assert np.isnan(c.scatter_covariance).all()
    assert not adopt(c.covariance, c.scatter_covariance, c.chi2, c.dof)[1]
    # Nor is a scatter set against counts that have no error.
    assert not adopt(np.zeros((2, 2)), np.eye(2), 100.0, 2)[1]
