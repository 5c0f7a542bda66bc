"""Keywords of object, exposure, time, place and conditions: by name, checked against their values."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from hwpol.frames.values import ValueProblem, coordinate, middle
from hwpol.instrument.description import Keyword
from hwpol.setup.findings import GUESSED, OPEN, RECOGNISED, Finding
from hwpol.setup.survey import Survey, as_number, plain

# Names in use at observatories, the likeliest first (common practice).
_OBJECT = ["OBJECT", "TARGNAME", "TARGET", "OBJNAME", "OBJECT_NAME", "TARG_NAME", "STARNAME", "OBJ"]
_EXPOSURE = [
    "EXPTIME",
    "EXPOSURE",
    "EXP_TIME",
    "EXP-TIME",
    "TEXP",
    "EXPOS",
    "ITIME",
    "INTTIME",
    "TINT",
    "DIT",
    "ELAPTIME",
    "EXPT",
    "TIME_INT",
    "EXP",
]
_DATE = [
    "DATE-OBS",
    "DATE-BEG",
    "DATEOBS",
    "DATE_OBS",
    "UTSTART",
    "UT_START",
    "DATE-UT",
    "UT-DATE",
    "UTDATE",
    "OBSDATE",
    "DATE-AVG",
    "DATE-MID",
]
_CLOCK = [
    "UT",
    "UTC",
    "TIME-OBS",
    "UTSTART",
    "UT-START",
    "UTC-OBS",
    "UT_START",
    "UTC_START",
    "UTOBS",
    "UT-OBS",
    "STARTUT",
    "TIME-BEG",
    "UTIME",
    "TM-START",
    "TIME",
    "OBSTIME",
    "UTCSTART",
]
_DAYS = ["MJD-OBS", "MJD-BEG", "MJD", "MJD-STR", "MJDSTART", "MJD-AVG", "MJD-MID", "JD", "JD-OBS", "JULDATE"]
_RA = [
    "RA",
    "OBJRA",
    "OBJCTRA",
    "TELRA",
    "RA_OBJ",
    "RA_DEG",
    "RADEG",
    "RA-D",
    "CAT-RA",
    "TARGRA",
    "RA_TARG",
    "OBSRA",
    "RAJ2000",
]
_DEC = [
    "DEC",
    "OBJDEC",
    "OBJCTDEC",
    "TELDEC",
    "DEC_OBJ",
    "DEC_DEG",
    "DECDEG",
    "DEC-D",
    "CAT-DEC",
    "TARGDEC",
    "DEC_TARG",
    "OBSDEC",
    "DECJ2000",
]
_AIRMASS = ["AIRMASS", "SECZ", "AIRM", "AMSTART", "AIRMASS1", "AM"]
_CLOCKLIKE = re.compile(r"\s*\d{1,2}[: h]\d{1,2}[: m]\d{1,2}(\.\d*)?s?\s*Z?\s*", re.I)
_DATED = re.compile(r"\s*(\d{4}[-/.]\d{1,2}[-/.]\d{1,2}|\d{1,2}/\d{1,2}/\d{2})(?:[T\s]+(.+))?\s*", re.I)


def named(survey: Survey, names: Sequence[str], fits: Callable[[Any], bool], where: list[int]) -> str | None:
    """First of some names (whole, or as the end of a longer keyword) whose values fit, in half of the files or more."""
    longer = {key: name for name in names for key in survey.cards if key.endswith(" " + name)}
    for key in [*(name for name in names if name in survey.cards), *longer]:
        values = survey.values(key, where)
        if len(values) >= len(where) / 2 and all(fits(value) for value in values):
            return key
    return None


def _positive(value: Any) -> bool:
    return 0 <= as_number(value) < 1e6


def find_object(survey: Survey) -> list[Finding]:
    """Finding for keywords.object."""
    science = survey.science
    key = named(survey, _OBJECT, lambda value: isinstance(value, str | int), science)
    if key:
        count = len(survey.distinct(key, science))
        return [
            Finding("keywords.object", key, RECOGNISED, f"its usual name; {count} different values on science frames")
        ]
    return [Finding("keywords.object", "OBJECT", OPEN, "no keyword of a usual name holds the target; give it")]


def find_exposure(survey: Survey) -> list[Finding]:
    """Finding for keywords.exposure."""
    science = survey.science
    key = named(survey, _EXPOSURE, _positive, science)
    if key is None:
        return [
            Finding("keywords.exposure", "EXPTIME", OPEN, "no keyword of a usual name holds the exposure time; give it")
        ]
    shown = ", ".join(survey.distinct(key, science)[:5])
    remark = survey.comment(key)
    if re.search(r"\b(ms|msec|millisec\w*)\b", remark):
        return [Finding("keywords.exposure", {"keyword": key, "unit": "ms"}, RECOGNISED, f"its comment says {remark}")]
    if re.search(r"\b(min|minutes)\b", remark):
        return [Finding("keywords.exposure", {"keyword": key, "unit": "min"}, RECOGNISED, f"its comment says {remark}")]
    how = RECOGNISED if re.search(r"\b(s|sec|secs|seconds?)\b", remark) or key in _EXPOSURE[:2] else GUESSED
    return [Finding("keywords.exposure", key, how, f"values {shown}; taken as seconds")]


def _marks(key: str, remark: str) -> tuple[str, bool]:
    """Moment that a time stands for, and whether anything says so."""
    if re.search(r"MID|AVG", key) or re.search(r"\bmid(dle|dle of|-| |point)?|\bmean\b|average", remark):
        return "middle", True
    if re.search(r"END|STOP", key) or re.search(r"\b(end|stop|finish)\b", remark):
        return "end", True
    return "start", bool(re.search(r"start|begin|shutter open|BEG|STR", f"{key} {remark}"))


def find_time(survey: Survey) -> tuple[list[Finding], Survey]:
    """Finding for keywords.time, and the survey in order of time."""
    everywhere = list(range(len(survey.files)))
    finding, keyword = _time(survey, survey.science)
    if keyword is None:
        return [finding], survey
    system = survey.distinct("TIMESYS", everywhere) if "TIMESYS" in survey.cards else []
    if system and any(text.upper() not in ("UTC", "UT", "UT1") for text in system):
        finding = finding._replace(
            how=GUESSED, why=f"{finding.why}. TIMESYS says {system[0]}: times have to be UTC, give a keyword that is"
        )
    if re.search(r"\blocal\b|civil time", survey.comment(keyword.keywords[-1])):
        finding = finding._replace(how=GUESSED, why=f"{finding.why}. Its comment speaks of local time: UTC is needed")
    times = np.full(len(everywhere), np.nan)
    for i in everywhere:
        cards = {key: survey.cards[key][i] for key in keyword.keywords if survey.cards[key][i] is not None}
        try:
            times[i] = middle([cards], keyword, 0.0)
        except ValueProblem:
            continue
    return [finding], survey.in_order(times)


def _time(survey: Survey, science: list[int]) -> tuple[Finding, Keyword | None]:
    def dated(value: Any) -> bool:
        return isinstance(value, str) and _DATED.fullmatch(value) is not None

    def timed(value: Any) -> bool:
        match = _DATED.fullmatch(value) if isinstance(value, str) else None
        return match is not None and bool(match.group(2))

    if key := named(survey, _DATE, timed, science):
        marks, said = _marks(key, survey.comment(key))
        entry: Any = key if marks == "start" else {"keyword": key, "marks": marks}
        why = f"holds date and time; it marks the {marks} of the exposure, as its name or comment says"
        if not said:
            why = "holds date and time; taken as the start of the exposure, as usual; no comment says so"
        how = RECOGNISED if said or key == "DATE-OBS" else GUESSED
        return Finding("keywords.time", entry, how, why), Keyword((key,), marks=marks)
    if date := named(survey, _DATE, dated, science):
        clock = named(
            survey, _CLOCK, lambda value: isinstance(value, str) and bool(_CLOCKLIKE.fullmatch(value)), science
        )
        unit = None
        if clock is None and (clock := named(survey, _CLOCK, lambda value: 0 <= as_number(value) < 86400, science)):
            largest = max(as_number(value) for value in survey.values(clock, science))
            unit = "h" if largest < 24 and "sec" not in survey.comment(clock) else "s"
        if clock:
            marks, said = _marks(clock, survey.comment(clock))
            table: dict[str, Any] = {"keyword": [date, clock]}
            table |= {"unit": unit} if unit else {}
            table |= {"marks": marks} if marks != "start" else {}
            why = f"{date} holds the date, {clock} the time of day"
            why += f" in {unit}" if unit else ""
            why += f"; it marks the {marks} of the exposure" if said else "; taken as the start of the exposure"
            entry = table if len(table) > 1 else [date, clock]
            how = GUESSED if unit or not said else RECOGNISED
            return Finding("keywords.time", entry, how, why), Keyword((date, clock), unit=unit, marks=marks)
    for form, low, high in (("mjd", 30000, 90000), ("jd", 2430000, 2490000)):
        if key := named(survey, _DAYS, lambda value, a=low, b=high: a < as_number(value) < b, science):  # type: ignore[misc]
            marks, said = _marks(key, survey.comment(key))
            table = {"keyword": key, "format": form} | ({"marks": marks} if marks != "start" else {})
            why = f"values of a {form.upper()}; " + (
                f"it marks the {marks}" if said else "taken as the start of the exposure"
            )
            return Finding("keywords.time", table, RECOGNISED if said else GUESSED, why), Keyword(
                (key,), format=form, marks=marks
            )
    why = "no keyword of a usual name holds date and time (UTC); give it, or two: [date, time of day]"
    return Finding("keywords.time", "DATE-OBS", OPEN, why), None


def find_position(survey: Survey) -> list[Finding]:
    """Findings for keywords.ra and keywords.dec."""
    science = survey.science
    ra = named(survey, _RA, lambda value: _reads(value, True), science)
    dec = named(survey, _DEC, lambda value: _reads(value, False), science)
    if ra is None or dec is None:
        why = "no pair of keywords of usual names holds the position; without it the parallactic angle stays unknown"
        return [Finding(f"keywords.{name}", None, OPEN, why) for name in ("ra", "dec")]
    equinox, note = _equinox(survey, science)
    values = survey.values(ra, science)
    hours, how = "", RECOGNISED
    why = "sexagesimal hours" if isinstance(values[0], str) and ":" in plain(values[0]).replace(" ", ":") else ""
    if not why:
        why, hours, how = _ra_unit(survey, ra, science)
    entries: list[Any] = []
    for key, unit in ((ra, hours), (dec, "")):
        table = (
            {"keyword": key} | ({"unit": unit} if unit else {}) | ({"equinox": equinox} if equinox is not None else {})
        )
        entries.append(table if len(table) > 1 else key)
    return [
        Finding("keywords.ra", entries[0], how, f"{why}; {note}"),
        Finding("keywords.dec", entries[1], RECOGNISED, f"degrees; {note}"),
    ]


def _reads(value: Any, hours: bool) -> bool:
    try:
        coordinate([{"X": value}], Keyword(("X",)), hours=hours)
    except ValueProblem:
        return False
    return True


def _ra_unit(survey: Survey, key: str, science: list[int]) -> tuple[str, str, str]:
    """What a right ascension that is a number is given in: its comment, the WCS, or the size of the values."""
    numbers = survey.numbers(key, science)
    remark = survey.comment(key)
    if re.search(r"\bdeg", remark):
        return "a number in degrees, as its comment says", "", RECOGNISED
    if re.search(r"\bh(ou)?rs?\b", remark):
        return "a number in hours, as its comment says", "hourangle", RECOGNISED
    if "CRVAL1" in survey.cards:
        centre = survey.numbers("CRVAL1", science)
        for factor, unit in ((1.0, ""), (15.0, "hourangle")):
            apart = np.abs((numbers * factor - centre + 180) % 360 - 180)
            if np.isfinite(apart).any() and np.nanmedian(apart) < 1.0:
                return f"a number in {unit or 'degrees'}, as it agrees with CRVAL1", unit, RECOGNISED
    if np.isfinite(numbers).any() and np.nanmax(numbers) > 24:
        return "a number above 24, so degrees", "", RECOGNISED
    return 'a number below 24 everywhere: taken as degrees; add unit = "hourangle" if it counts hours', "", GUESSED


def _equinox(survey: Survey, science: list[int]) -> tuple[str | None, str]:
    """Equinox to note with the position, and what the header says of it."""
    for key in ("EQUINOX", "EPOCH", "OBJEQUIN", "CAT-EPOC"):
        if key not in survey.cards or not survey.values(key, science):
            continue
        texts = survey.distinct(key, science)
        years = [as_number(text.upper().lstrip("JB")) for text in texts]
        if all(abs(year - 2000.0) < 1e-6 for year in years):
            return None, f"{key} is 2000: J2000 and ICRS differ by less than 0.1 arcsec"
        if all(1800 < year < 2200 for year in years):
            return key, f"equinox from {key} ({', '.join(texts[:3])})"
    if "RADESYS" in survey.cards and survey.distinct("RADESYS", science)[:1] == ["ICRS"]:
        return None, "RADESYS says ICRS"
    return None, "no equinox in the header: taken as ICRS"


def find_airmass(survey: Survey) -> list[Finding]:
    """Finding for keywords.airmass; nothing where there is none, as it is computed then."""
    key = named(survey, _AIRMASS, lambda value: as_number(value) == 0 or 0.99 <= as_number(value) < 50, survey.science)
    if key is None:
        return []
    return [Finding("keywords.airmass", key, RECOGNISED, "its usual name, values of an airmass")]
