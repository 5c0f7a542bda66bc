"""Where the target stood: parallactic angle, altitude, airmass and the position angle of the instrument."""

from __future__ import annotations

import contextlib
import math
import warnings
from collections.abc import Iterator

import astropy.units as u
import numpy as np
from astropy.coordinates import FK4, FK5, ICRS, AltAz, EarthLocation, SkyCoord
from astropy.time import Time
from astropy.utils import iers
from numpy.typing import ArrayLike, NDArray

from hwpol.instrument.description import Orientation, Site

# Short against the curvature of the sphere up to 0.1 deg from a pole (angle off by step x tan(dec) / 2, 0.08 deg
# there), long against the rounding of coordinates (1e-10 arcsec).
_STEP_DEG = 1.0 / 3600.0
_SIDEREAL_DEG_PER_SECOND = 15.041 / 3600.0
_UT1_BOUND_SECONDS = 0.9  # |UT1 - UTC| is kept below this by leap seconds


@contextlib.contextmanager
def _offline() -> Iterator[None]:
    """Earth-rotation tables as bundled: no download, no age limit, no refusal beyond their end, no chatter."""
    with (
        iers.conf.set_temp("auto_download", False),
        iers.conf.set_temp("auto_max_age", None),
        iers.conf.set_temp("iers_degraded_accuracy", "ignore"),
        warnings.catch_warnings(),
    ):
        warnings.simplefilter("ignore")
        yield


def parallactic_angle(hour_angle: ArrayLike, dec: ArrayLike, latitude: ArrayLike) -> NDArray[np.float64]:
    """Position angle of the zenith at a target, from the hour angle alone.

    Parameters
    ----------
    hour_angle, dec, latitude : array_like
        Degrees; hour angle positive west of the meridian, dec and pole of date.

    Returns
    -------
    ndarray
        Degrees in (-180, 180], from the north of date through east; 0 where the target stands in the zenith.

    Notes
    -----
    tan eta = cos(phi) sin(H) / (sin(phi) cos(dec) - cos(phi) sin(dec) cos(H)); Meeus, Astronomical Algorithms,
    chapter 14; SOFA routine hd2pa.
    """
    h, d, phi = (np.radians(np.asarray(angle, dtype=float)) for angle in (hour_angle, dec, latitude))
    east = np.cos(phi) * np.sin(h)
    north = np.sin(phi) * np.cos(d) - np.cos(phi) * np.sin(d) * np.cos(h)
    return np.degrees(np.arctan2(east, north))


def zenith_angles(
    ra: ArrayLike, dec: ArrayLike, mjd: ArrayLike, site: Site
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Parallactic angle relative to ICRS north, and altitude.

    Parameters
    ----------
    ra, dec : array_like, shape (frame,)
        ICRS, degrees.
    mjd : array_like, shape (frame,)
        Middle of the exposure, UTC.
    site : Site

    Returns
    -------
    eta : ndarray, shape (frame,)
        Position angle (deg, in (-180, 180], north through east) of the direction to the zenith.
    altitude : ndarray, shape (frame,)
        Degrees above the horizon, without refraction.
        Both NaN where a coordinate or the time is NaN.

    Notes
    -----
    The target is taken to the horizontal frame (precession, nutation, aberration and Earth rotation as astropy has
    them), moved 1 arcsec up, and taken back to ICRS; eta is the position angle of that small step.
    """
    ra, dec, mjd = np.broadcast_arrays(*(np.asarray(value, dtype=float) for value in (ra, dec, mjd)))
    eta, altitude = np.full(ra.shape, math.nan), np.full(ra.shape, math.nan)
    good = np.isfinite(ra) & np.isfinite(dec) & np.isfinite(mjd)
    if not good.any():
        return eta, altitude
    with _offline():
        place = EarthLocation.from_geodetic(site.longitude * u.deg, site.latitude * u.deg, site.height * u.m)
        horizontal = AltAz(obstime=Time(mjd[good], format="mjd", scale="utc"), location=place)
        target = SkyCoord(ra[good], dec[good], unit="deg", frame="icrs")
        seen = target.transform_to(horizontal)
        low = seen.alt.deg
        step = np.minimum(_STEP_DEG, (90.0 - low) / 2.0)
        above = SkyCoord(az=seen.az, alt=(low + step) * u.deg, frame=horizontal).transform_to(ICRS())
        angle = target.position_angle(above).wrap_at(180 * u.deg).deg
    eta[good] = np.where(step > 0, angle, 0.0)
    altitude[good] = low
    return eta, altitude


def airmass_of(altitude: ArrayLike) -> NDArray[np.float64]:
    """Secant of the zenith distance; NaN at and below the horizon."""
    up = np.sin(np.radians(np.asarray(altitude, dtype=float)))
    return np.divide(1.0, up, out=np.full(up.shape, math.nan), where=up > 0)


def position_angles(
    keyword: ArrayLike, eta: ArrayLike, altitude: ArrayLike, orientation: Orientation
) -> NDArray[np.float64]:
    """Chi, the position angle (deg) of the instrument's +Q axis on the sky.

    Parameters
    ----------
    keyword : array_like, shape (frame,)
        Chi from the header, NaN where no keyword gives it.
    eta, altitude : array_like, shape (frame,)
        As of `zenith_angles`.
    orientation : Orientation
        Gives the rest: a constant, or for "parallactic" chi = eta + `orientation.altitude` x altitude.
    """
    header = np.asarray(keyword, dtype=float)
    if isinstance(orientation.position_angle, str):
        rest = np.asarray(eta, dtype=float) + orientation.altitude * np.asarray(altitude, dtype=float)
    else:
        rest = np.full(header.shape, float(orientation.position_angle))
    return np.where(np.isfinite(header), header, rest)


def to_icrs(ra: ArrayLike, dec: ArrayLike, equinox: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean coordinates of an equinox ("J2000.0", "B1950.0", "J2026.3"; "" is ICRS) as ICRS, degrees."""
    ra, dec = np.asarray(ra, dtype=float), np.asarray(dec, dtype=float)
    if not equinox:
        return ra, dec
    frame = FK4(equinox=equinox) if equinox.startswith("B") else FK5(equinox=equinox)
    with _offline():
        turned = SkyCoord(ra, dec, unit="deg", frame=frame).transform_to(ICRS())
    return turned.ra.deg, turned.dec.deg


def time_warning(mjd: ArrayLike) -> str | None:
    """What is lost where UT1 - UTC is not known at some of these times (MJD, UTC); None where all are covered.

    Without it UT1 is taken equal to UTC, off by up to 0.9 s: the hour angle is then off by up to 13.5 arcsec, and
    eta by no more than that / sin(zenith distance).
    """
    times = np.atleast_1d(np.asarray(mjd, dtype=float))
    times = times[np.isfinite(times)]
    if times.size == 0:
        return None
    with _offline():
        table = iers.earth_orientation_table.get()
        first, last = float(table["MJD"][0].value), float(table["MJD"][-1].value)
    if times.min() >= first and times.max() <= last:
        return None
    turn = _UT1_BOUND_SECONDS * _SIDEREAL_DEG_PER_SECOND
    return (
        f"times outside the bundled Earth-rotation table (MJD {first:.0f} to {last:.0f}): UT1 is taken equal to UTC, "
        f"so parallactic angles can be off by about {turn:.3f} deg at 60 deg from the zenith and "
        f"{turn / math.sin(math.radians(2.0)):.1f} deg at 2 deg from it"
    )
