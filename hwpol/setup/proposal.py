"""From a folder of raw frames to a proposed instrument file and night file."""

from __future__ import annotations

import glob
import os
import re
import tempfile
import textwrap
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from hwpol.correction.catalogue import Catalogue
from hwpol.errors import ConfigError, HwpolError, InputError
from hwpol.frames.values import ValueProblem, coordinate, text
from hwpol.instrument.description import Keyword
from hwpol.instrument.names import normal_name
from hwpol.instrument.reading import read_instrument
from hwpol.night.config import read_night
from hwpol.products.writing import write_text
from hwpol.setup import detector, filters, kinds, offsets, plate, quantities, sky
from hwpol.setup.findings import GUESSED, OPEN, RECOGNISED, Finding, comment, quoted, render
from hwpol.setup.survey import Survey, survey

_SECTIONS = (
    "name",
    "detector",
    "keywords",
    "kinds",
    "filters",
    "wave_plate",
    "beam[1]",
    "beam[2]",
    "orientation",
    "site",
)
_MOST_PATTERNS = 8
_HEAD = (
    "Proposed from {files} FITS files in {folder}. Every line says how it was found: `recognised` from the headers, "
    "`guessed` (confirm it), or `to fill in` (nothing tells it; what stands there is a stand-in). "
    "{open} to fill in, {guessed} guessed."
)


@dataclass(frozen=True)
class Proposal:
    """A proposed instrument file and night file.

    Attributes
    ----------
    folder : Path
        Where the frames are.
    instrument_text, night_text : str
        The files; paths in the night file start at `folder`.
    findings : tuple of Finding
        (key, value, how, why) of every key of the instrument file, in the file's order, and of every target
        (``target.NAME``); how is "recognised", "guessed" or "to fill in".
    problems : tuple of str
        What keeps the files from being read as they stand, one line each; empty when they can be used.
    notes : tuple of str
        Files that were left out, and why.
    patterns : tuple of str
        Of the frames, relative to `folder`.
    """

    folder: Path
    instrument_text: str
    night_text: str
    findings: tuple[Finding, ...]
    problems: tuple[str, ...]
    notes: tuple[str, ...]
    patterns: tuple[str, ...]

    def write(self, where: str | Path) -> list[Path]:
        """Write both files to a folder, whole or not at all; an existing file is never touched.

        Where `instrument.toml` or `night.toml` exists, `instrument.new.toml` or `night.new.toml` is written.

        Returns
        -------
        list of Path
            The instrument file and the night file.

        Raises
        ------
        InputError
            Those exist as well, or the folder cannot be written.
        """
        target = Path(where)
        paths = [_free(target, "instrument"), _free(target, "night")]
        night = _relocated(self.night_text, self.patterns, self.folder, target, paths[0].name)
        write_text(paths[0], self.instrument_text)
        try:
            write_text(paths[1], night)
        except InputError:
            paths[0].unlink()
            raise
        return paths

    def summary(self) -> str:
        """What was found, guessed and left open, for the screen."""
        lines = []
        for how, title in ((RECOGNISED, "Recognised"), (GUESSED, "Guessed: confirm"), (OPEN, "To fill in")):
            chosen = [f for f in self.findings if f.how == how and not f.key.startswith("target.")]
            if not chosen:
                continue
            lines.append(f"{title} ({len(chosen)})")
            width = min(max(len(f.key) for f in chosen), 28)
            for f in chosen:
                value = "" if f.value is None else f"{_short(f.value)}: "
                # The files hold the whole reason; a screen is for its first sentence.
                said = f"  {f.key:<{width}}  {value}{f.why.partition('. ')[0]}"
                lines += textwrap.wrap(said, 118, subsequent_indent=" " * (width + 4), break_long_words=False)
            lines.append("")
        names = [f.key.partition(".")[2] for f in self.findings if f.key.startswith("target.")]
        lines.append(f"Targets ({len(names)}): {', '.join(names[:12])}{', ...' if len(names) > 12 else ''}")
        lines += list(self.notes)
        if self.problems:
            lines += ["", "Before the files can be used:", *(f"  {line}" for line in self.problems)]
        else:
            lines += ["", "Both files can be read as they stand; look at the guesses first."]
        return "\n".join(lines)


def _short(value: Any) -> str:
    if isinstance(value, dict):
        shown = ", ".join(f"{name} = {item}" for name, item in value.items())
    elif isinstance(value, list):
        shown = ", ".join(str(item) or '""' for item in value)
    else:
        shown = str(value)
    return shown if len(shown) <= 60 else shown[:57] + "..."


def _free(folder: Path, name: str) -> Path:
    for path in (folder / f"{name}.toml", folder / f"{name}.new.toml"):
        if not os.path.lexists(path):
            return path
    raise InputError(
        f"{folder}: {name}.toml and {name}.new.toml exist; nothing was written. Move one away, or choose another folder"
    )


def propose(folder: str | Path, *, measure_offset: bool = False) -> Proposal:
    """Propose an instrument file and a night file from the headers of a folder's FITS files.

    Parameters
    ----------
    folder : path
        Holds the raw frames, in sub-folders too.
    measure_offset : bool
        Measure the place of the second beam on up to four science frames; the only pixels that are read.

    Returns
    -------
    Proposal

    Raises
    ------
    InputError
        There is no such folder, or no FITS image in it.
    """
    found = survey(folder)
    kind_findings, found = kinds.find_kind(found)
    time_findings, found = quantities.find_time(found)
    objects = quantities.find_object(found)
    plate_findings, reading = plate.find_plate(found, str(objects[0].value))
    if reading is not None and reading.object_pattern and reading.key == objects[0].value:
        entry = {"keyword": reading.key, "pattern": reading.object_pattern}
        why = "the pattern leaves out the plate's position, which stands in the same text"
        objects = [Finding("keywords.object", entry, GUESSED, why)]
    extension_findings, extensions = detector.find_extension(found)
    chip, light = detector.find_detector(found, extensions[0])
    names = _names(found, objects[0].value)
    if measure_offset:
        offset = offsets.measure_offset(found, _one_per_target(found, names), extensions, light)
    elif extensions[0] != extensions[1]:
        why = "the beams have images of their own; measure their offset with --measure-offset, or give it"
        offset = [Finding("beam[2].offset", [0.0, 0.0], OPEN, why)]
    else:
        why = (
            "pixels [x, y] from a star's image in the first beam to that in the second: measure it on a frame, or let "
            "--measure-offset do so"
        )
        offset = [Finding("beam[2].offset", None, OPEN, why)]
    beams = detector.find_beams(found, extensions, offset)
    gain = detector.find_gain(found)
    if any(f.key == "beam[1].gain" for f in beams):
        gain = []
    findings = [
        _name(found),
        *gain, *chip, *extension_findings, *kind_findings, *objects, *filters.find_filters(found),
        *quantities.find_exposure(found), *time_findings, *plate_findings, *quantities.find_position(found),
        *quantities.find_airmass(found), *beams, *sky.find_orientation(found), *sky.find_site(found),
    ]  # fmt: skip
    findings.sort(key=_place)
    targets = _targets(found, names, findings)
    patterns = _patterns(found)
    counts = {how: sum(f.how == how for f in findings) for how in (OPEN, GUESSED)}
    head = comment(
        _HEAD.format(
            files=len(found.files), folder=found.folder.name or ".", open=counts[OPEN], guessed=counts[GUESSED]
        )
    )
    titles = {"wave_plate": "psi = sense x scale x (value - zero)", "keywords": "FITS keyword that holds each quantity"}
    instrument = "\n".join(head) + "\n\n" + render(findings, titles)
    night = _night(patterns, targets)
    proposal = Proposal(found.folder, instrument, night, (*findings, *targets), (), _notes(found), patterns)
    return replace(proposal, problems=_problems(instrument, night))


def _place(finding: Finding) -> int:
    section = finding.key.partition(".")[0]
    return _SECTIONS.index(section)


def _name(found: Survey) -> Finding:
    for key in ("INSTRUME", "INSTRUMENT", "INSTNAME", "DETECTOR"):
        if key in found.cards and (texts := found.distinct(key, found.science)):
            return Finding("name", texts[0], RECOGNISED, f"from {key}")
    return Finding("name", "unnamed instrument", OPEN, "the instrument's name, as you call it")


def _keyword(value: Any) -> Keyword:
    if isinstance(value, str):
        return Keyword((value,))
    return Keyword((value["keyword"],), **{name: item for name, item in value.items() if name != "keyword"})


def _read(found: Survey, i: int, keyword: Keyword) -> str:
    cards: Any = [{key: found.cards[key][i] for key in keyword.keywords if key in found.cards
                   and found.cards[key][i] is not None}]  # fmt: skip
    try:
        return text(cards, keyword)
    except ValueProblem:
        return ""


def _names(found: Survey, entry: Any) -> dict[str, list[int]]:
    """Frames of each target, as its name stands in the headers; names that differ in case and blanks are one."""
    keyword = _keyword(entry)
    names: dict[str, list[int]] = {}
    shown: dict[str, str] = {}
    for i in found.of("science"):
        name = _read(found, i, keyword)
        if normal_name(name):
            names.setdefault(shown.setdefault(normal_name(name), name), []).append(i)
    return names


def _one_per_target(found: Survey, names: dict[str, list[int]]) -> list[int]:
    """One science frame of each target, then the others."""
    firsts = [frames[0] for frames in names.values()]
    return firsts + [i for i in found.science if i not in set(firsts)]


def _targets(found: Survey, names: dict[str, list[int]], findings: list[Finding]) -> list[Finding]:
    """A finding for each target: its role as the standard-star tables have it."""
    entries = {f.key: f.value for f in findings}
    catalogue = Catalogue.read()
    targets = []
    for name, frames in names.items():
        ra, dec = (
            _coordinate(found, frames[0], entries.get(f"keywords.{axis}"), axis == "ra") for axis in ("ra", "dec")
        )
        count = f"{len(frames)} frames"
        try:
            star = catalogue.star(name, ra, dec)
        except InputError as doubt:
            targets.append(Finding(f"target.{name}", "science", GUESSED, f"{count}; {doubt}"))
            continue
        if star is None:
            why = f"{count}; in no standard-star table under this name" + (
                " or at this place" if ra is not None else ""
            )
            targets.append(Finding(f"target.{name}", "science", GUESSED, f"{why}, so science"))
        else:
            why = f"{count}; {star.name} of the standard-star tables" + (
                ", which varies" if star.first("variable") else ""
            )
            targets.append(Finding(f"target.{name}", star.role, RECOGNISED, why))
    return targets


def _coordinate(found: Survey, i: int, entry: Any, hours: bool) -> float | None:
    if entry is None:
        return None
    keyword = _keyword(entry)
    value = found.cards[keyword.keywords[0]][i]
    # Coordinates of an older equinox would miss their star by more than the search radius.
    if value is None or keyword.equinox is not None:
        return None
    try:
        return coordinate([{keyword.keywords[0]: value}], keyword, hours=hours)
    except ValueProblem:
        return None


def _patterns(found: Survey) -> tuple[str, ...]:
    """Patterns of the frames, relative to the folder: one for each sub-folder and ending."""
    pairs: dict[tuple[str, str], None] = {}
    for path in found.files:
        ending = "".join(re.findall(r"\.(?:fits?|fts|gz|bz2|fz)(?=\.|$)", path.name, re.I)) or path.suffix
        place = path.parent.relative_to(found.folder).as_posix()
        pairs["" if place == "." else glob.escape(place) + "/", glob.escape(ending)] = None
    if len(pairs) > _MOST_PATTERNS:
        return tuple(f"**/*{ending}" for ending in dict.fromkeys(ending for _, ending in pairs))
    return tuple(_sayable(f"{place}*{ending}") for place, ending in pairs)


def _sayable(pattern: str) -> str:
    """Bytes of a file name that are no text become a wildcard."""
    return "".join("?" if "\udc80" <= c <= "\udcff" else c for c in pattern)


def _night(patterns: tuple[str, ...], targets: list[Finding]) -> str:
    lines = [
        *comment(
            "Proposed from the headers of the frames. Keys left out have their usual values; paths start at this file."
        ),
        'instrument = "instrument.toml"',
        _frames_line(patterns),
        'output = "reduced"',
    ]
    for target in targets:
        name = target.key.partition(".")[2]
        lines += ["", *comment(f"{target.how}: {target.why}"), "[[target]]", f"name = {quoted(name)}"]
        lines.append(f"# role = {quoted(target.value)}   # as found by itself; take the # away to fix it, or change it")
    return "\n".join(lines) + "\n"


def _frames_line(patterns: tuple[str, ...]) -> str:
    return f"frames = [{', '.join(quoted(pattern) for pattern in patterns)}]"


def _relocated(night: str, patterns: tuple[str, ...], folder: Path, where: Path, instrument: str) -> str:
    """The night file with its paths as they are seen from another folder."""
    try:
        way = Path(os.path.relpath(folder.resolve(), where.resolve())).as_posix()
    except ValueError:  # another drive
        way = folder.resolve().as_posix()
    prefix = "" if way == "." else _sayable(glob.escape(way)) + "/"
    lines = night.split("\n")
    lines[lines.index(_frames_line(patterns))] = _frames_line(tuple(prefix + pattern for pattern in patterns))
    lines[lines.index('instrument = "instrument.toml"')] = f"instrument = {quoted(instrument)}"
    return "\n".join(lines)


def _notes(found: Survey) -> tuple[str, ...]:
    reasons: dict[str, list[str]] = {}
    for path, why in found.ignored:
        reasons.setdefault(why, []).append(str(path.relative_to(found.folder)))
    notes = [
        f"Left out, {why}: {', '.join(names[:5])}{f' and {len(names) - 5} more' if len(names) > 5 else ''}"
        for why, names in reasons.items()
    ]
    counts = ", ".join(f"{found.kinds.count(kind)} {kind}" for kind in kinds.KINDS if kind in found.kinds)
    unknown = found.kinds.count("")
    return (f"{len(found.files)} frames: {counts}{f', {unknown} of unknown kind' if unknown else ''}", *notes)


def _problems(instrument: str, night: str) -> tuple[str, ...]:
    """What the readers of both files find wrong with them."""
    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        (place / "instrument.toml").write_text(instrument, encoding="utf-8")
        (place / "night.toml").write_text(night, encoding="utf-8")
        lines: list[str] = []
        for name, read in (("instrument.toml", read_instrument), ("night.toml", read_night)):
            try:
                read(place / name)
            except ConfigError as error:
                lines += [f"{name}: {line}" for line in error.problems if not line.startswith("instrument.toml: ")]
            except HwpolError as error:
                lines.append(f"{name}: {error}")
    return tuple(lines)
