"""Which keywords hold the filters, one per wheel, and what their values stand for."""

from __future__ import annotations

import re

from hwpol.correction.catalogue.bands import band_name
from hwpol.errors import MissingError
from hwpol.frames.values import filter_name
from hwpol.instrument.description import Keyword
from hwpol.setup.findings import GUESSED, OPEN, RECOGNISED, Finding
from hwpol.setup.survey import Survey, as_number

_NAMES = re.compile(r"(FILT|FLT|BAND|FWHEEL|FWNAME|FW\d|PASSB)", re.I)
_NOT_NAMES = re.compile(r"(WIDTH|TEMP|FOC|STAT|BANDWID|POS$|DATE|TIME|OBJ|TARG|PROP|OBSERV|COMM|PLATE|NUM)", re.I)
_CLEAR = {"clear", "open", "empty", "free", "none", "air", "hole", "nofilter", "no", "blank", "out", "null", "n/a", ""}
_WORDS = re.compile(
    r"(bess|johnson|cousins|sdss|sloan|stromgren|str[oö]m|halpha|h-?alpha|\bha\b|oiii|sii|luminance|\bred\b|\bgreen\b|"
    r"\bblue\b|narrow|continuum|\bz_?s\b|\b[JHK]s?\b|\b\d{3,4} ?nm\b)",
    re.I,
)
_MOST = 15


def is_clear(text: str) -> bool:
    """Whether a filter's value means that there is none."""
    return re.sub(r"[\s_-]+", "", text).casefold().rstrip("0123456789") in _CLEAR and not text.strip().isdigit()


def find_filters(survey: Survey) -> list[Finding]:
    """Findings for keywords.filter and [filters]."""
    lit = survey.of("science", "flat") or list(survey.order)
    scores = {key: _score(survey, key, lit) for key in survey.cards}
    key = max(scores, key=lambda name: scores[name]) if scores else ""
    if not key or scores[key] <= 2.0:
        why = "no keyword has values that look like filters; without it all frames count as one filter"
        return [Finding("keywords.filter", None, OPEN, why)]
    keys = _wheels(survey, key, scores, lit)
    shown = "; ".join((f"{k}: " if len(keys) > 1 else "") + ", ".join(survey.distinct(k, lit)) for k in keys)
    named, banded = bool(_NAMES.search(key)), any(_is_filter(text) for text in survey.distinct(key, lit))
    others = [k for k, score in scores.items() if score > scores[key] - 1.0 and k not in keys]
    sure = named and banded and not others
    why = f"values {shown}" + (f"; {', '.join(others[:3])} looks alike" if others else "")
    if not named:
        why += "; its name does not say so, its values do"
    elif not banded:
        why += "; its name says so, its values are no bands known here"
    findings = [Finding("keywords.filter", keys[0] if len(keys) == 1 else keys, RECOGNISED if sure else GUESSED, why)]
    return findings + _bands(survey, keys, lit)


def _is_filter(text: str) -> bool:
    return bool(band_name(text) or _WORDS.search(text))


def _score(survey: Survey, key: str, lit: list[int]) -> float:
    texts = survey.distinct(key, lit)
    if not texts or len(texts) > _MOST or len(max(texts, key=len)) > 40:
        return 0.0
    named = bool(_NAMES.search(key)) and not _NOT_NAMES.search(key)
    said = "filter" in survey.comment(key)
    if _NOT_NAMES.search(key):
        return 0.0
    looks = sum(_is_filter(text) or is_clear(text) for text in texts) / len(texts)
    bands = any(_is_filter(text) for text in texts)
    numeric = all(as_number(text) == as_number(text) for text in texts)
    # One value all night says little, unless it names a filter in so many words ("Bess V").
    alone = len(texts) < 2 and not all(_WORDS.search(text) for text in texts)
    if not (named or said) and (not bands or looks < 1.0 or numeric or alone):
        return 0.0
    stands = survey.share(key, lit)
    return 2.0 * named + 1.0 * said + 2.0 * looks * bands + 1.0 * (len(texts) > 1) + stands - 1.5 * numeric


def _wheels(survey: Survey, key: str, scores: dict[str, float], lit: list[int]) -> list[str]:
    """The keyword and its likes that differ by one number or letter: one for each wheel."""
    stem = re.sub(r"\d+|(?<=FILT)[A-Z]$|(?<=FILTER)[A-Z]$", "#", key)
    if stem == key:
        return [key]
    likes = [k for k in survey.cards if re.sub(r"\d+|(?<=FILT)[A-Z]$|(?<=FILTER)[A-Z]$", "#", k) == stem]
    kinds = [k for k in likes if k == key or (scores[k] > 0 or all(is_clear(t) for t in survey.distinct(k, lit)))]
    return sorted(kinds)


def _bands(survey: Survey, keys: list[str], lit: list[int]) -> list[Finding]:
    """What each filter, named as frames will name it, stands for."""
    from hwpol.correction.catalogue import Catalogue

    clear = list(dict.fromkeys(t.lower() for k in keys for t in survey.distinct(k, lit) if is_clear(t)))
    listed = [*clear, *(word for word in ("clear", "open", "") if word not in clear)]
    how, why = (
        (RECOGNISED, "values that mean no filter") if clear else (GUESSED, "the usual values that mean no filter")
    )
    findings = [Finding("filters.clear", listed, how, why)]
    catalogue = Catalogue.read()
    keyword = Keyword(tuple(keys))
    names: dict[str, None] = {}
    for i in lit:
        cards = {k: survey.cards[k][i] for k in keys if survey.cards[k][i] is not None}
        if cards:
            names[filter_name([cards], keyword, listed)] = None
    for name in names:
        band = band_name(name)
        if name == "clear":
            continue
        if band is None:
            findings.append(
                Finding(
                    f"filters.{name}",
                    None,
                    OPEN,
                    'which band of the standard-star tables is it? As {band = "R", wavelength = 0.64} (micron)',
                )
            )
            continue
        try:
            entry = {"band": band, "wavelength": catalogue.wavelength_of(band)}
        except MissingError:
            entry = {"band": band}
        findings.append(
            Finding(
                f"filters.{name}", entry, GUESSED, "from its name; give the filter's own effective wavelength (micron)"
            )
        )
    return findings
