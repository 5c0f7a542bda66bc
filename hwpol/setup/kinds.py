"""Which keyword tells the kind of a frame, by its values."""

from __future__ import annotations

import re
from functools import lru_cache
from typing import Any

from hwpol.setup.findings import GUESSED, OPEN, RECOGNISED, Finding
from hwpol.setup.survey import Survey, plain

KINDS = ("bias", "dark", "flat", "science")
# Words of the trade (common practice) that say a frame's kind; a word may begin or end with them.
_WORDS = {
    "bias": ("bias", "zero"),
    "dark": ("dark",),
    "flat": ("flat", "skyflat", "domeflat", "twilight", "flatfield"),
    "science": (
        "object",
        "obj",
        "science",
        "sci",
        "light",
        "target",
        "standard",
        "std",
        "star",
        "sky",
        "onsky",
        "on-sky",
    ),
}
_OTHER = ("focus", "test", "acq", "acquisition", "arc", "comp", "comparison", "lamp", "align", "calib", "calibration")
_NAMES = re.compile(r"(IMAGE?TYP|OBS-?TYPE|FRAME?TYP|FRMKIND|FRAME|KIND|DPR TYPE|EXPTYPE|DATATYPE|TYPE|PICTTYPE)", re.I)
_MOST_VALUES = 20


@lru_cache(maxsize=4096)
def kind_of(text: str) -> str:
    """Kind that a header text says; "other" for frames of no use here, "" where it says nothing."""
    words = [word for word in re.split(r"[^a-z]+", text.casefold()) if word]
    for kind in KINDS:
        for stem in _WORDS[kind]:
            long = len(stem) > 3
            if any(w == stem or (long and (w.startswith(stem) or w.endswith(stem))) for w in words):
                return kind
    return "other" if any(word in _OTHER for word in words) else ""


def find_kind(survey: Survey) -> tuple[list[Finding], Survey]:
    """Findings for the kind keyword and [kinds], and the survey with the kind of each file."""
    everywhere = list(range(len(survey.files)))
    best: tuple[float, str] = (0.0, "")
    for key in survey.cards:
        score = _score(survey, key, everywhere)
        if score > best[0]:
            best = (score, key)
    if best[1]:
        return _by_keyword(survey, best[1], everywhere)
    if (naming := _object_says(survey, everywhere)) is not None:
        return _by_object(survey, naming, everywhere)
    return [
        Finding(
            "keywords.kind",
            None,
            OPEN,
            "no keyword has values such as bias, flat, object; without it every frame counts as science. Give the "
            "keyword, or list calibrations under `exclude` in the night file",
        )
    ], survey.with_kinds(["science"] * len(everywhere))


def _score(survey: Survey, key: str, everywhere: list[int]) -> float:
    values = survey.values(key, everywhere)
    texts = survey.distinct(key, everywhere)
    named = bool(_NAMES.search(key)) or any(
        word in survey.comment(key) for word in ("type of", "kind of", "frame type")
    )
    if not texts or len(texts) > _MOST_VALUES or not all(isinstance(value, str) for value in values):
        return 0.0
    found = [kind_of(text) for text in texts]
    told = sum(kind_of(value) not in ("", "other") for value in values) / len(everywhere)
    kinds = {kind for kind in found if kind in KINDS}
    if not kinds or told < 0.5 or found.count("") > len(found) / 2 or (len(kinds) < 2 and not named):
        return 0.0
    # Names of stars and programmes may hold a word of the list; a true kind keyword has a word in every value.
    return 2.0 * len(kinds) + 3.0 * told + 2.0 * named - 1.5 * found.count("")


def _by_keyword(survey: Survey, key: str, everywhere: list[int]) -> tuple[list[Finding], Survey]:
    texts = survey.distinct(key, everywhere)
    lists: dict[str, list[str]] = {
        kind: list(dict.fromkeys(t.lower() for t in texts if kind_of(t) == kind)) for kind in KINDS
    }
    sure = sum(bool(values) for values in lists.values()) >= 2
    shown = ", ".join(texts)
    findings = [
        Finding(
            "keywords.kind",
            key,
            RECOGNISED if sure else GUESSED,
            f"its values are {shown}" + ("" if sure else ", one kind only; the name or comment of the keyword decided"),
        )
    ]
    for kind, values in lists.items():
        if values:
            exact = all(re.split(r"[^a-z]+", value)[0] in _WORDS[kind] for value in values)
            how = RECOGNISED if exact else GUESSED
            findings.append(Finding(f"kinds.{kind}", values, how, f"values of {key} that say {kind}"))
        elif kind != "dark":
            findings.append(
                Finding(f"kinds.{kind}", None, OPEN, f"no value of {key} says {kind}: no such frame is here")
            )
    left = [text for text in texts if not any(text.lower() in values for values in lists.values())]
    if left:
        findings.append(
            Finding(
                "kinds.others",
                None,
                OPEN,
                f"{key} also has {', '.join(left)}: these frames will be set aside; add a value to one of the lists "
                "above if it belongs there",
            )
        )
    column = survey.cards[key]
    kinds = [kind_of(plain(value)) if value is not None else "" for value in column]
    return findings, survey.with_kinds(kind if kind in KINDS else "" for kind in kinds)


def _object_says(survey: Survey, everywhere: list[int]) -> str | None:
    """Keyword of the object where that alone tells calibrations from targets."""
    for key in ("OBJECT", "TARGET", "TARGNAME", "OBJNAME"):
        if key in survey.cards:
            kinds = {kind_of(text) for text in survey.distinct(key, everywhere)}
            if kinds & {"bias", "dark", "flat"}:
                return key
    return None


def _by_object(survey: Survey, key: str, everywhere: list[int]) -> tuple[list[Finding], Survey]:
    def kind(value: Any) -> str:
        found = "" if value is None else kind_of(plain(value))
        return found if found in ("bias", "dark", "flat") else "science" if value is not None else ""

    findings = [
        Finding(
            "keywords.kind", key, GUESSED, f"no keyword tells the kind of a frame, but {key} names the calibrations"
        )
    ]
    texts = survey.distinct(key, everywhere)
    for name in KINDS:
        values = list(dict.fromkeys(text.lower() for text in texts if kind(text) == name))
        if values:
            why = (
                f"values of {key} that say {name}"
                if name != "science"
                else f"all other values of {key}; add new targets"
            )
            findings.append(Finding(f"kinds.{name}", values, GUESSED, why))
    return findings, survey.with_kinds(kind(value) for value in survey.cards[key])
