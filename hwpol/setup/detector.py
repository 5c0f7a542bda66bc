"""The detector and its HDUs: gain, noise, saturation, sections, pixel scale."""

from __future__ import annotations

import re
from collections import Counter
from typing import Any

import numpy as np

from hwpol.instrument.description import Section
from hwpol.instrument.keys import section as section_kind
from hwpol.instrument.toml_check import Unfit
from hwpol.setup.findings import GUESSED, OPEN, RECOGNISED, Finding
from hwpol.setup.quantities import named
from hwpol.setup.survey import Image, Survey, as_number, plain

# Names in use (common practice).
_GAIN = ("EGAIN", "GAIN", "CCDGAIN", "GAIN1", "E_GAIN", "DET OUT1 CONAD", "CONAD", "EPADU", "GAINE")
_NOISE = ("RDNOISE", "READNOIS", "READNOISE", "ENOISE", "RON", "RDNOIS", "RN", "DET OUT1 RON", "RDNOISE1", "CCDRDN")
_FULL = ("SATURATE", "SATLEVEL", "MAXLIN", "LINLIMIT", "SATURATION", "NONLIN")
_SCALE = ("PIXSCALE", "SECPIX", "PIXSCAL", "PIXSCAL1", "PLTSCALE", "SCALE", "SECPIX1", "PSCALE", "CCDSCALE")
_TRIM, _OVERSCAN = ("TRIMSEC", "DATASEC"), ("BIASSEC",)
_PLAUSIBLE_GAIN = (0.05, 30.0)  # electron/adu of optical and infrared detectors (common practice)
_PLAUSIBLE_SCALE = (0.005, 30.0)  # arcsec/pixel


def find_extension(survey: Survey) -> tuple[list[Finding], tuple[int | str, int | str]]:
    """Finding for detector.extension, and the HDU of each of two beams."""
    counts = Counter(tuple((image.hdu, image.sides) for image in survey.images[i]) for i in survey.science)
    usual = counts.most_common(1)[0][0]
    first = usual[0][0]
    if len(usual) == 2 and usual[0][1] == usual[1][1]:
        why = f"the files hold two images of one size, HDU {first} and {usual[1][0]}: taken as one per beam"
        return [Finding("detector.extension", first, GUESSED, why)], (first, usual[1][0])
    if len(usual) > 2 or (len(usual) == 2 and usual[0][1] != usual[1][1]):
        shown = ", ".join(f"{hdu} ({' x '.join(map(str, sides))})" for hdu, sides in usual)
        why = f"the files hold several images, HDU {shown}; the first is taken, give the one you want or one per beam"
        return [Finding("detector.extension", first, GUESSED, why)], (first, first)
    if first == 0:
        return [], (0, 0)
    return [Finding("detector.extension", first, RECOGNISED, "the only image of a file is there")], (first, first)


def find_gain(survey: Survey) -> list[Finding]:
    """Findings for the gain: its keyword where it is electron/adu, a number where it is the inverse."""
    low, high = _PLAUSIBLE_GAIN
    key = named(survey, _GAIN, lambda value: low <= as_number(value) <= high, survey.science)
    if key is None:
        there = next((f"{k} = {survey.distinct(k, survey.science)[0]} cannot be it" for k in _GAIN
                      if k in survey.cards and survey.values(k, survey.science)), "no keyword holds it")  # fmt: skip
        why = f"electrons per adu: {there}. See the detector's data sheet, or measure it from pairs of flats"
        return [Finding("detector.gain", None, OPEN, why)]
    remark = survey.comment(key)
    shown = ", ".join(survey.distinct(key, survey.science)[:4])
    if re.search(r"adu\s*(/|per)\s*e|adu\s*/\s*\(?e|dn\s*(/|per)\s*e", remark):
        value = as_number(survey.values(key, survey.science)[0])
        why = f"{key} = {shown} is in adu per electron by its comment ({remark}); this is its inverse"
        return [Finding("detector.gain", round(1 / value, 6), GUESSED, why)]
    said = bool(re.search(r"e-?\w*\s*(/|per)\s*(adu|dn|count)|conad", f"{remark} {key.lower()}")) or key == "EGAIN"
    why = f"values {shown}" + ("; in electron/adu" if said else "; taken as electron/adu, no comment says so")
    return [Finding("keywords.gain", key, RECOGNISED if said else GUESSED, why)]


def find_detector(survey: Survey, extension: int | str) -> tuple[list[Finding], Section | None]:
    """Findings for [detector] but its gain and extension; and the part that sees light."""
    science = survey.science
    noise = named(survey, _NOISE, lambda value: 0 < as_number(value) < 500, science)
    if noise:
        values = survey.distinct(noise, science)
        how = RECOGNISED if len(values) == 1 else GUESSED
        why = f"from {noise}" + (
            "" if len(values) == 1 else f", which has values {', '.join(values[:4])}: the most frequent"
        )
        findings = [Finding("detector.read_noise", as_number(values[0]), how, why)]
    else:
        findings = [
            Finding("detector.read_noise", None, OPEN, "electrons; without it errors of faint sources are too small")
        ]
    image = next((i for i in survey.images[science[0]] if i.hdu == extension), survey.images[science[0]][0])
    findings.append(_saturation(survey, image, science))
    findings.append(_scale(survey, image, science))
    trim, light = _section(survey, _TRIM, "detector.trim", image, science)
    overscan, _ = _section(survey, _OVERSCAN, "detector.overscan", image, science)
    return [*findings, *trim, *overscan], light


def _saturation(survey: Survey, image: Image, science: list[int]) -> Finding:
    key = named(survey, _FULL, lambda value: as_number(value) > 100, science)
    if key:
        level = min(survey.numbers(key, science)[np.isfinite(survey.numbers(key, science))])
        return Finding("detector.saturation", float(level), RECOGNISED, f"from {key}; adu")
    if image.bits == 16:
        top = 65535.0 if image.zero == 32768 else 32767.0
        why = f"16-bit numbers end at {top:g} adu; detectors often leave linearity earlier, look it up"
        return Finding("detector.saturation", top, GUESSED, why)
    return Finding("detector.saturation", None, OPEN, "adu; no header tells. Without it no pixel counts as saturated")


def _scale(survey: Survey, image: Image, science: list[int]) -> Finding:
    low, high = _PLAUSIBLE_SCALE
    for keys in (("CD1_1", "CD2_1"), ("CDELT1",)):
        if not all(key in survey.cards for key in keys):
            continue
        parts = np.array([survey.numbers(key, science) for key in keys])
        size = 3600 * float(np.nanmedian(np.hypot.reduce(np.nan_to_num(parts), axis=0)))
        if low <= size <= high and "CRVAL1" in survey.cards:
            return Finding(
                "detector.pixel_scale", float(f"{size:.4g}"), RECOGNISED, f"from the WCS ({', '.join(keys)})"
            )
    key = named(survey, _SCALE, lambda value: low <= as_number(value) <= high, science)
    if key:
        value = as_number(survey.distinct(key, science)[0])
        return Finding(
            "detector.pixel_scale", value, GUESSED, f"from {key}, taken as arcsec/pixel of the image as binned"
        )
    pitch = named(survey, ("XPIXSZ", "PIXSIZE1"), lambda value: 1 < as_number(value) < 100, science)
    focal = named(survey, ("FOCALLEN",), lambda value: 50 < as_number(value) < 2e5, science)
    if pitch and focal:
        size = 206.265 * as_number(survey.values(pitch, science)[0]) / as_number(survey.values(focal, science)[0])
        why = f"from {pitch} (micron) and {focal} (mm)"
        return Finding("detector.pixel_scale", float(f"{size:.4g}"), GUESSED, why)
    return Finding("detector.pixel_scale", None, OPEN, "arcsec/pixel; no header tells")


def read_section(text: Any) -> Section | None:
    """A FITS section, None where it is none."""
    try:
        found = section_kind.parse(plain(text).replace(" ", ""))
    except Unfit:
        return None
    assert isinstance(found, Section)
    return found


def _section(
    survey: Survey, names: tuple[str, ...], entry: str, image: Image, science: list[int]
) -> tuple[list[Finding], Section | None]:
    key = next((name for name in names if name in survey.cards and survey.values(name, science)), None)
    if key is None:
        return [], None
    texts = survey.distinct(key, science)
    found = read_section(texts[0])
    if found is None or found.x1 > image.sides[0] or found.y1 > image.sides[1]:
        why = f"{key} = {texts[0]} does not lie in the image of {image.sides[0]} x {image.sides[1]} pixels"
        return [Finding(entry, None, OPEN, why)], None
    if len(texts) > 1:
        why = f"{key} differs between frames ({', '.join(texts[:3])}): one windowing a night file; give the right one"
        return [Finding(entry, None, OPEN, why)], None
    return [Finding(entry, texts[0].replace(" ", ""), RECOGNISED, f"from {key}")], found


def find_beams(survey: Survey, extensions: tuple[int | str, int | str], offset: list[Finding]) -> list[Finding]:
    """Findings for two beams; `offset` holds what was measured of the second one's place."""
    why = (
        "no header tells the number of beams: two are proposed, of a prism with axes along and across +Q. "
        "Take beam[2] out where a polariser leaves one, add more where there are four"
    )
    turn = "the analyser's angle in the instrument frame; exchanged beams turn all angles by 90 deg. Confirm it"
    findings = [
        Finding("beam[1].name", "first", OPEN, why),
        Finding("beam[1].analyser", 0.0, OPEN, turn),
        Finding("beam[2].name", "second", OPEN, "as you call it"),
        Finding("beam[2].analyser", 90.0, OPEN, "across that of the first beam. Confirm with a standard"),
    ]
    if extensions[0] != extensions[1]:
        findings.append(Finding("beam[2].extension", extensions[1], GUESSED, "the second image of each file"))
        gain = _own_gains(survey, extensions)
        findings += gain
    return findings + offset


def _own_gains(survey: Survey, extensions: tuple[int | str, int | str]) -> list[Finding]:
    """The gain of each beam where the headers of its HDU tell different ones."""
    images = {image.hdu: image for image in survey.images[survey.science[0]]}
    for key in _GAIN:
        gains = [as_number(images[int(ext)].header.get(key)) for ext in extensions if int(ext) in images]
        if (
            len(gains) == 2
            and all(_PLAUSIBLE_GAIN[0] <= g <= _PLAUSIBLE_GAIN[1] for g in gains)
            and gains[0] != gains[1]
        ):
            return [
                Finding(f"beam[{number}].gain", gain, GUESSED, f"{key} of its HDU, taken as electron/adu")
                for number, gain in enumerate(gains, 1)
            ]
    return []
