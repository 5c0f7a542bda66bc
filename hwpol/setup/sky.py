"""How the instrument sits on the sky and where the telescope stands."""

from __future__ import annotations

import re
from typing import Any

import erfa
import numpy as np
from numpy.typing import NDArray

from hwpol.frames.values import ValueProblem, coordinate, middle
from hwpol.instrument.description import Keyword
from hwpol.setup.findings import GUESSED, OPEN, RECOGNISED, Finding
from hwpol.setup.survey import Survey, as_number

Floats = NDArray[np.float64]

# Names in use (common practice).
_ANGLE = [
    "SKYANG",
    "SKYPA",
    "ROTSKYPA",
    "POSANG",
    "INSTPA",
    "ROTPA",
    "ROTPOSN",
    "PA",
    "PA_SKY",
    "ROTANGLE",
    "ROTATOR",
    "ROTANG",
    "POSANGLE",
    "IPA",
    "DEROTPA",
]
_LONGITUDE = ["SITELONG", "LONGITUD", "GEOLON", "OBS-LONG", "LONG-OBS", "LONGITUDE", "OBSLONG", "LONG", "OBSGEO-L"]
_LATITUDE = ["SITELAT", "LATITUDE", "GEOLAT", "OBS-LAT", "LAT-OBS", "OBSLAT", "LAT", "OBSGEO-B"]
_HEIGHT = [
    "SITEELEV",
    "HEIGHT",
    "OBS-ELEV",
    "ALT-OBS",
    "OBSALT",
    "ELEVATIO",
    "SITEALT",
    "OBS-ALT",
    "ALTITUDE",
    "OBSGEO-H",
    "GEOELEV",
]
# Of these names some hold the angle of a bearing, not one on the sky.
_MECHANICAL = ("ROTATOR", "ROTANG", "ROTANGLE", "ROTPOSN", "DEROTPA")
_SIDEREAL = ("ST", "LST", "LST-OBS", "SIDTIME", "LSTHDR", "ST-OBS", "SIDEREAL")
_LONGEST_DRIFT = 3.0  # deg of sidereal time between the header's own and the frame's start


def find_orientation(survey: Survey) -> list[Finding]:
    """Findings for [orientation] and keywords.position_angle."""
    science = survey.science
    wcs, sense = _wcs_angles(survey, science)
    keyword, note = _angle_keyword(survey, science, wcs)
    known = wcs[np.isfinite(wcs)]
    steady = len(known) > 0 and float(np.ptp((known - known[0] + 180) % 360)) < 1.0
    if steady:
        value = round(float(np.median((known - known[0] + 180) % 360 - 180) + known[0]) % 360, 2)
        how, why = GUESSED, "position angle of the detector's y axis by the WCS, taken as that of +Q"
    else:
        value, how, why = 0.0, OPEN, "position angle of the instrument's +Q axis where no keyword gives it"
    why += '; what is left of it becomes part of the zero angle. On an altaz mount without rotator "parallactic"'
    findings = [
        keyword,
        Finding(
            "orientation.mount",
            "equatorial",
            OPEN,
            'no header tells; "altaz" where the telescope turns against the sky' + note,
        ),
        Finding("orientation.position_angle", value, how, why),
    ]
    if sense:
        handed = "as the sky does" if sense > 0 else "mirrored"
        why = (
            f"the WCS has the detector {handed}; mirrors before the prism may differ. Confirm with polarised standards"
        )
        findings.append(Finding("orientation.sense", sense, GUESSED, why))
    else:
        why = "no WCS tells; -1 where the image is mirrored. Two polarised standards of different angle decide"
        findings.append(Finding("orientation.sense", 1, OPEN, why))
    why = (
        '"telescope" or "both" where the instrumental polarisation comes from mirrors that turn against the instrument'
    )
    return [*findings, Finding("orientation.frame", "instrument", OPEN, why)]


def _wcs_angles(survey: Survey, science: list[int]) -> tuple[Floats, int]:
    """Position angle (deg) of +y for each frame, NaN where unknown, and +1 or -1 (mirrored), 0 unknown."""
    shape = (len(science),)

    def card(key: str, default: float) -> Floats:
        return survey.numbers(key, science) if key in survey.cards else np.full(shape, default)

    if "CRVAL1" not in survey.cards:
        return np.full(shape, np.nan), 0
    if "CD1_1" in survey.cards:
        cd = [[card(f"CD{i}_{j}", 0.0) for j in (1, 2)] for i in (1, 2)]
    elif "CDELT2" in survey.cards:
        # Calabretta & Greisen (2002, A&A 395, 1077), equations 186 and 189.
        turn = np.radians(card("CROTA2", 0.0))
        cos, sin, one = np.cos(turn), np.sin(turn), card("CDELT1", np.nan)
        two = card("CDELT2", np.nan)
        cd = [[one * cos, -two * sin], [one * sin, two * cos]]
        if "PC1_1" in survey.cards:
            cd = [[(one, two)[i - 1] * card(f"PC{i}_{j}", float(i == j)) for j in (1, 2)] for i in (1, 2)]
    else:
        return np.full(shape, np.nan), 0
    size = np.nan_to_num(cd[0][0] * cd[1][1] - cd[0][1] * cd[1][0])
    angle = np.degrees(np.arctan2(cd[0][1], cd[1][1])) % 360
    return np.where(size == 0, np.nan, angle), _handed(size)


def _handed(turn: Floats) -> int:
    # North up and east left, the sky as seen, has a negative determinant.
    signs = np.sign(turn[turn != 0])
    return 0 if not len(signs) or np.any(signs != signs[0]) else -int(signs[0])


def _angle_keyword(survey: Survey, science: list[int], wcs: Floats) -> tuple[Finding, str]:
    entry = "keywords.position_angle"
    keys = [key for key in survey.cards if key in _ANGLE or any(key.endswith(" " + name) for name in _ANGLE)]
    keys.sort(key=lambda key: _ANGLE.index(key) if key in _ANGLE else len(_ANGLE))
    seen = []
    for key in keys:
        values = survey.numbers(key, science)
        if not np.isfinite(values).any() or np.nanmax(np.abs(values)) > 720:
            continue
        both = np.isfinite(values) & np.isfinite(wcs)
        varies = float(np.nanmax(values) - np.nanmin(values)) > 0.5
        if both.sum() >= 2:
            for scale in (1.0, -1.0):
                rest = np.exp(1j * np.radians(wcs[both] - scale * values[both]))
                if abs(rest.mean()) < np.cos(np.radians(1.0)):
                    continue
                left = round(float(np.degrees(np.angle(rest.mean()))), 2)
                if not varies and abs(left) > 1.0:
                    continue
                # value = scale x (header - zero) is the position angle of +y that the WCS has.
                table: Any = {"keyword": key}
                table |= {"scale": scale} if scale < 0 else {}
                table |= {"zero": round(-scale * left, 2)} if abs(left) > 0.05 else {}
                why = "it runs with the WCS's angle of the detector's y axis, which is taken as that of +Q"
                return Finding(entry, table if len(table) > 1 else key, GUESSED, why), ""
            if varies:
                seen.append(f"{key} varies, but not as the WCS does")
                continue
        if varies and key.rpartition(" ")[2] in _MECHANICAL:
            seen.append(f"{key} varies, but may be the rotator's own angle")
        elif varies:
            why = f"{key} varies between frames and is named as an angle on the sky; is it that of +Q?"
            return Finding(entry, key, GUESSED, why), "; here an angle turns between frames"
        else:
            seen.append(f"{key} = {survey.distinct(key, science)[0]} on all frames")
    why = "; ".join(seen[:3]) if seen else "no keyword of a usual name holds it"
    return Finding(entry, None, OPEN, f"{why}. Give the keyword of chi, the position angle of +Q, if it ever turns"), ""


def find_site(survey: Survey) -> list[Finding]:
    """Findings for [site]."""
    long, lat = (_place(survey, names) for names in (_LONGITUDE, _LATITUDE))
    height = _place(survey, _HEIGHT)
    if long is None or lat is None:
        telescope = next((f" ({survey.distinct(k, survey.science)[0]})" for k in ("TELESCOP", "OBSERVAT", "SITENAME")
                          if k in survey.cards and survey.distinct(k, survey.science)), "")  # fmt: skip
        why = f"no header tells where the telescope{telescope} stands (deg, east positive): no parallactic angle"
        return [Finding(f"site.{name}", None, OPEN, why) for name in ("longitude", "latitude")]
    key, value = long
    remark = survey.comment(key)
    value = (value + 180) % 360 - 180
    how, why = (
        GUESSED,
        f"from {key}, taken as positive east of Greenwich; take the other sign if the header counts west",
    )
    sidereal = _sidereal_longitude(survey)
    if sidereal is not None:
        off = {sign: abs((sign * value - sidereal + 180) % 360 - 180) for sign in (1, -1)}
        sign = min(off, key=lambda s: off[s])
        if off[sign] < _LONGEST_DRIFT < off[-sign]:
            value, how = sign * value, RECOGNISED
            why = f"from {key}; the header's sidereal time says that it counts {'east' if sign > 0 else 'west'}"
    elif re.search(r"\bwest\b|\(w\)|deg w", remark) and value > 0:
        value, why = -value, f"from {key}, which counts west by its comment ({remark})"
    elif re.search(r"\beast\b|\(e\)|deg e", remark):
        how, why = RECOGNISED, f"from {key}, which counts east by its comment"
    findings = [
        Finding("site.longitude", round(value, 5), how, why),
        Finding("site.latitude", round(lat[1], 5), RECOGNISED, f"from {lat[0]}"),
    ]
    if height is not None:
        findings.append(Finding("site.height", height[1], RECOGNISED, f"from {height[0]}; m"))
    return findings


def _place(survey: Survey, names: list[str]) -> tuple[str, float] | None:
    """Keyword and value: a number, or sexagesimal degrees."""
    keys = [key for name in names for key in survey.cards if key == name or key.endswith(" " + name)]
    for key in keys:
        values = survey.values(key, survey.science)
        if not values:
            continue
        number = as_number(values[0])
        if not np.isfinite(number):
            # Longitudes run to 360, so they are read as right ascensions in degrees are.
            text = str(values[0]).strip()
            sign, text = (-1.0, text[1:]) if text.startswith("-") else (1.0, text)
            try:
                number = sign * coordinate([{"X": text}], Keyword(("X",), unit="deg"), hours=True)
            except ValueProblem:
                continue
        if names is _HEIGHT or abs(number) <= (90 if names is _LATITUDE else 360):
            return key, number
    return None


def _sidereal_longitude(survey: Survey) -> float | None:
    """Longitude (deg, east) from the header's sidereal time and date; None where they do not tell."""
    science = survey.science
    key = next((name for name in _SIDEREAL if name in survey.cards and survey.values(name, science)), None)
    date = next((name for name in ("DATE-OBS", "DATE-BEG") if name in survey.cards), None)
    if key is None or date is None:
        return None
    found = []
    for i in science[:20]:
        cards: Any = [{name: survey.cards[name][i] for name in (key, date) if survey.cards[name][i] is not None}]
        try:
            mjd = middle(cards, Keyword((date,)), 0.0)
            lst = coordinate(cards, Keyword((key,), unit="hourangle"), hours=True)
        except ValueProblem:
            continue
        gmst = np.degrees(erfa.gmst06(2400000.5, mjd, 2400000.5, mjd))
        found.append(np.exp(1j * np.radians(lst - gmst)))
    mean = np.mean(found) if found else 0.0
    return float(np.degrees(np.angle(mean))) if abs(mean) > 0.999 else None
