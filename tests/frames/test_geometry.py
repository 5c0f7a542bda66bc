"""Parallactic angles, chi, airmass and equinoxes against limits and a second road."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.frames.geometry import (
    airmass_of,
    parallactic_angle,
    position_angles,
    time_warning,
    to_icrs,
    zenith_angles,
)
from hwpol.instrument.description import Orientation, Site

SITE = Site(longitude=-70.7, latitude=-29.3, height=2300.0)
QUICK = settings(deadline=None, max_examples=30)
# Polar motion (0.5 arcsec) and diurnal aberration (0.3 arcsec) shift the pole and the target; both are left out of
# the short road and turn the angle by their size over sin(zenith distance) or cos(dec).
SMALL_SHIFT = 0.8 / 3600.0
# Mean sidereal time and the rigid rotation of the pole leave nutation (20 arcsec at most) and annual aberration
# (20.5 arcsec) out.
LARGE_SHIFT = 45.0 / 3600.0


def turned(angle: np.ndarray) -> np.ndarray:
    return (angle + 180.0) % 360.0 - 180.0


@pytest.mark.parametrize("site", [SITE, Site(17.0, 48.0), Site(25.0, -33.0), Site(-156.0, 20.0)])
def test_against_the_hour_angle_formula_with_precession(site: Site) -> None:
    """Second road: textbook sidereal time, linear precession, and the turn of the pole of date against ICRS."""
    rng = np.random.default_rng(5)
    mjd = rng.uniform(59000.0, 61500.0, 400)
    ra, dec = rng.uniform(0.0, 360.0, 400), rng.uniform(-60.0, 60.0, 400)
    centuries = (mjd - 51544.5) / 36525.0
    # Greenwich mean sidereal time, IAU 1982 in degrees (Meeus, Astronomical Algorithms, eq. 12.4).
    gmst = 280.46061837 + 360.98564736629 * (mjd - 51544.5) + 0.000387933 * centuries**2
    # Precession to first order in time: m = 4612.2, n = 2004.2 arcsec a century (from memory, IAU 1976).
    m, n = 4612.2 / 3600 * centuries, 2004.2 / 3600 * centuries
    r, d = np.radians(ra), np.radians(dec)
    ra_date, dec_date = ra + m + n * np.sin(r) * np.tan(d), dec + n * np.cos(r)
    north_of_date = n * np.sin(r) / np.cos(d)
    short = parallactic_angle(gmst + site.longitude - ra_date, dec_date, site.latitude) - north_of_date
    eta, altitude = zenith_angles(ra, dec, mjd, site)
    zenith_distance = np.radians(90.0 - altitude)
    allowed = LARGE_SHIFT / np.sin(zenith_distance) / np.cos(np.radians(np.abs(dec) + 0.5))
    # Second order of precession: (0.15 deg)^2 tan^2(60 deg) in radians, 0.002 deg.
    assert (np.abs(turned(eta - short)) < allowed + 0.003).all()


def test_upper_passage_north_of_the_zenith() -> None:
    mjd = 60000.0 + np.arange(1440) / 1440
    eta, altitude = zenith_angles(np.full(1440, 100.0), np.full(1440, 20.0), mjd, SITE)
    top = np.argmax(altitude)
    # Declination of date differs by precession, 22 yr x 20 arcsec x cos(100 deg) = 0.02 deg.
    assert altitude[top] == pytest.approx(90.0 - 49.3, abs=0.03)
    # From there the zenith lies to the south. Half a minute off the passage turns eta by
    # 0.125 deg cos(lat) / sin(z) = 0.14 deg; the pole of date stands 0.13 deg off ICRS north.
    assert abs(eta[top]) == pytest.approx(180.0, abs=0.28)


def test_unknown_places_give_nan_and_the_rest_is_the_same() -> None:
    ra, dec, mjd = np.array([10.0, np.nan, 10.0]), np.array([-30.0, 0.0, -30.0]), np.array([60000.0, 60000.0, np.nan])
    eta, altitude = zenith_angles(ra, dec, mjd, SITE)
    alone = zenith_angles([10.0], [-30.0], [60000.0], SITE)
    assert np.isnan(eta).tolist() == [False, True, True]
    assert (eta[0], altitude[0]) == (alone[0][0], alone[1][0])


@pytest.mark.parametrize("mjd", [20000.0, 70000.0, 95000.0])
def test_times_outside_the_earth_rotation_table_work_and_say_so(mjd: float) -> None:
    eta, altitude = zenith_angles([10.0], [-30.0], [mjd], SITE)
    assert np.isfinite([eta, altitude]).all()
    message = time_warning([60000.0, mjd])
    assert message is not None
    assert "UT1" in message


def test_no_warning_for_ordinary_times() -> None:
    assert time_warning([60000.0, np.nan]) is None
    assert time_warning([np.nan]) is None


@QUICK
@given(st.floats(-180.0, 180.0), st.floats(-89.0, 89.0), st.floats(-89.0, 89.0))
def test_sine_rule(hour_angle: float, dec: float, latitude: float) -> None:
    """cos(altitude) sin(eta) = cos(latitude) sin(H)."""
    h, d, phi = (math.radians(x) for x in (hour_angle, dec, latitude))
    sine = math.sin(phi) * math.sin(d) + math.cos(phi) * math.cos(d) * math.cos(h)
    eta = math.radians(float(parallactic_angle(hour_angle, dec, latitude)))
    cosine = math.sqrt(max(0.0, 1.0 - sine**2))
    # Rounding of 1 - sine^2 near the zenith: sqrt of a few 1e-16.
    assert cosine * math.sin(eta) == pytest.approx(math.cos(phi) * math.sin(h), abs=1e-7)


def test_position_angles() -> None:
    keyword, eta, altitude = np.array([np.nan, 30.0]), np.array([10.0, 10.0]), np.array([40.0, 40.0])
    cases = {Orientation(position_angle=5.0): 5.0}
    cases |= {Orientation(position_angle="parallactic", altitude=a): 10.0 + 40.0 * a for a in (0, 1, -1)}
    for orientation, chi in cases.items():
        assert position_angles(keyword, eta, altitude, orientation).tolist() == [chi, 30.0]


def test_airmass() -> None:
    # Secant of 0 and 60 deg, to the rounding of the sine.
    assert airmass_of([90.0, 30.0])[:2] == pytest.approx([1.0, 2.0], rel=1e-15)
    assert np.isnan(airmass_of([0.0, -5.0])).all()


def test_equinoxes() -> None:
    assert to_icrs(10.0, 20.0, "") == (10.0, 20.0)
    same = to_icrs(10.0, 20.0, "J2000.0")
    # FK5 and ICRS differ by some 0.02 arcsec.
    assert same == pytest.approx((10.0, 20.0), abs=0.1 / 3600)
    # 3C 273, B1950: 12h26m33.248s +2d19m43.3s; ICRS: 12h29m06.700s +2d03m08.6s (from memory, to 0.1 arcsec).
    found = to_icrs(186.638533, 2.328694, "B1950.0")
    assert found == pytest.approx((187.277917, 2.052389), abs=0.3 / 3600)


def test_three_hundred_frames_are_quick() -> None:
    zenith_angles([0.0], [0.0], [60000.0], SITE)
    mjd = 60000.0 + np.arange(300) / 1440
    start = time.process_time()
    zenith_angles(np.full(300, 10.0), np.full(300, -30.0), mjd, SITE)
    # 0.07 s of processor time measured; ten times that allows for a slow machine.
    assert time.process_time() - start < 0.7
