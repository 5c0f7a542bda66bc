"""Parallactic angles published with other libraries and in textbooks."""

from __future__ import annotations

import math

import pytest

from hwpol.frames.geometry import parallactic_angle

RAD = math.degrees(1.0)
# Rounding of an arc tangent in degrees: a few units in the last place of 180.
ROUNDING = 1e-13


@pytest.mark.parametrize(
    ("hour_angle", "dec", "latitude", "radians", "published_tolerance"),
    [
        # SOFA routine hd2pa, test suite (as carried by ERFA and sofars).
        (1.1, 1.2, 0.3, 1.906227428001995580, 1e-13),
        # SLALIB sla_PA, test suite (as carried by PAL).
        (-1.567, 1.5123, 0.987, -1.486288540423851, 1e-12),
        (0.0, 0.789, 0.789, 0.0, 0.0),
    ],
)
def test_test_suites_of_sofa_and_slalib(
    hour_angle: float, dec: float, latitude: float, radians: float, published_tolerance: float
) -> None:
    found = float(parallactic_angle(hour_angle * RAD, dec * RAD, latitude * RAD)) / RAD
    assert found == pytest.approx(radians, rel=0, abs=published_tolerance + 4e-16 if radians else 0.0)


def test_meeus_example_13b() -> None:
    """Venus from Washington: azimuth from south 68.0337 deg and altitude 15.1249 deg are published (Meeus, Astronomical
    Algorithms, example 13.b); sin(eta) = cos(latitude) sin(azimuth) / cos(dec) makes the angle of them."""
    hour_angle, dec, latitude = 64.352133, -(6 + 43 / 60 + 11.61 / 3600), 38 + 55 / 60 + 17 / 3600
    eta = float(parallactic_angle(hour_angle, dec, latitude))
    sine = math.cos(math.radians(latitude)) * math.sin(math.radians(68.0337)) / math.cos(math.radians(dec))
    # The azimuth is published to 5e-5 deg; d(eta) = cos(lat) cos(az) / (cos(dec) cos(eta)) d(az) = 0.43 d(az).
    assert eta == pytest.approx(math.degrees(math.asin(sine)), abs=0.43 * 5e-5)


@pytest.mark.parametrize(
    ("hour_angle", "dec", "latitude", "eta"),
    [
        # Limits: on the meridian south and north of the zenith, and at the east-west points of the equator.
        (0.0, 10.0, 45.0, 0.0),
        (0.0, 60.0, 45.0, 180.0),
        (90.0, 0.0, 45.0, 45.0),
        (-90.0, 0.0, 45.0, -45.0),
    ],
)
def test_limits(hour_angle: float, dec: float, latitude: float, eta: float) -> None:
    assert float(parallactic_angle(hour_angle, dec, latitude)) == pytest.approx(eta, abs=ROUNDING)
