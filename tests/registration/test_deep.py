"""Stars that only the sharpest frames tell apart."""

from types import SimpleNamespace

import numpy as np
import pytest

from hwpol.registration import deeper_stars, register

#: A star, its companion of a fifth of the light 11 pixels away, and two others; pixels of the first frame.
X = np.array([100.0, 108.0, 60.0, 180.0])
Y = np.array([70.0, 77.6, 110.0, 40.0])
FLUX = np.array([4e5, 8e4, 2e5, 1e5])


def visit(fields: SimpleNamespace, fwhm: list[float], seed: int = 4) -> SimpleNamespace:
    """Frames that drift, of seeing `fwhm`, first the first."""
    k = np.arange(len(fwhm))
    return fields.Visit(
        np.random.default_rng(seed), shape=(260, 240), x=X, y=Y, flux=FLUX, frames=len(fwhm),
        shift=np.column_stack([1.3 * k, -0.7 * k]), fwhm=fwhm, profile="moffat", rotation=0.05 * k,
        beam_of=[lambda a, b: (a, b), lambda a, b: (a + 1.2, b + 129.3)], clouds=1.0 - 0.1 * (k % 3),
    )  # fmt: skip


@pytest.mark.parametrize("fwhm", [[8.0, 7.6, 4.6, 4.4, 4.5, 6.0], [8.0, 4.4], [4.4, 6.0, 7.0, 8.0]])
def test_companion_that_the_first_frame_blends(fields: SimpleNamespace, fwhm: list[float]) -> None:
    """It is found where it was in the first frame, with its share of the light; nothing else is added."""
    night = visit(fields, fwhm)
    placement = register(night.images, len(fwhm), 2, nominal_offsets=[(0, 0), (0, 130)])
    stars = deeper_stars(placement, night.images, (0, 0), (None, None))
    assert len(stars) == len(X)
    distance = np.hypot(stars.x[:, None] - X, stars.y[:, None] - Y)
    nearest = distance.argmin(axis=0)
    assert distance.min(axis=0).max() < 0.3  # the brighter star's wing draws the companion
    assert stars.flux[nearest] / stars.flux[nearest[0]] == pytest.approx(FLUX / FLUX[0], rel=0.3)


def test_known_stars_stay_first(fields: SimpleNamespace) -> None:
    """Those of the placement keep their order and places: the target's number still names it."""
    night = visit(fields, [8.0, 4.5, 4.4, 4.6])
    placement = register(night.images, 4, 2, nominal_offsets=[(0, 0), (0, 130)])
    stars = deeper_stars(placement, night.images, (0, 0), (None, None))
    known = placement.stars
    assert len(stars) > len(known)
    assert np.array_equal(stars.x[: len(known)], known.x)


def test_no_width_no_search(fields: SimpleNamespace) -> None:
    """A field without stars is handed back as it is."""
    empty = fields.Visit(np.random.default_rng(1), shape=(80, 80), x=[40.0], y=[20.0], flux=[0.0], frames=3)
    placement = register(empty.images, 3, 2, nominal_offsets=[(0, 0), (3, 62)])
    assert len(deeper_stars(placement, empty.images, (0, 0), (None, None))) == 0
