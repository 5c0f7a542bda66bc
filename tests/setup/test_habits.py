"""Header habits of invented instruments: what is proposed reads the frames as they were made."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.time import Time

from hwpol.frames import FrameSet
from hwpol.instrument import Instrument
from hwpol.setup import Proposal, propose

START = 60374.04  # MJD, an evening of March 2024
TARGETS = ("HD 161056", "Wren 7", "BD+32 3739")
FILTERS = ("V", "R")
Cards = dict[str, Any]


@dataclass(frozen=True)
class Shot:
    """The truth of one frame: what the header is to express in its own way."""

    number: int
    kind: str
    target: str
    filter: str
    exposure: float
    position: int
    psi: float
    cycle: int
    place: int

    @property
    def time(self) -> Time:
        return Time(START + self.number * 80 / 86400, format="mjd", scale="utc", precision=2)


def shots(positions: tuple[float, ...] = (0.0, 22.5, 45.0, 67.5), cycles: int = 2) -> Iterator[Shot]:
    """Bias frames, flats, then every target in every filter through the plate's positions."""
    number = 0
    for _ in range(3):
        yield Shot(number, "bias", "", FILTERS[0], 0.0, 0, positions[0], 0, 0)
        number += 1
    for band in FILTERS:
        for _ in range(2):
            yield Shot(number, "flat", "", band, 5.0, 0, positions[0], 0, 0)
            number += 1
    for place, target in enumerate(TARGETS):
        for band in FILTERS:
            for cycle in range(cycles):
                for position, psi in enumerate(positions):
                    yield Shot(number, "science", target, band, (30.0, 60.0, 90.0)[place], position, psi, cycle, place)
                    number += 1


def noise(shot: Shot) -> Cards:
    """What else stands in headers and must not be taken for the plate."""
    rng = np.random.default_rng(shot.number)
    dither = (0.0, 15.0, -15.0)[shot.cycle % 3]
    return {
        "ROTATOR": ((0.0, 45.0, 90.0)[shot.place], "instrument rotator angle (deg)"),
        "ROTENC": ((22.5, 67.5, 112.5)[shot.place], "rotator encoder"),
        "AIRMASS": (round(1.1 + 0.003 * shot.number, 3), "airmass at start"),
        "CCDTEMP": (round(-110 + 0.1 * float(rng.normal()), 2), "detector temperature (C)"),
        "FOCUS": (22.5 + 45.0 * shot.place, "secondary focus (micron)"),
        "FRAMENO": (shot.number, "running number"),
        "WHEEL": (FILTERS.index(shot.filter), "wheel position"),
        "DRA": (dither, "arcsec"),
        "LST-SEC": (80 * shot.number, "seconds of sidereal time"),
        "OBSERVER": "Vera Light",
        "PROPID": "P113-STAR",
        "SHUTTER": "open",
    }


def position(shot: Shot) -> Cards:
    ra, dec = (("17:43:47", "-07:04:46"), ("05:10:11.5", "+12:03:00"), ("20:12:02", "+32:47:44"))[shot.place]
    return {"RA": ra, "DEC": dec} if shot.target else {}


def common(shot: Shot) -> Cards:
    return {
        "OBJECT": shot.target or shot.kind,
        "EXPTIME": (shot.exposure, "exposure (s)"),
        "DATE-OBS": (shot.time.isot, "start of exposure, UTC"),
        **position(shot),
        **noise(shot),
    }


def degrees(shot: Shot) -> Cards:
    """An angle under a telling name."""
    kind = {"bias": "Bias Frame", "flat": "Flat Field", "science": "Light Frame"}[shot.kind]
    plate = {} if shot.kind == "bias" else {"HWPANG": (shot.psi, "half-wave plate angle (deg)")}
    return {**common(shot), "IMAGETYP": kind, "FILTER": shot.filter, "EGAIN": (1.45, "e-/ADU"), "RDNOISE": 4.2, **plate}


def doubled(shot: Shot) -> Cards:
    """Twice the plate's angle; two wheels; gain in adu per electron."""
    kind = {"bias": "BIAS", "flat": "SKYFLAT", "science": "SCIENCE"}[shot.kind]
    wheels = {"FILTER1": f"{shot.filter}_Bess", "FILTER2": "clear"}
    if shot.filter == "R":
        wheels = {"FILTER1": "clear", "FILTER2": "R_Bess"}
    return {
        **common(shot), "OBSTYPE": kind, **wheels, "POLSET": (2 * shot.psi, "direction measured"),
        "GAIN": (0.5, "ADU/e-"), "SECPIX": 0.27,
    }  # fmt: skip


def counted(shot: Shot) -> Cards:
    """Positions numbered from 1; kinds in words of their own; date and time apart."""
    kind = {"bias": "zero", "flat": "dome flat", "science": "object"}[shot.kind]
    cards = {**common(shot), "FRAME": kind, "BANDPASS": shot.filter, "RETPOS": (shot.position + 1, "retarder position")}
    del cards["DATE-OBS"]
    date, _, clock = shot.time.isot.partition("T")
    return {**cards, "DATE-OBS": date, "UT": (clock, "UT at start"), "GAIN": (100, "gain setting")}


def spoken(shot: Shot) -> Cards:
    """The angle only inside the name of the object."""
    name = f"{shot.target} hwp {shot.psi:g}" if shot.target else shot.kind
    return {**common(shot), "OBJECT": name, "OBS-TYPE": shot.kind.upper(), "FILTNAME": f"Johnson {shot.filter}"}


def long_names(shot: Shot) -> Cards:
    """Hierarchical keywords, a read-back angle that jitters, with an offset; times as MJD."""
    jitter = 0.06 * float(np.random.default_rng(shot.number + 99).normal())
    kind = {"bias": "BIAS", "flat": "FLAT,SKY", "science": "OBJECT,IMAGE"}[shot.kind]
    cards = common(shot)
    del cards["DATE-OBS"], cards["EXPTIME"]
    return {
        **cards, "HIERARCH LAKE DPR TYPE": kind, "HIERARCH LAKE OPT4 NAME": f"{shot.filter}_high",
        "HIERARCH LAKE RETA2 POSANG": (round(31.4 + shot.psi + jitter, 3), "Retarder plate angle"),
        "HIERARCH LAKE FILT1 NAME": f"{shot.filter}_high",
        "HIERARCH LAKE DET WIN1 DIT1": (shot.exposure, "integration"), "EXPTIME": shot.exposure,
        "MJD-OBS": (shot.time.mjd, "start"), "HIERARCH LAKE DET OUT1 CONAD": 1.9,
    }  # fmt: skip


def labelled(shot: Shot) -> Cards:
    """Positions as texts."""
    kind = {"bias": "zero", "flat": "flat", "science": "standard" if shot.place else "target"}[shot.kind]
    return {**common(shot), "KIND": kind, "FLTRNM": f"sdss {shot.filter.lower()}", "WPPOS": f"P{shot.position + 1}"}


def nameless(shot: Shot) -> Cards:
    """Sixteen angles under a name that says nothing."""
    kind = {"bias": "bias", "flat": "twilight", "science": "sci"}[shot.kind]
    return {**common(shot), "DTYPE": kind, "OPTEL7": shot.filter, "MOTOR3": shot.psi}


def with_unit(shot: Shot) -> Cards:
    """A text with a unit; calibrations are told by the object alone."""
    return {**common(shot), "FILTER": shot.filter, "PLATE": f"{shot.psi:.1f} deg"}


def in_radians(shot: Shot) -> Cards:
    """Radians; light tables of three angles 30 deg apart are regular too."""
    cards = {**common(shot), "EXPTYPE": {"bias": "BIAS", "flat": "FLAT", "science": "OBJECT"}[shot.kind]}
    return {**cards, "FILTER": shot.filter, "WPROT": (float(np.radians(shot.psi)), "wave plate (rad)")}


def steps(shot: Shot) -> Cards:
    """Motor steps of the plate."""
    cards = {**common(shot), "IMAGETYP": {"bias": "bias", "flat": "flat", "science": "object"}[shot.kind]}
    return {**cards, "FILTER": shot.filter, "HWPENC": (2500 * shot.position, "half-wave plate encoder")}


def in_a_name(shot: Shot) -> Cards:
    """The angle only inside the name that the file had at the telescope."""
    name = f"{shot.target.replace(' ', '')}_{shot.filter}_hwp{shot.psi:04.1f}_{shot.number:03d}.fits"
    cards = {**common(shot), "IMAGETYP": {"bias": "bias", "flat": "flat", "science": "object"}[shot.kind]}
    return {**cards, "FILTER": shot.filter, "ORIGNAME": name}


def at_the_end(shot: Shot) -> Cards:
    """The angle as the last word of the object, whose name ends in a number itself."""
    cards = {**common(shot), "IMAGETYP": {"bias": "bias", "flat": "flat", "science": "object"}[shot.kind]}
    return {**cards, "FILTER": shot.filter, "OBJECT": f"{shot.target} {shot.psi:g}" if shot.target else shot.kind}


def lettered(shot: Shot) -> Cards:
    """Letters for positions."""
    cards = {**common(shot), "IMAGETYP": {"bias": "bias", "flat": "flat", "science": "object"}[shot.kind]}
    return {**cards, "FILTER": shot.filter, "HWP": "ABCD"[shot.position]}


def write_night(folder: Path, habit: Callable[[Shot], Cards], truth: tuple[Shot, ...]) -> dict[str, Shot]:
    """Write a night; science frames in raw/, calibrations in cal/; the truth by file name."""
    named = {}
    for shot in truth:
        place = folder / ("raw" if shot.kind == "science" else "cal")
        place.mkdir(exist_ok=True)
        hdu = fits.PrimaryHDU(np.zeros((6, 8), dtype=np.uint16))
        for key, value in habit(shot).items():
            hdu.header[key] = value
        name = f"n{shot.number:04d}.fits"
        hdu.writeto(place / name)
        named[name] = shot
    return named


FOUR = tuple(shots())
SIXTEEN = tuple(shots(tuple(22.5 * i for i in range(16)), cycles=1))
HABITS: dict[str, tuple[Any, ...]] = {
    # how a header is written, the frames, wave-plate keyword, kind keyword, filter keyword
    "degrees": (degrees, FOUR, "HWPANG", "IMAGETYP", "FILTER"),
    "doubled": (doubled, FOUR, "POLSET", "OBSTYPE", ["FILTER1", "FILTER2"]),
    "counted": (counted, FOUR, "RETPOS", "FRAME", "BANDPASS"),
    "spoken": (spoken, FOUR, "OBJECT", "OBS-TYPE", "FILTNAME"),
    "long_names": (long_names, FOUR, "LAKE RETA2 POSANG", "LAKE DPR TYPE", "LAKE FILT1 NAME"),
    "labelled": (labelled, FOUR, "WPPOS", "KIND", "FLTRNM"),
    "nameless": (nameless, SIXTEEN, "MOTOR3", "DTYPE", "OPTEL7"),
    "with_unit": (with_unit, FOUR, "PLATE", "OBJECT", "FILTER"),
    "in_radians": (in_radians, FOUR, "WPROT", "EXPTYPE", "FILTER"),
    "steps": (steps, FOUR, "HWPENC", "IMAGETYP", "FILTER"),
    "in_a_name": (in_a_name, FOUR, "ORIGNAME", "IMAGETYP", "FILTER"),
    "at_the_end": (at_the_end, FOUR, "OBJECT", "IMAGETYP", "FILTER"),
    "lettered": (lettered, FOUR, "HWP", "IMAGETYP", "FILTER"),
}
# deg: read-back angles jitter by 0.06 rms; of 48 the largest stays below five of these in all but 3e-5 of nights.
JITTER = 0.3


def value(proposal: Proposal, key: str) -> Any:
    return next(f.value for f in proposal.findings if f.key == key)


def keyword(proposal: Proposal, name: str) -> Any:
    entry = value(proposal, f"keywords.{name}")
    return entry["keyword"] if isinstance(entry, dict) else entry


def completed(proposal: Proposal, folder: Path) -> Instrument:
    """The proposed instrument with what no header could tell: gain and the second beam's place."""
    text = proposal.instrument_text.replace("# gain = ...", "gain = 1.5").replace(
        "# offset = ...", "offset = [0.0, 3.0]"
    )
    path = folder / "completed.toml"
    path.write_text(text, encoding="utf-8")
    return Instrument.read(path)


@pytest.fixture(params=list(HABITS), scope="module")
def night(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Any:
    folder = tmp_path_factory.mktemp(request.param)
    habit, frames, *keywords = HABITS[request.param]
    truth = write_night(folder, habit, frames)
    return request.param, folder, truth, propose(folder), keywords


def test_plate_kind_and_filter_keywords_are_found(night: Any) -> None:
    _, _, _, proposal, keywords = night
    assert [keyword(proposal, name) for name in ("wave_plate", "kind", "filter")] == keywords


def test_frames_read_by_the_proposal_are_as_made(night: Any) -> None:
    _, folder, truth, proposal, _ = night
    instrument = completed(proposal, folder)
    frames = FrameSet.read(sorted(folder.glob("*/*.fits")), instrument)
    made = [truth[name] for name in frames.column("name")]
    assert list(frames.column("kind")) == [shot.kind for shot in made]
    science = np.array([shot.kind == "science" for shot in made])
    psi = np.asarray(frames.column("psi"))[science]
    away = psi - [shot.psi for shot in made if shot.kind == "science"]
    # A constant rest is the zero angle, which no header tells; 180 deg are a full turn of the plate.
    turned = np.exp(2j * np.radians(away))
    assert np.max(np.abs(np.angle(turned / turned[0], deg=True))) / 2 < 2 * JITTER
    assert abs(np.angle(turned.mean(), deg=True)) / 2 < JITTER
    pairs = {(frame, shot.filter) for frame, shot in zip(frames.column("filter"), made, strict=True) if shot.target}
    assert len(pairs) == 2  # one name for each filter and the other way round
    assert {name.casefold() for name in frames.column("object")[science]} == {name.casefold() for name in TARGETS}
    mjd = np.asarray(frames.column("mjd"))
    middle = np.array([shot.time.mjd + shot.exposure / 2 / 86400 for shot in made])
    assert np.max(np.abs(mjd - middle)[science]) < 0.02 / 86400  # times are written to 0.01 s
    assert set(frames.column("status")) == {"used"}


def test_nothing_is_proposed_without_saying_how_it_was_found(night: Any) -> None:
    *_, proposal, _ = night
    lines = proposal.instrument_text.splitlines()
    said = ""
    entries = 0
    for line in lines:
        if (match := re.match(r"# (recognised|guessed|to fill in): \S", line)) is not None:
            said = match.group(1)
        elif not line or line.startswith(("[", "#  ", "# [")):
            continue
        elif not line.startswith("#") or line.endswith("= ..."):
            assert said, line
            entries += 1
            said = ""
    assert entries == sum(not f.key.startswith("target.") for f in proposal.findings)
    assert all(f.how in ("recognised", "guessed", "to fill in") and f.why for f in proposal.findings)
    assert all(f.how == "to fill in" for f in proposal.findings if f.value is None)
    tree = tomllib.loads(proposal.instrument_text)
    assert tree["keywords"]["object"]


def test_problems_are_those_of_what_is_missing(night: Any) -> None:
    *_, proposal, _ = night
    missing = {f.key for f in proposal.findings if f.value is None}
    expected = {"beam[2].offset"} | ({"detector.gain"} & missing)
    assert {re.split(r": | = ", line)[1] for line in proposal.problems} == expected


def test_targets_are_listed_once_each(night: Any) -> None:
    *_, proposal, _ = night
    listed = {target["name"].casefold() for target in tomllib.loads(proposal.night_text)["target"]}
    assert listed == {name.casefold() for name in TARGETS}
