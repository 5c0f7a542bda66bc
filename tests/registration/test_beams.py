"""Partners between beams and the map between them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.registration.beams import beam_offsets, fit_beam_map, pick_target
from hwpol.registration.detection import Stars
from hwpol.registration.matching import Motion, search

Floats = NDArray[np.float64]


def listed(x: Floats, y: Floats, flux: Floats) -> Stars:
    """A star list without blemish, brightest first."""
    order = np.argsort(-flux)
    one = np.ones(len(x))
    return Stars(x[order], y[order], flux[order], flux[order] / 20, 4 * one, 0 * one, np.sqrt(flux[order]),
                 np.zeros(len(x), np.int64))  # fmt: skip


def distorted(xy: Floats, quadratic: float) -> Floats:
    """Offset, 1e-3 of scale and rotation, and quadratic terms (pixels at the edge of a 2000-pixel field)."""
    u = (xy - 1000) / 1000
    return xy + np.column_stack(
        [
            10 + u[:, 0] + 0.3 * u[:, 1] + quadratic * (u[:, 0] ** 2 + 0.5 * u[:, 0] * u[:, 1]),
            60 - 0.5 * u[:, 1] + quadratic * 0.4 * u[:, 1] ** 2,
        ]
    )


@pytest.mark.parametrize(("quadratic", "kind"), [(0.0, "affine"), (2.0, "quadratic")])
def test_map_to_a_twentieth_with_false_partners(quadratic: float, kind: str) -> None:
    rng = np.random.default_rng(41)
    xy = rng.uniform(0, 2000, (40, 2))
    other = distorted(xy, quadratic) + rng.normal(0, 0.03, (40, 2))
    other[:5] += rng.uniform(-4, 4, (5, 2))
    fitted = fit_beam_map(xy, other, np.full(40, 0.03))
    assert fitted.kind == kind
    test = rng.uniform(100, 1900, (200, 2))
    miss = np.column_stack(fitted.apply(test[:, 0], test[:, 1])) - distorted(test, quadratic)
    # 0.05 is what is asked for; the errors of 35 stars and 6 terms give 0.03 sqrt(6 / 35) = 0.012 and more at the rim.
    assert np.sqrt(np.mean(miss**2)) < 0.05
    assert fitted.rms == pytest.approx(0.03, rel=0.35)


@pytest.mark.parametrize("count", [1, 2, 4])
def test_few_stars_give_a_simple_map(count: int) -> None:
    rng = np.random.default_rng(42)
    xy = rng.uniform(0, 2000, (count, 2))
    fitted = fit_beam_map(xy, xy + np.array([10.0, 60.0]) + rng.normal(0, 0.02, (count, 2)), np.full(count, 0.02))
    assert fitted.kind in ("offset", "similarity")
    assert fitted.stars == count
    # Five standard errors of the mean.
    assert fitted.offset == pytest.approx((10.0, 60.0), abs=0.1)


def test_scale_and_rotation_from_four_stars() -> None:
    xy = np.array([[100.0, 150.0], [1800.0, 200.0], [1700.0, 1900.0], [250.0, 1600.0]])
    turned = xy + np.column_stack([12 + 2e-3 * xy[:, 0] - 1e-3 * xy[:, 1], 60 + 1e-3 * xy[:, 0] + 2e-3 * xy[:, 1]])
    fitted = fit_beam_map(xy, turned, np.full(4, 0.02))
    assert fitted.kind == "similarity"
    # Exact data: rounding.
    assert np.column_stack(fitted.apply(xy[:, 0], xy[:, 1])) == pytest.approx(turned, abs=1e-8)


@settings(deadline=None, max_examples=20)
@given(dx=st.floats(-500, 500), dy=st.floats(-500, 500))
def test_map_follows_a_shift_of_the_second_beam(dx: float, dy: float) -> None:
    rng = np.random.default_rng(43)
    xy = rng.uniform(0, 2000, (20, 2))
    other = distorted(xy, 1.0) + rng.normal(0, 0.02, (20, 2))
    a, b = fit_beam_map(xy, other), fit_beam_map(xy, other + np.array([dx, dy]))
    # The robust loop stops within 1e-3 of its weights; rounding otherwise.
    assert b.apply(900.0, 700.0)[0] - a.apply(900.0, 700.0)[0] == pytest.approx(dx, abs=1e-3)
    assert b.apply(900.0, 700.0)[1] - a.apply(900.0, 700.0)[1] == pytest.approx(dy, abs=1e-3)


def test_groups_keep_repeats_of_one_star_together() -> None:
    rng = np.random.default_rng(44)
    xy = np.repeat([[500.0, 700.0]], 30, axis=0) + rng.normal(0, 5, (30, 2))
    fitted = fit_beam_map(xy, xy + np.array([3.0, 60.0]) + rng.normal(0, 0.05, (30, 2)), groups=np.zeros(30))
    assert fitted.kind == "offset"
    assert fitted.stars == 1


def test_map_refuses_unequal_lists() -> None:
    with pytest.raises(InputError, match="expected the same"):
        fit_beam_map(np.zeros((3, 2)), np.zeros((4, 2)))


@pytest.mark.parametrize("count", [1, 3, 60])
def test_overlapping_beams_of_one_list(count: int) -> None:
    rng = np.random.default_rng(45)
    x, y = rng.uniform(20, 980, count), rng.uniform(20, 900, count)
    flux = 10 ** rng.uniform(4, 6, count)
    both = listed(np.r_[x, x + 7], np.r_[y, y + 69], np.r_[flux, 0.9 * flux])
    # The nominal offset is 11 pixels off.
    match = beam_offsets(both, [[0, 0], [0, 60]])
    assert match.offsets[1] == pytest.approx([7, 69], abs=0.2)
    first = {(round(a, 3), round(b, 3)) for a, b in zip(both.x[match.first], both.y[match.first], strict=True)}
    truth = {(round(a, 3), round(b, 3)) for a, b in zip(x, y, strict=True)}
    assert len(first & truth) >= 0.95 * count
    # Chance pairs: 60 stars, 4 pixels, a megapixel: 60 x 120 x 50 / 1e6 = 0.4 expected.
    assert len(first - truth) <= 3


def test_far_offset_and_missing_partners() -> None:
    rng = np.random.default_rng(46)
    x, y = rng.uniform(0, 1000, (2, 40))
    flux = 10 ** rng.uniform(4, 6, 40)
    seen = rng.uniform(size=40) < 0.7
    match = beam_offsets([listed(x, y, flux), listed(x[seen] + 55, y[seen] - 30, flux[seen])], [[0, 0], [0, 0]])
    assert match.offsets[1] == pytest.approx([55, -30], abs=0.1)
    assert abs(len(match.first) - seen.sum()) <= 2


def test_no_partner_keeps_the_nominal_offset() -> None:
    a = listed(np.array([100.0]), np.array([100.0]), np.array([1e4]))
    b = listed(np.array([900.0]), np.array([900.0]), np.array([1e4]))
    match = beam_offsets([a, b], [[0, 0], [5, 60]])
    assert match.offsets[1].tolist() == [5, 60]
    assert len(match.first) == 0


def test_target_by_hint_or_brightness() -> None:
    stars = listed(np.array([10.0, 50.0, 90.0]), np.array([10.0, 50.0, 90.0]), np.array([1e5, 1e4, 1e3]))
    assert pick_target(stars) == 0
    assert pick_target(stars, (55.0, 44.0)) == 1
    assert pick_target(stars, (200.0, 44.0)) is None
    assert pick_target(stars.select(np.zeros(3, bool))) is None


@settings(deadline=None, max_examples=15)
@given(
    seed=st.integers(0, 2**31), angle=st.floats(-5, 5), dx=st.floats(-300, 300), dy=st.floats(-300, 300),
    count=st.integers(12, 60),
)  # fmt: skip
def test_search_finds_any_motion(seed: int, angle: float, dx: float, dy: float, count: int) -> None:
    rng = np.random.default_rng(seed)
    first = rng.uniform(0, 2000, (count, 2))
    motion = Motion((dx, dy), angle, (1000.0, 1000.0))
    second = np.column_stack(motion.apply(first[:, 0], first[:, 1])) + rng.normal(0, 0.1, (count, 2))
    # A fifth is missing, a fifth is new; hot pixels of both lists stay where they are.
    second = np.concatenate([second[rng.permutation(count)[: int(0.8 * count)]], rng.uniform(0, 2000, (count // 5, 2))])
    hot = rng.uniform(0, 2000, (count // 6, 2))
    found, pairs = search(np.concatenate([first, hot]), np.concatenate([second, hot]), (1000.0, 1000.0))
    assert found is not None
    assert pairs >= 0.5 * count
    corners = np.array([[0.0, 0.0], [2000.0, 2000.0], [0.0, 2000.0]])
    miss = np.column_stack(found.apply(*corners.T)) - np.column_stack(motion.apply(*corners.T))
    # Ten stars of 0.1 pixel fix a corner to about 0.1; a wrong match misses by whole pixels.
    assert np.abs(miss).max() < 0.8
