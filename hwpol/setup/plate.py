"""Which keyword holds the wave plate, by what its values do.

A plate is set to few positions at regular steps, visits all of them on every target, and moves from frame to frame.
A rotator keeps its angle on a target, a filter wheel keeps its place through a cycle, airmass and temperatures
repeat no value, and a dither is no regular fraction of a turn. Names and comments of keywords only tip the balance.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.setup.findings import GUESSED, OPEN, RECOGNISED, Finding
from hwpol.setup.survey import Survey, as_number, plain

Floats = NDArray[np.float64]

#: Steps of a plate (deg) that are looked for, the likeliest first (common practice), with their weight.
_STEPS = ((22.5, 2.5), (45.0, 2.0), (11.25, 1.5), (90.0, 1.5), (30.0, -0.5), (15.0, -0.5), (60.0, -0.5))
_MOST_POSITIONS = 32
_SPREAD = 1.2  # deg: readings of one position that lie closer together than this
_NAMES = re.compile(
    r"(HWP|WAVE?PL|W_?PLATE|PLATE|RETARD|RET|(^|[ _-])WP|HALFW|LAMBDA|L/2|POL(?!Y|E)|PSI|RSP|ROTHWP|MODUL)", re.I
)
_REMARKS = re.compile(r"half.?wave|wave.?plate|retarder|plate (angle|position)|lambda/2|hwp|modulator|polari[sz]", re.I)
_NOT_NAMES = re.compile(
    r"(TEMP|AIRM|FOC|FILT|DOME|SLIT|AZ|ALT|(^|[ _-])HA$|EXPT|TIME|^UT|DATE|MJD|JD|COUNT|NUM|SEQ|NO$|ROTPA|ROTATOR|DITH"
    r"|OFF|RA$|DEC$|GAIN|WIND|HUM|PRES|PIXEL|CRVAL|CRPIX|CD\d|CDELT|SEC|QWP|GRAT)",
    re.I,
)
_NOT_REMARKS = re.compile(
    r"temperature|airmass|focus|filter|dome|dither|offset|counter|exposure|second|quarter|humidity|rotator|"
    r"sequence|number of|arcsec|telescope|detector|pixel|field rotation|sky angle",
    re.I,
)
_TEXT_NUMBER = re.compile(r"[+-]?\d+(?:\.\d+)?")
# A word that goes before the angle where it is hidden in another text.
_HIDDEN = re.compile(
    r"(?i)(?<![a-z])(hwp|wp|waveplate|wave-plate|plate|ret|retarder|psi|pol|angle|ang|pos|position)[\s_=:@-]*-?\d"
)
_TRAILING = re.compile(r".*?\S[\s_,;:@-]+-?\d+(?:\.\d+)?\s*(?:deg)?$")
_BEST_ENOUGH = 5.0
_LEAST_SHARE = 0.2  # of the science frames that hold the keyword


@dataclass(frozen=True)
class Reading:
    """How a keyword's values are read as plate positions.

    `angles` (deg or index, one per science frame, NaN unknown), `form` "angle", "radian", "index" or "text"; `step`
    deg (0 for an index), `start` the value of the first position, `spread` the largest scatter within one; `pattern`
    where the value stands inside a text, `rest` what remains of the text; `exact` whether the values lie on multiples
    of the step.
    """

    key: str
    form: str
    angles: Floats
    step: float
    start: float
    positions: int
    spread: float
    score: float
    pattern: str = ""
    object_pattern: str = ""
    exact: bool = True


def find_plate(survey: Survey, object_key: str) -> tuple[list[Finding], Reading | None]:
    """Findings for keywords.wave_plate and [wave_plate]; the reading tells whether names hide in the same text."""
    found = sorted(_candidates(survey, object_key), key=lambda reading: -reading.score)
    if not found or found[0].score < _BEST_ENOUGH:
        tried = f"; {found[0].key} comes nearest" if found else ""
        why = (
            "no keyword of the science frames steps through regular positions on every target" + tried + ". Give the "
            "keyword that holds the plate's angle or position, or none where there is no plate"
        )
        return [Finding("keywords.wave_plate", None, OPEN, why)], None
    return _findings(survey, found[0], found[1:]), found[0]


def _candidates(survey: Survey, object_key: str) -> list[Reading]:
    science = survey.science
    found = []
    for key in survey.cards:
        # Acquisition images and the like may go without the keyword.
        rows = [i for i in science if survey.cards[key][i] is not None]
        if len(rows) < max(2.0, _LEAST_SHARE * len(science)):
            continue
        objects = [plain(survey.cards[object_key][i]) if object_key in survey.cards else "" for i in rows]
        hint = _hint(survey, key)
        column = [survey.cards[key][i] for i in rows]
        for reading in _readings(survey, key, column, hint):
            names = objects
            if reading.object_pattern and key == object_key:
                names = [_first(reading.object_pattern, text) for text in objects]
            behaviour = _behaviour(reading, names)
            if behaviour is None:
                continue
            quiet = _constant(survey, key, survey.of("bias")) if survey.of("bias") else 0.0
            found.append(replace(reading, score=reading.score + behaviour + hint + 0.5 * quiet))
    return found


def _hint(survey: Survey, key: str) -> float:
    remark = survey.comment(key)
    for_it = 2.5 * bool(_NAMES.search(key)) + 2.5 * bool(_REMARKS.search(remark))
    against = 3.0 * bool(_NOT_NAMES.search(key)) + 3.0 * bool(_NOT_REMARKS.search(remark))
    return for_it - against if for_it < 2.5 or not _REMARKS.search(remark) else for_it - 0.5 * bool(against)


def _constant(survey: Survey, key: str, where: list[int]) -> float:
    return float(len(survey.distinct(key, where)) <= 1)


def _readings(survey: Survey, key: str, column: list[Any], hint: float) -> list[Reading]:
    """All ways in which a column may hold positions."""
    numbers = np.array([as_number(value) for value in column])
    if np.isfinite(numbers).mean() > 0.5:
        return _numeric(key, numbers, hint)
    texts = ["" if value is None else plain(value) for value in column]
    if all(re.match(r"[+-]?\d+[: h]\d+[: m]\d", text) or re.match(r"\d{4}-\d\d-", text) for text in texts if text):
        return []
    return _textual(key, texts, hint)


def _numeric(key: str, numbers: Floats, hint: float) -> list[Reading]:
    found = []
    angle = _steps(numbers)
    if angle is not None:
        found.append(_reading(key, "angle", numbers, *angle))
    largest = np.nanmax(np.abs(numbers))
    if hint > 0 and 0.1 < largest <= 2 * math.pi + 0.1 and (turned := _steps(np.degrees(numbers))) is not None:
        found.append(_reading(key, "radian", np.degrees(numbers), *turned))
    seen = np.unique(numbers[np.isfinite(numbers)])
    if 2 <= len(seen) <= _MOST_POSITIONS and not found:
        steps = np.diff(seen)
        regular = bool(np.all(np.abs(steps - steps[0]) < 1e-6 * np.abs(seen).max() + 1e-9))
        counts = regular and steps[0] == 1 and seen[0] in (0, 1)
        often = len(seen) <= np.isfinite(numbers).sum() / 2
        if (counts and len(seen) >= 3 and (often or hint > 0)) or (regular and hint > 2 and len(seen) >= 3):
            found.append(Reading(key, "index", numbers, 0.0, float(seen[0]), len(seen), 0.0, 0.0))
    return found


def _reading(key: str, form: str, angles: Floats, step: float, weight: float, start: float, n: int, spread: float,
             exact: bool) -> Reading:  # fmt: skip
    return Reading(key, form, angles, step, start, n, spread, weight + 0.5 * (spread < 0.01), exact=exact)


def _steps(values: Floats) -> tuple[float, float, float, int, float, bool] | None:
    """Step, its weight, first position, number of positions, spread, whether on multiples of the step."""
    known = values[np.isfinite(values)]
    if len(known) < 2 or np.abs(known).max() > 1e5:
        return None
    for step, weight in _STEPS:
        phase = np.exp(2j * np.pi * known / step)
        middle = float(np.angle(phase.mean())) * step / (2 * np.pi)
        away = (known - middle + step / 2) % step - step / 2
        if np.abs(away).max() > min(_SPREAD, 0.08 * step):
            continue
        places = np.unique(np.round((known - middle) / step).astype(int) % round(360 / step))
        turn = round(360 / step)
        if not 2 <= len(places) <= _MOST_POSITIONS or (len(places) == 2 and step > 45):
            continue
        gaps = np.diff(np.concatenate([places, [places[0] + turn]]))
        if gaps.min() > 1:
            continue
        # Where the plate has no full turn, it starts behind the widest gap.
        first = places[0] if len(places) == turn or gaps.max() == gaps[-1] else places[int(np.argmax(gaps)) + 1]
        exact = abs(middle) < max(0.1, 2 * float(np.std(away)))
        start = (first * step + (0.0 if exact else middle)) % 360
        return step, weight, float(start), len(places), float(np.ptp(away)), exact
    return None


def _textual(key: str, texts: list[str], hint: float) -> list[Reading]:
    """Positions in texts: a number with or without letters, or hidden behind a word in a longer text."""
    filled = [text for text in texts if text]
    found = []
    hidden = [_HIDDEN.search(text) for text in texts]
    if sum(match is not None for match in hidden) > 0.8 * len(filled):
        word = next(match.group(1) for match in hidden if match is not None)
        before = rf"(?<![a-z]){re.escape(word)}[\s_=:@-]*"
        found += _inside(
            key, texts, rf"(?i){before}(-?\d+(?:\.\d+)?)", rf"(?i)^(.*?)[\s_,;:()\[\]/-]*{before}-?\d", 2.0
        )
    if not found and sum(_TRAILING.match(text) is not None for text in texts) > 0.8 * len(filled):
        number = r"[\s_,;:@-]+(-?\d+(?:\.\d+)?)\s*(?:deg)?$"
        rest = r"^(.*?\S)[\s_,;:@-]+-?\d+(?:\.\d+)?\s*(?:deg)?$"
        # Names of stars end in numbers too: only angles count.
        found += [reading for reading in _inside(key, texts, number, rest, 0.5) if reading.form == "angle"]
    if found or len(set(filled)) > _MOST_POSITIONS or len(set(filled)) < 3:
        return found
    numbers = np.array([_number_in(text) for text in texts])
    if np.isfinite(numbers).mean() < 0.5:
        if hint > 2:
            order = {text: float(i) for i, text in enumerate(dict.fromkeys(filled))}
            angles = np.array([order.get(text, math.nan) for text in texts])
            found.append(Reading(key, "text", angles, 0.0, 0.0, len(order), 0.0, 0.0))
        return found
    for reading in _numeric(key, numbers, hint):
        readable = all(re.fullmatch(r"[+-]?\d+(?:\.\d+)?\s*(deg|degrees|degree|d)?", text, re.I) for text in filled)
        pattern = "" if readable else r"([+-]?\d+(?:\.\d+)?)"
        found.append(replace(reading, pattern=pattern))
    return found


def _inside(key: str, texts: list[str], pattern: str, rest: str, bonus: float) -> list[Reading]:
    numbers = np.array([as_number(_first(pattern, text) or None) for text in texts])
    found = []
    for reading in _numeric(key, numbers, bonus):
        found.append(replace(reading, pattern=pattern, object_pattern=rest, score=reading.score + bonus))
    return found


def _first(pattern: str, text: str) -> str:
    match = re.search(pattern, text)
    return match.group(1) if match else ""


def _number_in(text: str) -> float:
    match = _TEXT_NUMBER.search(text)
    return float(match.group()) if match else math.nan


def _behaviour(reading: Reading, objects: list[str]) -> float | None:
    """Points for how the values run through the targets; None where they do not behave as a plate does."""
    if reading.form in ("index", "text"):
        position = reading.angles
    else:
        position = np.round((reading.angles - reading.start) / reading.step) % round(360 / reading.step)
    covered, moves, chances = [], 0, 0
    for name in dict.fromkeys(objects):
        mine = position[[i for i, other in enumerate(objects) if other == name]]
        mine = mine[np.isfinite(mine)]
        if len(mine) < min(reading.positions, 4):
            continue
        covered.append(len(np.unique(mine)) / min(reading.positions, len(mine)))
        moves += int((np.diff(mine) != 0).sum())
        chances += len(mine) - 1
    if not covered or not chances:
        return None
    coverage, rate = float(np.mean(covered)), moves / chances
    if coverage < 0.5 or rate < 0.02:
        return None
    return 2.0 * coverage + 2.0 * min(2 * rate, 1.0)


def _findings(survey: Survey, chosen: Reading, others: list[Reading]) -> list[Finding]:
    key = chosen.key
    named = bool(_NAMES.search(key)) or bool(_REMARKS.search(survey.comment(key)))
    if chosen.form in ("index", "text"):
        texts = {_first(chosen.pattern, t) if chosen.pattern else t for t in survey.distinct(key, survey.science)}
        shown = f"{chosen.positions} positions ({', '.join(sorted(texts)[:8])})"
        sure = named
    else:
        shown = f"{chosen.positions} positions at steps of {chosen.step:g} deg"
        sure = named or (chosen.step == 22.5 and chosen.positions >= 4)
    why = f"its values step through {shown} on the targets"
    if (remark := survey.comments.get(key)) and named:
        why += f"; the header says: {remark}"
    rivals = list(dict.fromkeys(o.key for o in others if o.score > chosen.score - 2.0 and o.key != key))
    if rivals:
        why += f"; {', '.join(rivals[:3])} behave alike: look which one holds the plate"
    # A rival close behind makes even a well-named keyword a guess.
    sure = sure and not any(o.score > chosen.score - 1.0 and o.key != key for o in others)
    entry: Any = key
    if chosen.pattern and (chosen.object_pattern or not _by_values(chosen)):
        entry = {"keyword": key, "pattern": chosen.pattern}
        why += "; the pattern picks the number out of the text"
    elif chosen.form == "radian":
        entry = {"keyword": key, "unit": "rad"}
        why += "; as radians"
    # A number picked out of a text by its looks may mean something else in the next one.
    sure = sure and not chosen.object_pattern
    findings = [Finding("keywords.wave_plate", entry, RECOGNISED if sure else GUESSED, why)]
    findings.append(
        Finding(
            "wave_plate.retardance",
            180.0,
            OPEN,
            "no header tells it; 180 is a perfect half-wave plate. Give the measured value, per filter where known "
            "({V = 178.0, R = 181.5}): the 4 psi signal is (1 - cos retardance)/2",
        )
    )
    return findings + (_counted(survey, chosen) if _by_values(chosen) else _measured(chosen))


def _by_values(reading: Reading) -> bool:
    return reading.form in ("index", "text")


def _counted(survey: Survey, chosen: Reading) -> list[Finding]:
    """[wave_plate] for an encoder that counts positions: a table of what each stands for."""
    texts = survey.distinct(chosen.key, survey.science)
    if chosen.object_pattern:
        texts = list(dict.fromkeys(_first(chosen.pattern, text) for text in texts))
    if chosen.form == "index":
        texts.sort(key=_number_in)
    else:
        texts = list(dict.fromkeys(plain(value) for value in survey.values(chosen.key, survey.science)))
    values = {text: 22.5 * i for i, text in enumerate(t for t in texts if t)}
    order = "counted" if chosen.form == "index" else "taken in the order of first use"
    why = (
        f"the header numbers positions; {order}, 22.5 deg apart (the usual step) from 0. Confirm the step and the order"
    )
    return [Finding("wave_plate.values", values, GUESSED, why), *_zero_and_sense(0.0, OPEN, "")]


def _measured(chosen: Reading) -> list[Finding]:
    """[wave_plate] for a header that holds an angle."""
    scale = next((s for s in (1.0, 0.5, 0.25) if (4 * s * chosen.step) % 180 > 1e-9), 1.0)
    if scale == 1.0:
        why = f"steps of {chosen.step:g} deg of the plate itself measure q and u"
        if chosen.step in (30.0, 60.0):
            why += "; so they would if the header held 2 psi (then 0.5): look it up"
        findings = [Finding("wave_plate.scale", 1.0, GUESSED, why)]
    else:
        why = (
            f"steps of {chosen.step:g} deg of the plate itself would measure q alone, so the header is taken to hold "
            f"{1 / scale:g} psi; 1.0 if it holds psi after all"
        )
        findings = [Finding("wave_plate.scale", scale, GUESSED, why)]
    if chosen.exact:
        findings += _zero_and_sense(0.0, OPEN, " (the positions are multiples of the step)")
    else:
        start = round(chosen.start, 2)
        findings += _zero_and_sense(
            start, GUESSED, f"; the positions begin at {start:g}, no multiple of {chosen.step:g}: taken for it"
        )  # fmt: skip
    if chosen.spread > 0.5:
        tolerance = round(min(max(1.0, 1.5 * chosen.spread), chosen.step / 4), 1)
        why = f"readings of one position differ by up to {chosen.spread:.2f} deg"
        findings.append(Finding("wave_plate.tolerance", tolerance, GUESSED, why))
    return findings


def _zero_and_sense(zero: float, how: str, why: str) -> list[Finding]:
    return [
        Finding(
            "wave_plate.zero",
            zero,
            how,
            f"no header tells at which value the fast axis lies along +Q{why}. What is left of it becomes part of the "
            "zero angle fitted from polarised standards; confirm with one",
        ),
        Finding(
            "wave_plate.sense",
            1,
            OPEN,
            "no header tells; -1 where the header's angle grows against the sense of instrument angles. Two polarised "
            "standards of different angle decide: with the wrong sense their residual angles disagree",
        ),
    ]
