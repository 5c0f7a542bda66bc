"""Reads and checks the instrument file."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

from hwpol.instrument.description import Band, Beam, Instrument, Orientation, WavePlate
from hwpol.instrument.keys import INSTRUMENT
from hwpol.instrument.names import normal_name
from hwpol.instrument.toml_check import KeyInfo, Problems, known_keys_of, read_toml, read_tree

_SAME_ANGLE = 1e-9  # deg: rounding of angles written in decimals


@cache
def known_keys() -> dict[str, KeyInfo]:
    """Return all keys of the instrument file by dotted name; ``*`` stands for a name of the user's choice."""
    return known_keys_of(INSTRUMENT)


def read_instrument(path: str | Path) -> Instrument:
    """Read and check an instrument file.

    Relative paths in it start at its folder.

    Raises
    ------
    ConfigError
        With a line for each problem: place, value, what is allowed and the nearest known key.
    """
    tree = read_toml(path)
    absolute = Path(os.path.abspath(path))
    return replace(instrument_from_dict(tree, source=str(path), folder=absolute.parent), path=absolute)


def instrument_from_dict(tree: Mapping[str, Any], source: str = "", folder: Path | None = None) -> Instrument:
    """Check a tree laid out as an instrument file and return the instrument.

    Parameters
    ----------
    tree : mapping
        The content of the file; left as it is.
    source : str
        Named in messages.
    folder : Path, optional
        Where relative paths start; the working folder by default.

    Raises
    ------
    ConfigError
        With a line for each problem.
    """
    table = replace(INSTRUMENT, rule=lambda values, _, problems: _check_whole(tree, values, problems), build=_assemble)
    instrument: Instrument = read_tree(table, tree, source=source, folder=folder)
    return instrument


def _given(tree: Any, *names: str) -> bool:
    for name in names:
        if not isinstance(tree, Mapping) or name not in tree:
            return False
        tree = tree[name]
    return True


def _check_whole(tree: Mapping[str, Any], values: dict[str, Any], problems: Problems) -> None:
    """Note what is wrong between sections; those of `values` that have problems of their own are absent."""
    beams = tree.get("beam")
    own_gains = isinstance(beams, list | tuple) and beams and all(_given(beam, "gain") for beam in beams)
    if not (_given(tree, "detector", "gain") or _given(tree, "keywords", "gain") or own_gains):
        problems.missing("detector.gain", "a number (electron/adu) > 0, or keywords.gain, or the gain of every beam")
    if _given(tree, "wave_plate") and _given(tree, "keywords") and not _given(tree, "keywords", "wave_plate"):
        problems.missing("keywords.wave_plate", "the keyword of the wave plate, as there is a [wave_plate]")
    for one, other in (("ra", "dec"), ("dec", "ra")):
        if _given(tree, "keywords", one) and not _given(tree, "keywords", other):
            problems.missing(f"keywords.{other}", f"a keyword, as there is keywords.{one}")
    _check_kinds(tree, values.get("kinds"), problems)
    _check_beams(values, problems)
    orientation = values.get("orientation")
    if isinstance(orientation, Orientation) and not _given(tree, "site"):
        if orientation.position_angle == "parallactic":
            problems.add("orientation.position_angle", "parallactic", "a table [site] with it: longitude, latitude")
        if orientation.frame != "instrument":
            problems.add("orientation.frame", orientation.frame, "a table [site] with it: longitude, latitude")


def _check_kinds(tree: Mapping[str, Any], kinds: dict[str, tuple[str, ...]] | None, problems: Problems) -> None:
    owner: dict[str, str] = {}
    for kind, texts in (kinds or {}).items():
        if not _given(tree, "kinds", kind):
            continue
        for text in texts:
            other = owner.setdefault(normal_name(text), kind)
            if other != kind:
                problems.add(f"kinds.{kind}", text, f"a value that kinds.{other} does not list as well")
    if kinds:
        for kind, texts in kinds.items():
            if not _given(tree, "kinds", kind):
                kinds[kind] = tuple(text for text in texts if normal_name(text) not in owner)


def _check_beams(values: dict[str, Any], problems: Problems) -> None:
    beams: tuple[dict[str, Any], ...] = values.get("beam") or ()
    seen: dict[str, int] = {}
    for number, beam in enumerate(beams, 1):
        name = beam["name"]
        if name in seen:
            problems.add(f"beam[{number}].name", name, f"a name of its own: beam[{seen[name]}] has it")
        seen.setdefault(name, number)
    if beams and beams[0]["offset"] not in (None, (0.0, 0.0)):
        problems.add("beam[1].offset", list(beams[0]["offset"]), "[0.0, 0.0]: offsets count from the first beam")
    if len(beams) > 1:
        turns = [(beam["analyser"] - beams[0]["analyser"]) % 180 for beam in beams]
        if all(min(turn, 180 - turn) < _SAME_ANGLE for turn in turns):
            problems.add(
                "beam[2].analyser",
                beams[1]["analyser"],
                "an angle that differs from beam[1] modulo 180 deg: beams that are all alike measure no polarisation",
            )
    if "detector" in values:
        places: dict[tuple[Any, ...], int] = {}
        for number, beam in enumerate(beams, 1):
            own = values["detector"].extension if beam["extension"] is None else beam["extension"]
            place = (own, _offset(beam, beams[0]), beam["section"])
            if place in places:
                problems.add(
                    f"beam[{number}].offset",
                    list(place[1]),
                    f"a place of its own (offset, section or extension): beam[{places[place]}] lies there",
                )
            places.setdefault(place, number)


def _offset(beam: dict[str, Any], first: dict[str, Any]) -> tuple[float, float]:
    if beam["offset"] is not None:
        x, y = beam["offset"]
        return x, y
    own, start = beam["section"], first["section"]
    if own is None or start is None:
        return 0.0, 0.0
    return float(own.x0 - start.x0), float(own.y0 - start.y0)


def _assemble(values: dict[str, Any]) -> Instrument:
    filters: dict[str, Any] = dict(values["filters"])
    clear: tuple[str, ...] = filters.pop("clear")
    bands: dict[str, Band] = filters
    named = {name.strip().lower() for name in bands}
    plate = values["wave_plate"]
    if plate is None and "wave_plate" in values["keywords"]:
        plate = WavePlate()
    raw_beams = values["beam"]
    return Instrument(
        name=values["name"],
        detector=values["detector"],
        keywords=values["keywords"],
        beams=tuple(Beam(**{**beam, "offset": _offset(beam, raw_beams[0])}) for beam in raw_beams),
        kinds=values["kinds"],
        filters=bands,
        clear_filters=tuple(text for text in clear if text not in named),
        wave_plate=plate,
        orientation=values["orientation"],
        site=values["site"],
    )
