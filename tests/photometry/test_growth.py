from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from hwpol.errors import InputError
from hwpol.photometry.growth import encircled, frame_fwhm, plateau_start, resolve, shapes

SAMPLING = 0.01
"""A Gaussian of fwhm 2 px, averaged over pixels, is a Gaussian to 1 percent of its width only."""


@pytest.mark.parametrize("fwhm", [2.0, 4.0, 8.0])
def test_width_of_a_gaussian_is_its_own_and_the_pixels(star: Callable[..., np.ndarray], fwhm: float) -> None:
    shape = shapes(star(41, 0.3, -0.2, fwhm, "gauss")[None], np.array([0.3]), np.array([-0.2]))
    assert shape.fwhm[0] == pytest.approx(np.sqrt(fwhm**2 + 2.3548**2 / 12), rel=SAMPLING)
    assert shape.ellipticity[0] < SAMPLING


def test_ellipticity_and_direction(star: Callable[..., np.ndarray]) -> None:
    image = star(41, 0.0, 0.0, 6.0, "gauss", ellipticity=0.1)  # x squeezed: long along y
    shape = shapes(np.stack([image, image.T]), np.zeros(2), np.zeros(2))
    assert shape.ellipticity == pytest.approx([1 - 0.9 / 1.1] * 2, abs=SAMPLING)
    assert shape.angle == pytest.approx([90.0, 0.0], abs=0.1) or shape.angle == pytest.approx([90.0, 180.0], abs=0.1)


def test_what_is_not_peaked_has_no_width() -> None:
    stamps = np.stack([np.ones((21, 21)), -np.ones((21, 21)), np.full((21, 21), np.nan)])
    assert np.isnan(shapes(stamps, np.zeros(3), np.zeros(3)).fwhm).all()


def test_frame_fwhm_is_a_weighted_median() -> None:
    fwhm = np.array([[[3.0], [np.nan]], [[4.0], [np.nan]], [[9.0], [5.0]]])
    weight = np.array([[[1.0], [1.0]], [[5.0], [1.0]], [[1.0], [0.0]]])
    result = frame_fwhm(fwhm, weight)
    assert result[0] == 4.0
    assert np.isnan(result[1])


def test_resolve() -> None:
    assert resolve(6.0, [3.0, 4.0]).tolist() == [6.0, 6.0]
    assert resolve("2.0 fwhm", [3.0, 4.0]).tolist() == [6.0, 8.0]
    assert resolve(".5fwhm", 3.0) == 1.5
    assert resolve("7", 3.0) == 7.0
    for wrong in ("two fwhm", -1.0, "0", "nan", "fwhm"):
        with pytest.raises(InputError, match=r"photometry\.radius"):
            resolve(wrong, 3.0)
    with pytest.raises(InputError, match="not known"):
        resolve("2 fwhm", [3.0, np.nan])


def test_curve_of_growth_and_its_plateau() -> None:
    flux = np.array([[50.0, 1.0], [90.0, 1.0], [99.5, 1.0], [99.2, 1.0], [100.0, -1.0]])
    curve = encircled(flux)
    assert curve[:, 0].tolist() == [0.5, 0.9, 0.995, 0.992, 1.0]
    assert np.isnan(curve[:, 1]).all()
    assert plateau_start(curve[:, 0], 0.01) == 2
    assert plateau_start(curve[:, 0], 0.006) == 4
    assert plateau_start(curve[:, 0], 0.6) == 0
    assert plateau_start(curve, 0.1).tolist() == [1, 4]
