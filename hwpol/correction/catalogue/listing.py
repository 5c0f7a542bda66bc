"""Lists the standards, all or those that can be observed from a site in a night."""

from __future__ import annotations

import re
from typing import Any

import numpy as np

from hwpol.correction.catalogue.search import Catalogue
from hwpol.errors import InputError
from hwpol.instrument.description import Site

#: Altitude (deg) above which a standard counts as up, and that of the Sun below which it is night (nautical twilight).
UP_ALTITUDE, NIGHT_SUN = 30.0, -12.0
#: Step (d) with which altitudes are followed: ten minutes.
STEP = 10 / 1440


def listing(
    catalogue: Catalogue,
    *,
    band: str | None = None,
    date: str | None = None,
    site: Site | None = None,
    variable: bool = True,
) -> list[dict[str, Any]]:
    """Rows of standards, polarised ones first, then by right ascension.

    Parameters
    ----------
    catalogue : Catalogue
    band : str, optional
        Band or filter name; without it the V value, else the first of each star.
    date : str, optional
        ``YYYY-MM-DD`` of the evening at the site: only standards are listed that rise above 30 deg while the Sun is
        below -12 deg.
    site : Site, optional
        Needed with `date`.
    variable : bool
        Whether stars said to vary are listed too; the column `variable` says who says so.

    Returns
    -------
    list of dict
        name, aliases, role, ra, dec (deg), vmag, band, wavelength (micron), p, p_err, theta, theta_err (deg), method,
        variable, provenance, reference, note; with `date` also altitude (deg, the highest of the night), up_from
        and up_to (UTC, ISO).

    Raises
    ------
    InputError
        When the date cannot be read or has no site.
    MissingError
        When the band is not known.
    """
    rows = []
    for star in catalogue.stars:
        entry = catalogue.entry(star, band) if variable or not star.first("variable") else None
        if entry is not None:
            rows.append({name: getattr(entry, name) for name in entry.__dataclass_fields__})
    rows.sort(key=lambda row: (row["role"], row["ra"]))
    if date is None:
        return rows
    if site is None:
        raise InputError(f"standards up on {date}: the site is not known; give [site] in the instrument file")
    return _up(rows, date, site)


def _up(rows: list[dict[str, Any]], date: str, site: Site) -> list[dict[str, Any]]:
    import astropy.units as units
    from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_sun
    from astropy.time import Time
    from astropy.utils import iers

    if not re.fullmatch(r"\d{4}-\d{2}-\d{2}", date.strip()):
        raise InputError(f"date = {date!r}: expected YYYY-MM-DD, the evening at the site")
    try:
        noon = Time(date.strip() + "T12:00:00", scale="utc") - site.longitude / 360.0 * units.day
    except ValueError:
        raise InputError(f"date = {date!r}: expected a day that exists, YYYY-MM-DD") from None
    location = EarthLocation.from_geodetic(site.longitude, site.latitude, site.height)
    times = noon + np.arange(0.0, 1.0, STEP) * units.day
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        sky = AltAz(obstime=times, location=location)
        night = np.asarray(get_sun(times).transform_to(sky).alt.deg) < NIGHT_SUN
        places = SkyCoord([row["ra"] for row in rows], [row["dec"] for row in rows], unit="deg")
        altitude = np.asarray(places[:, None].transform_to(sky[None, :]).alt.deg)
    out = []
    for row, heights in zip(rows, altitude, strict=True):
        up = night & (heights > UP_ALTITUDE)
        if up.any():
            seen = np.flatnonzero(up)
            span = {"up_from": times[seen[0]].isot[:16], "up_to": times[seen[-1]].isot[:16]}
            out.append({**row, "altitude": float(heights[night].max()), **span})
    return out
