"""Plotting helpers: what goes in comes out on the axes, in the stated units and directions."""

from __future__ import annotations

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Circle, Ellipse

from hwpol.report import figures
from hwpol.report.field import sky_on_pixels
from hwpol.report.figures.maps import stretch
from hwpol.report.style import inline_svg, settings


@pytest.fixture
def axes() -> Axes:
    return Figure().subplots()


def test_q_u_plane_draws_percent_and_the_stated_ellipse(axes: Axes) -> None:
    covariance = np.array([[[4e-8, 0.0], [0.0, 1e-8]]])
    assert figures.q_u_plane(axes, [0.03], [-0.01], covariance) is axes
    np.testing.assert_allclose(axes.lines[0].get_xydata(), [[3.0, -1.0]])
    (patch,) = axes.patches
    assert isinstance(patch, Ellipse)
    # Two-dimensional normal: radius^2 = -2 ln(1 - 0.6827) = 2.2958, closed form.
    sides = sorted([patch.width, patch.height])
    np.testing.assert_allclose(sides, [2 * 0.01 * 2.2958**0.5, 2 * 0.02 * 2.2958**0.5], rtol=1e-4)


def test_ellipse_holds_its_share(axes: Axes) -> None:
    rng = np.random.default_rng(3)
    covariance = np.array([[3e-8, 1.2e-8], [1.2e-8, 1e-8]])
    figures.q_u_plane(axes, [0.0], [0.0], covariance[None])
    draws = 100 * rng.multivariate_normal([0, 0], covariance, 20000)
    patch = axes.patches[0]
    turned = draws @ np.array([[np.cos(a := np.radians(patch.angle)), -np.sin(a)], [np.sin(a), np.cos(a)]])
    inside = np.mean((turned[:, 0] / patch.width * 2) ** 2 + (turned[:, 1] / patch.height * 2) ** 2 < 1)
    # Binomial, 20000 draws: five standard deviations are 0.0165 (false alarm 6e-7).
    assert inside == pytest.approx(0.6827, abs=0.0165)


def test_hollow_points_are_empty(axes: Axes) -> None:
    figures.q_u_plane(axes, [0.0, 0.1], [0.0, 0.1], hollow=[False, True])
    faces = [line.get_markerfacecolor() for line in axes.lines[:2]]
    assert faces[1] == "white" != faces[0]


@pytest.mark.parametrize(
    ("theta", "direction"), [(0.0, (0.0, 1.0)), (90.0, (-1.0, 0.0)), (45.0, (-(0.5**0.5), 0.5**0.5))]
)
def test_vectors_turn_from_north_through_east(axes: Axes, theta: float, direction: tuple[float, float]) -> None:
    # North up and east to the left: as the sky is seen.
    axes.set_xlim(0, 100)
    axes.set_ylim(0, 100)
    figures.vector_map(axes, [50.0], [50.0], [0.02], [0.001], [theta])
    (start, end), *_ = axes.collections[-1].get_segments()
    step = end - start
    assert abs(step @ direction) / np.hypot(*step) == pytest.approx(1.0, abs=1e-12)
    np.testing.assert_allclose((start + end) / 2, [50.0, 50.0])


def test_vector_length_follows_p_and_weak_ones_have_none(axes: Axes) -> None:
    axes.set_xlim(0, 100)
    axes.set_ylim(0, 100)
    figures.vector_map(axes, [20.0, 50.0, 80.0], [50.0] * 3, [0.01, 0.03, 0.001], [0.001] * 3, [0.0, 0.0, 0.0])
    lengths = [float(np.hypot(*(end - start))) for start, end in axes.collections[-1].get_segments()]
    assert len(lengths) == 2
    assert lengths[1] / lengths[0] == pytest.approx(3.0)


@pytest.mark.parametrize("mirrored", [False, True])
def test_sky_on_pixels_recovers_scale_turn_and_mirror(mirrored: bool) -> None:
    rng = np.random.default_rng(1)
    x, y = rng.uniform(0, 400, (2, 30))
    turn = np.radians(25.0)
    north = np.array([np.sin(turn), np.cos(turn)])
    east = np.array([-np.cos(turn), np.sin(turn)]) * (-1 if mirrored else 1)
    scale = 0.6
    offsets = scale * (np.stack([x, y], axis=-1) - 200)
    dec = -24.0 + offsets @ north / 3600
    ra = 112.0 + offsets @ east / 3600 / np.cos(np.radians(-24.0))
    matrix = sky_on_pixels(x, y, ra, dec)
    assert matrix is not None
    # cos(dec) changes by 2e-4 over the 4 arcmin field: the neglected term.
    np.testing.assert_allclose(matrix, np.stack([north, east], axis=-1) / scale, atol=2e-3)


def test_sky_on_pixels_refuses_equal_coordinates() -> None:
    x = np.arange(6.0)
    assert sky_on_pixels(x, x**2, np.full(6, 112.0), np.full(6, -24.0)) is None


def test_stamp_marks_aperture_and_ring(axes: Axes) -> None:
    figures.stamp(axes, np.ones((9, 9)), (10, 20), (14.0, 24.0), 2.0, (3.0, 4.0))
    circles = [patch for patch in axes.patches if isinstance(patch, Circle)]
    assert [circle.radius for circle in circles] == [2.0, 3.0, 4.0]
    assert circles[0].center == (14.0, 24.0)
    assert axes.images[0].get_extent() == [9.5, 18.5, 19.5, 28.5]


def test_stretch_is_bounded_and_keeps_order() -> None:
    values = np.sort(np.random.default_rng(0).normal(100, 5, 400)).reshape(20, 20)
    shown = stretch(values)
    assert shown.min() == 0.0
    assert shown.max() == 1.0
    assert np.all(np.diff(shown.ravel()) >= 0)
    assert np.all(np.isfinite(stretch(np.full((4, 4), np.nan))))


def test_radius_curve_starts_from_the_chosen_radius(axes: Axes) -> None:
    figures.radius_curve(axes, [4.0, 6.0, 8.0], [0.01, 0.02, 0.03], [0, 0, 0], [1e-3] * 3, [1e-3] * 3, 6.0)
    q = axes.containers[0].lines[0].get_ydata()
    np.testing.assert_allclose(q, [-1.0, 0.0, 1.0])


def test_long_series_are_stored_as_pixels(axes: Axes) -> None:
    figures.time_series(axes, np.arange(2000.0), np.arange(2000.0))
    assert axes.lines[0].get_rasterized()


def test_helpers_leave_global_settings_alone(axes: Axes) -> None:
    import matplotlib as mpl

    before = dict(mpl.rcParams)
    figures.dot_rows(axes, ["a", "b"], [1.0, 2.0], [0.1, 0.2])
    figures.modulation(axes, [0.0, 45.0], [0.1, -0.1], [0.01, 0.01])
    assert dict(mpl.rcParams) == before


def test_inline_svg_ids_are_its_own() -> None:
    with settings():
        texts = []
        for name in ("a", "b"):
            figure = Figure()
            figures.dot_rows(figure.subplots(), ["x"], [1.0])
            texts.append(str(inline_svg(figure, name, 'say "no" <b>')))
    ids = [{part.split('"')[0] for part in text.split(' id="')[1:]} for text in texts]
    assert ids[0]
    assert not ids[0] & ids[1]
    assert "&lt;b&gt;" in texts[0]
    assert "http" not in texts[0]
