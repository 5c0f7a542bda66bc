"""Header entries as quantities: numbers in any unit or text, times, coordinates, plate angles, filters."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from datetime import date
from functools import lru_cache

import astropy.units as u
from astropy.io import fits

from hwpol.instrument.description import Keyword, WavePlate

_NUMBER = re.compile(r"([+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:[eEdD][+-]?\d+)?)\s*(.*)", re.DOTALL)
_DATE = re.compile(r"(\d{4})[-/.](\d{1,2})[-/.](\d{1,2})(?:[T\s]+(.+))?", re.IGNORECASE)
_OLD_DATE = re.compile(r"(\d{1,2})/(\d{1,2})/(\d{2})")
_CLOCK = re.compile(
    r"(\d{1,2})[:\sh]+(\d{1,2})(?:[:\sm]+(\d{1,2}(?:\.\d*)?)\s*s?)?\s*(?:Z|UTC?|\+00:?00)?", re.IGNORECASE
)
_SEXAGESIMAL = re.compile(
    r"([+-]?)\s*(\d+)[:\shd]+(\d+(?:\.\d*)?)(?:[:\sm']+(\d+(?:\.\d*)?))?\s*(?:s|\"|'')?", re.IGNORECASE
)
_EPOCH = re.compile(r"([JB]?)\s*(\d{4}(?:\.\d*)?)", re.IGNORECASE)
_UNIT_WORDS = {"degree": "deg", "degrees": "deg", "sec": "s", "secs": "s", "second": "s", "seconds": "s"}
_MJD_OF_ORDINAL_ZERO = -678576  # date(1858, 11, 17).toordinal() is 678576
_JD_MINUS_MJD = 2400000.5
_NO_FILTER = "clear"


class ValueProblem(Exception):
    """A header quantity is missing or makes no sense; the message says so in words."""

    def __init__(self, message: str, missing: bool = False) -> None:
        super().__init__(message)
        self.missing = missing


def _entry(headers: Sequence[fits.Header], key: str) -> object | None:
    """Value of `key` in the first header that fills it; None where no header has it; "" where it is blank."""
    found: object | None = None
    for header in headers:
        if key not in header:
            continue
        try:
            value = header[key]
        except (fits.VerifyError, ValueError):
            # A card that breaks the standard still often holds readable text.
            value = header.cards[key].image.partition("=")[2].partition(" /")[0].strip(" '")
        if isinstance(value, str):
            value = value.strip()
        if isinstance(value, fits.card.Undefined) or value is None or value == "":
            found = ""
            continue
        return value
    return found


def _plain(value: object) -> str:
    if isinstance(value, bool):
        return "T" if value else "F"
    return " ".join(str(value).split())


def _matched(headers: Sequence[fits.Header], key: str, keyword: Keyword) -> object:
    """Header value of one key, reduced to the group of the pattern where there is one."""
    value = _entry(headers, key)
    if value is None:
        raise ValueProblem(f"{key} is missing", missing=True)
    if keyword.pattern is None:
        return value
    match = re.search(keyword.pattern, _plain(value))
    if match is None:
        raise ValueProblem(f"{key} = {_plain(value)!r} does not match the pattern {keyword.pattern!r}")
    return (match.group(1) or "").strip()


def text(headers: Sequence[fits.Header], keyword: Keyword) -> str:
    """Text of a quantity, blanks at the ends removed; ValueProblem where missing or blank."""
    key = keyword.keywords[0]
    value = _plain(_matched(headers, key, keyword))
    if not value:
        raise ValueProblem(f"{key} is blank", missing=True)
    return value


@lru_cache(maxsize=256)
def _factor(unit: str, target: str) -> float | None:
    try:
        return float(u.Unit(_UNIT_WORDS.get(unit.lower(), unit)).to(u.Unit(target)))
    except (ValueError, TypeError, u.UnitConversionError):
        return None


def _parse_number(value: object) -> tuple[float, str] | None:
    """Number and the unit written behind it; None where it is no finite number."""
    if isinstance(value, bool):
        return None
    if isinstance(value, int | float):
        return (float(value), "") if math.isfinite(value) else None
    match = _NUMBER.fullmatch(str(value).strip())
    if match is None:
        return None
    number = float(match.group(1).replace(",", ".").upper().replace("D", "E"))
    return (number, match.group(2).strip()) if math.isfinite(number) else None


def _quantity(value: object, key: str, keyword: Keyword, unit: str, what: str) -> float:
    """value = scale x (header - zero), from the keyword's unit (or the one in the text) to `unit` ("" for none)."""
    parsed = _parse_number(value)
    if parsed is None:
        raise ValueProblem(f"{key} = {_plain(value)!r}: expected {what}")
    number, written = parsed
    own = keyword.unit or written
    factor: float | None = 1.0
    if own and unit:
        factor = _factor(own, unit)
    elif written:
        factor = None
    if factor is None:
        raise ValueProblem(f"{key} = {_plain(value)!r}: expected {what}, not in units of {own!r}")
    return keyword.scale * (number - keyword.zero) * factor


def number(headers: Sequence[fits.Header], keyword: Keyword, unit: str, what: str) -> float:
    """Number of a quantity in `unit` (an astropy unit string, "" for a pure number).

    Parameters
    ----------
    headers : sequence of Header
        Searched in this order.
    keyword : Keyword
        Where it is found and how it is read: value = scale x (header - zero), header in `keyword.unit`.
    unit : str
        Unit of the answer.
    what : str
        What was expected, for the message.

    Raises
    ------
    ValueProblem
        Missing (`missing` is True) or no finite number.
    """
    key = keyword.keywords[0]
    value = _matched(headers, key, keyword)
    if value == "":
        raise ValueProblem(f"{key} is blank", missing=True)
    return _quantity(value, key, keyword, unit, what)


def filter_name(headers: Sequence[fits.Header], keyword: Keyword, clear: Sequence[str]) -> str:
    """Filter as in the header; several wheels joined with "+", clear ones dropped, "clear" where all are."""
    names, missing = [], []
    for key in keyword.keywords:
        try:
            names.append(_plain(_matched(headers, key, keyword)))
        except ValueProblem as problem:
            if not problem.missing:
                raise
            missing.append(key)
    if not names and "" not in clear:
        raise ValueProblem(f"{' and '.join(missing)} missing", missing=True)
    empty = {_squeezed(entry) for entry in clear}
    kept = [name for name in names if name and _squeezed(name) not in empty]
    if not kept and "" in names and "" not in empty:
        raise ValueProblem(f"{keyword.keywords[0]} is blank", missing=True)
    return "+".join(kept) or _NO_FILTER


def _squeezed(value: str) -> str:
    return "".join(value.casefold().split())


def plate_angle(headers: Sequence[fits.Header], keyword: Keyword, plate: WavePlate) -> tuple[str, float]:
    """Return the plate's header text and psi (deg, in [0, 360)), the fast axis in the instrument frame.

    psi = sense x scale x (value - zero); `plate.values` maps header text to value first.
    """
    key = keyword.keywords[0]
    raw = _matched(headers, key, keyword)
    shown = _plain(raw)
    if raw == "":
        raise ValueProblem(f"{key} is blank", missing=True)
    if plate.values:
        value = _listed(shown, plate.values)
        if value is None:
            raise ValueProblem(f"{key} = {shown!r} is not listed in [wave_plate] values")
    else:
        value = _quantity(raw, key, keyword, "deg", "an angle in degrees")
    return shown, reduced(plate.sense * plate.scale * (value - plate.zero))


def _listed(shown: str, values: dict[str, float]) -> float | None:
    """Value of a listed header text: case and blanks ignored, and 1 the same as 1.0 or 01."""
    wanted, parsed = _squeezed(shown), _parse_number(shown)
    for entry, value in values.items():
        if _squeezed(entry) == wanted or (parsed is not None and parsed == _parse_number(entry)):
            return value
    return None


def reduced(angle: float) -> float:
    """Angle (deg) in [0, 360)."""
    result = math.fmod(angle, 360.0)
    if result < 0:
        result += 360.0
    return 0.0 if result >= 360.0 else result


def coordinate(headers: Sequence[fits.Header], keyword: Keyword, *, hours: bool) -> float:
    """Right ascension (`hours`) or declination in deg: sexagesimal text, or a number in deg unless a unit is given."""
    key = keyword.keywords[0]
    raw = _matched(headers, key, keyword)
    if raw == "":
        raise ValueProblem(f"{key} is blank", missing=True)
    match = _SEXAGESIMAL.fullmatch(str(raw).strip()) if isinstance(raw, str) else None
    if match is None:
        value = _quantity(raw, key, keyword, "deg", "a right ascension" if hours else "a declination")
    else:
        whole, minutes, seconds = (float(match.group(part) or 0.0) for part in (2, 3, 4))
        if minutes >= 60 or seconds > 60:
            raise ValueProblem(f"{key} = {_plain(raw)!r}: minutes and seconds must be below 60")
        size = whole + minutes / 60 + seconds / 3600
        unit = keyword.unit or ("hourangle" if hours else "deg")
        value = (
            keyword.scale * ((-size if match.group(1) == "-" else size) - keyword.zero) * (_factor(unit, "deg") or 1.0)
        )
    if hours:
        return reduced(value)
    if not -90.0 <= value <= 90.0:
        raise ValueProblem(f"{key} = {_plain(raw)!r}: expected a declination between -90 and 90 deg")
    return value


def equinox(headers: Sequence[fits.Header], keyword: Keyword) -> str:
    """Equinox of ra and dec as "J2000.0" or "B1950.0"; "" for ICRS. A name that is no epoch is a header keyword."""
    entry: object = keyword.equinox
    if entry is None:
        return ""
    if isinstance(entry, str) and _EPOCH.fullmatch(entry.strip()) is None and entry.strip().upper() != "ICRS":
        entry = _entry(headers, entry)
        if entry is None or entry == "":
            raise ValueProblem(f"{keyword.equinox} is missing", missing=True)
    shown = _plain(entry)
    if shown.upper() in ("ICRS", "FK5"):
        return "" if shown.upper() == "ICRS" else "J2000.0"
    match = _EPOCH.fullmatch(shown)
    if match is None:
        raise ValueProblem(f"{keyword.equinox} = {shown!r}: expected an equinox such as J2000")
    year = float(match.group(2))
    return f"{match.group(1).upper() or ('B' if year < 1984.0 else 'J')}{year}"


def _clock(value: object, key: str, keyword: Keyword) -> float:
    """Time of day in seconds: hh:mm:ss, or a number whose unit the keyword gives."""
    match = _CLOCK.fullmatch(str(value).strip()) if isinstance(value, str) else None
    if match is not None:
        hours, minutes, seconds = (float(match.group(part) or 0.0) for part in (1, 2, 3))
        if hours <= 24 and minutes < 60 and seconds < 61:
            return hours * 3600 + minutes * 60 + seconds
    elif keyword.unit is not None and _parse_number(value) is not None:
        return _quantity(value, key, keyword, "s", "a time of day")
    raise ValueProblem(f"{key} = {_plain(value)!r}: expected a time of day such as 23:05:12.3")


def _calendar(value: object) -> tuple[int, str] | None:
    """MJD of the day and the time-of-day text behind the date; None where it is no date."""
    if not isinstance(value, str):
        return None
    match, old = _DATE.fullmatch(value.strip()), _OLD_DATE.fullmatch(value.strip())
    try:
        if match is not None:
            day = date(int(match.group(1)), int(match.group(2)), int(match.group(3)))
            return day.toordinal() + _MJD_OF_ORDINAL_ZERO, (match.group(4) or "").strip()
        if old is not None:  # the form DD/MM/YY of FITS before 2000, which means 19YY
            return date(1900 + int(old.group(3)), int(old.group(2)), int(old.group(1))).toordinal() + (
                _MJD_OF_ORDINAL_ZERO
            ), ""
    except ValueError:
        return None
    return None


def middle(headers: Sequence[fits.Header], keyword: Keyword, exposure: float) -> float:
    """Middle of the exposure, modified Julian date UTC.

    Parameters
    ----------
    headers : sequence of Header
    keyword : Keyword
        One keyword, or a date and a time of day in either order; `format` "isot" (default), "mjd" or "jd";
        `marks` says which moment the header gives.
    exposure : float
        Seconds; NaN counts as 0.
    """
    values = {key: _matched(headers, key, keyword) for key in keyword.keywords}
    if any(value == "" for value in values.values()):
        raise ValueProblem(f"{' and '.join(values)} blank", missing=True)
    if keyword.format in ("mjd", "jd"):
        key, value = next(iter(values.items()))
        moment = _quantity(value, key, keyword, "", "a Julian date")
        moment -= _JD_MINUS_MJD if keyword.format == "jd" else 0.0
        if not -700000 < moment < 2000000:
            raise ValueProblem(f"{key} = {_plain(value)!r}: no plausible {keyword.format.upper()}")
    else:
        moment = _civil(values, keyword)
    half = (exposure if math.isfinite(exposure) else 0.0) / 2 / 86400
    return moment + {"start": half, "middle": 0.0, "end": -half}[keyword.marks]


def _civil(values: dict[str, object], keyword: Keyword) -> float:
    days = {key: found for key, value in values.items() if (found := _calendar(value)) is not None}
    if not days:
        shown = ", ".join(f"{key} = {_plain(value)!r}" for key, value in values.items())
        raise ValueProblem(f'{shown}: expected a date such as 2024-03-05T23:05:12 (or format = "mjd" or "jd")')
    key, (day, clock) = next(iter(days.items()))
    others = [name for name in values if name != key]
    if others:
        return day + _clock(values[others[0]], others[0], keyword) / 86400
    if not clock:
        raise ValueProblem(f"{key} = {_plain(values[key])!r} holds a date without a time of day")
    return day + _clock(clock, key, keyword) / 86400
