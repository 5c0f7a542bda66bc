"""Headers that express the truth in the habits of an instrument file: its reading, turned round."""

from __future__ import annotations

import re
from typing import Any

import numpy as np
from astropy import units as u
from astropy.coordinates import FK5, SkyCoord
from astropy.io import fits
from astropy.time import Time

from hwpol.errors import ConfigError
from hwpol.instrument import Keyword, WavePlate
from hwpol.simulate.images import place_of
from hwpol.simulate.plan import Exposure
from hwpol.simulate.scenario import SAME_ANGLE, Scenario

_UNITS = {"exposure": "s", "gain": "electron / adu"}


def header_of(scenario: Scenario, one: Exposure, gain: float) -> fits.Header:
    """Header of one frame; every keyword of the instrument file is written that has a value."""
    instrument = scenario.instrument
    header = fits.Header()
    for name, value in scenario.headers.extra.items():
        _put(header, name, value)
    values: dict[str, Any] = {
        "kind": instrument.kinds[one.kind][0].upper(),
        "object": one.target or one.kind,
        "exposure": one.seconds,
        "gain": gain,
        "wave_plate": None if instrument.wave_plate is None else _plate_value(instrument.wave_plate, one.psi_header),
        "position_angle": one.chi,
        "airmass": None if np.isnan(one.altitude) else 1 / np.sin(np.deg2rad(one.altitude)),
    }
    for name, value in values.items():
        keyword = instrument.keywords.get(name)
        if keyword is not None and value is not None:
            _put(header, keyword.keywords[0], _written(scenario, name, keyword, value))
    _write_filter(scenario, header, one)
    _write_time(scenario, header, one)
    if one.target:
        _write_position(scenario, header, one)
    plate = instrument.keywords.get("wave_plate")
    if plate is not None and one.has("no-angle"):
        header.remove(plate.keywords[0], ignore_missing=True)
    if plate is not None and one.has("nonsense-angle"):
        header[plate.keywords[0]] = "???"
    return header


def _put(header: fits.Header, name: str, value: Any) -> None:
    """Write one card; names beyond eight letters become HIERARCH cards, without a warning."""
    long = len(name) > 8 and not name.upper().startswith("HIERARCH ")
    header[f"HIERARCH {name}" if long else name] = value


def _written(scenario: Scenario, name: str, keyword: Keyword, value: Any) -> Any:
    """The header's form of a value: scaled back, in its unit, as text where a format or a map says so."""
    if isinstance(value, float):
        if keyword.unit is not None:
            value = float((value * u.Unit(_UNITS.get(name, "deg"))).to_value(u.Unit(keyword.unit)))
        value = round(keyword.zero + value / keyword.scale, 9)
    form = scenario.headers.format.get(name)
    if form is not None:
        try:
            value = form.format(value)
        except (ValueError, IndexError, KeyError) as error:
            raise ConfigError(f"headers.format.{name} = {form!r}: {error}, expected such as '{{:.1f}}'") from None
    if keyword.pattern is not None and not re.search(keyword.pattern, str(value)):
        raise ConfigError(
            f"headers.format.{name}: writes {value!r}, expected text that the pattern {keyword.pattern!r} finds"
        )
    return value


def _plate_value(plate: WavePlate, psi: float) -> float | str:
    """What stands in the header for a plate angle: the inverse of psi = sense scale (value - zero)."""
    if not plate.values:
        value = plate.zero + psi / (plate.sense * plate.scale)
        # An encoder in degrees starts again at 360 where that is the same plate, 180 deg being a full turn of it.
        return value % 360 if (360 * plate.scale) % 180 == 0 else value

    def distance(text: str) -> float:
        reached = plate.sense * plate.scale * (plate.values[text] - plate.zero)
        return float(abs((psi - reached + 180) % 360 - 180))

    nearest = min(plate.values, key=distance)
    # A mislabelled frame may carry an angle the plate does not stop at.
    return nearest if distance(nearest) < SAME_ANGLE else f"{psi:g}?"


def _write_filter(scenario: Scenario, header: fits.Header, one: Exposure) -> None:
    keyword = scenario.instrument.keywords.get("filter")
    if keyword is None:
        return
    clear = next(iter(scenario.instrument.clear_filters), "")
    names = list(scenario.filters)
    wheel = names.index(one.filter) % len(keyword.keywords) if one.filter else -1
    for number, name in enumerate(keyword.keywords):
        value = one.filter if number == wheel else (clear if len(keyword.keywords) > 1 else "")
        _put(header, name, _written(scenario, "filter", keyword, value) if value else value)


def _write_time(scenario: Scenario, header: fits.Header, one: Exposure) -> None:
    keyword = scenario.instrument.keywords["time"]
    marked = one.start + {"start": 0.0, "middle": 0.5, "end": 1.0}[keyword.marks] * one.seconds / 86400
    if keyword.format in ("mjd", "jd"):
        value = marked if keyword.format == "mjd" else marked + 2400000.5
        _put(header, keyword.keywords[0], _written(scenario, "time", keyword, value))
        return
    date, _, clock = str(Time(marked, format="mjd", scale="utc", precision=3).isot).partition("T")
    if len(keyword.keywords) == 2:
        _put(header, keyword.keywords[0], date)
        _put(header, keyword.keywords[1], clock)
    else:
        _put(header, keyword.keywords[0], _written(scenario, "time", keyword, f"{date}T{clock}"))


def _write_position(scenario: Scenario, header: fits.Header, one: Exposure) -> None:
    target = scenario.target(one.target)
    star = SkyCoord(target.ra * u.deg, target.dec * u.deg)
    for name, angle, unit in (("ra", star.ra, u.hourangle), ("dec", star.dec, u.deg)):
        keyword = scenario.instrument.keywords.get(name)
        if keyword is None:
            continue
        if keyword.equinox not in (None, "ICRS"):
            equinox = f"J{keyword.equinox}" if isinstance(keyword.equinox, float) else keyword.equinox
            moved = star.transform_to(FK5(equinox=equinox))
            angle = moved.ra if name == "ra" else moved.dec
        if keyword.unit is None and scenario.headers.sexagesimal:
            text = angle.to_string(unit=unit, sep=":", precision=3, pad=True, alwayssign=name == "dec")
            _put(header, keyword.keywords[0], text)
        else:
            _put(header, keyword.keywords[0], _written(scenario, name, keyword, float(angle.deg)))
    if scenario.headers.wcs:
        _write_wcs(scenario, header, one, star)


def _write_wcs(scenario: Scenario, header: fits.Header, one: Exposure, star: SkyCoord) -> None:
    """A tangential WCS of the first beam as the telescope believes it: without pointing error and drift."""
    x, y = place_of(scenario, scenario.target(one.target))
    scale = (scenario.instrument.detector.pixel_scale or 1.0) / 3600
    sense, chi = scenario.instrument.orientation.sense, np.deg2rad(one.chi)
    c, s = np.cos(chi), np.sin(chi)
    # +y lies at position angle chi, +x at chi - 90 deg (or chi + 90 where mirrored).
    cards = {
        "CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CUNIT1": "deg", "CUNIT2": "deg", "RADESYS": "ICRS",
        "CRPIX1": x + 1, "CRPIX2": y + 1, "CRVAL1": float(star.ra.deg), "CRVAL2": float(star.dec.deg),
        "CD1_1": -sense * c * scale, "CD1_2": s * scale, "CD2_1": sense * s * scale, "CD2_2": c * scale,
    }  # fmt: skip
    header.update(cards)
