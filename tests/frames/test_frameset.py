"""A night of small files: what is used, what is set aside, and how it groups."""

from __future__ import annotations

import dataclasses
import pickle
import shutil
import warnings
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from astropy.io import fits

from hwpol.errors import InputError, MissingError
from hwpol.frames import FrameSet
from hwpol.frames.summary import describe, determined, doubts
from hwpol.instrument.description import Beam, Detector, Instrument, Keyword, Orientation, Site, WavePlate

KEYS = {
    "kind": "FRMKIND",
    "object": "OBJECT",
    "filter": "BAND",
    "exposure": "EXPTIME",
    "time": "DATE-OBS",
    "wave_plate": "PLATE",
    "ra": "RA",
    "dec": "DEC",
}
INSTRUMENT = Instrument(
    "test",
    Detector(gain=1.5, read_noise=5.0),
    {name: Keyword((key,)) for name, key in KEYS.items()},
    (Beam("o", 0.0), Beam("e", 90.0)),
    kinds={"bias": ("bias",), "dark": ("dark",), "flat": ("flat",), "science": ("object",)},
    clear_filters=("clear", ""),
    site=Site(-70.7, -29.3, 2300.0),
)
FOUR = (0.0, 22.5, 45.0, 67.5)


@pytest.fixture
def write(tmp_path: Path) -> Callable[..., Path]:
    """Write a file of a few pixels; `minute` after 2024-03-05 00:00 UTC."""
    rng = np.random.default_rng(7)

    def make(name: str, minute: float = 0.0, shape: tuple[int, ...] = (4, 5), **cards: Any) -> Path:
        hdu = fits.PrimaryHDU(rng.integers(0, 30000, shape).astype(np.int16))
        clock = f"2024-03-05T{int(minute // 60):02d}:{int(minute % 60):02d}:{60 * (minute % 1):06.3f}"
        usual = {"FRMKIND": "object", "OBJECT": "Star", "BAND": "V", "EXPTIME": 10.0, "RA": 150.0, "DEC": -20.0}
        for key, value in {**usual, "DATE-OBS": clock, "PLATE": 0.0, **cards}.items():
            if value is not None:
                hdu.header[key] = value
        hdu.writeto(tmp_path / name)
        return tmp_path / name

    return make


def sequence(write: Callable[..., Path], start: float = 0.0, passes: int = 2, **cards: Any) -> list[Path]:
    """One frame a minute at each of four positions."""
    stem = f"{cards.get('OBJECT', 'Star')}{cards.get('BAND', 'V')}{start:03.0f}".replace(" ", "")
    return [write(f"{stem}_{k:02d}.fits", start + k, **{"PLATE": FOUR[k % 4], **cards}) for k in range(4 * passes)]


def test_a_plain_visit(write: Callable[..., Path]) -> None:
    frames = FrameSet.read(sequence(write)[::-1], INSTRUMENT)
    assert len(frames) == 8
    assert frames.column("name").tolist() == [f"StarV000_{k:02d}.fits" for k in range(8)]
    assert frames.column("status").tolist() == ["used"] * 8
    assert frames.column("visit").tolist() == [1] * 8
    assert frames.column("cycle").tolist() == [1] * 4 + [2] * 4
    assert frames.column("position").tolist() == [1, 2, 3, 4] * 2
    # A mean on the circle: rounding of sine, cosine and arc tangent.
    assert [cycle.present for cycle in frames.cycles()] == [pytest.approx(FOUR, abs=1e-13)] * 2
    assert frames.column("chi").tolist() == [0.0] * 8
    assert np.isfinite(frames.column("eta")).all()
    assert frames.column("airmass") == pytest.approx(1 / np.sin(np.radians(frames.column("altitude"))), rel=1e-12)
    assert repr(frames) == "<FrameSet 'test': 8 science; 1 visits>"


def test_two_targets_alternating_and_filters_changing(write: Callable[..., Path]) -> None:
    paths = []
    for k, plate in enumerate(FOUR):
        for at, (name, band) in enumerate([("Star A", "V"), ("star-a", "R"), ("Star B", "V")]):
            paths.append(write(f"{name}{band}{k}.fits", 3 * k + at, OBJECT=name, BAND=band, PLATE=plate))
    visits = FrameSet.read(paths, INSTRUMENT).visits()
    assert [(v.column("object")[0], v.column("filter")[0]) for v in visits] == [
        ("Star A", "V"),
        ("star-a", "R"),
        ("Star B", "V"),
    ]
    assert all(v.column("position").tolist() == [1, 2, 3, 4] for v in visits)
    assert all(v.column("cycle").tolist() == [1] * 4 for v in visits)


def test_gap_parts_visits(write: Callable[..., Path]) -> None:
    paths = sequence(write, passes=1) + sequence(write, start=50.0, passes=1)
    assert len(FrameSet.read(paths, INSTRUMENT).visits()) == 1
    assert [len(v) for v in FrameSet.read(paths, INSTRUMENT, gap=30.0).visits()] == [4, 4]


def test_everything_that_can_be_wrong_with_a_file(write: Callable[..., Path], tmp_path: Path) -> None:
    good = sequence(write)
    bad = {
        "cube.fits": write("cube.fits", 20, (2, 4, 5)),
        "shape.fits": write("shape.fits", 21, (8, 5)),
        "angle.fits": write("angle.fits", 22, PLATE="parked"),
        "none.fits": write("none.fits", 23, PLATE=None),
        "exposure.fits": write("exposure.fits", 24, EXPTIME=0.0),
        "kind.fits": write("kind.fits", 25, FRMKIND="focus"),
        "zcopy.fits": Path(shutil.copy(good[3], tmp_path / "zcopy.fits")),
        "short.fits": write("short.fits", 26, (100, 100)),
        "empty.fits": tmp_path / "empty.fits",
        "text.fits": tmp_path / "text.fits",
        "away.fits": tmp_path / "away.fits",
        "left.fits": write("left.fits", 27),
    }
    bad["empty.fits"].touch()
    bad["text.fits"].write_text("not a FITS file\n")
    bad["short.fits"].write_bytes(bad["short.fits"].read_bytes()[:9000])
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        frames = FrameSet.read([*bad.values(), *good], INSTRUMENT, exclude=["le?t.fits"])
    assert heard == []
    reasons = dict(zip(frames.column("name"), frames.column("reason"), strict=True))
    status = dict(zip(frames.column("name"), frames.column("status"), strict=True))
    assert len(frames) == len(good) + len(bad)
    assert {name for name in reasons if status[name] == "used"} == {path.name for path in good}
    assert {name for name in reasons if status[name] == "unread"} == {"empty.fits", "text.fits", "away.fits"}
    assert reasons["cube.fits"] == "the image has 3 axes (5 x 4 x 2), expected 2"
    assert reasons["shape.fits"] == "the image has 5 x 8 pixels, most have 5 x 4"
    assert reasons["angle.fits"] == "PLATE = 'parked': expected an angle in degrees"
    assert reasons["none.fits"] == "PLATE is missing"
    assert reasons["exposure.fits"] == "exposure 0 s: expected more than 0"
    assert reasons["kind.fits"] == "kind 'focus' is not listed in [kinds]"
    assert reasons["zcopy.fits"] == f"a copy of {good[3].name}"
    assert reasons["short.fits"].startswith("truncated")
    assert reasons["empty.fits"] == "the file is empty"
    assert reasons["left.fits"] == "excluded by the night file"
    assert len(frames.visits()) == 1
    assert frames.visits()[0].column("cycle").tolist() == [1] * 4 + [2] * 4
    assert all(reasons[name] for name in bad)


def test_copies_in_another_guise_are_found_and_lookalikes_kept(write: Callable[..., Path], tmp_path: Path) -> None:
    paths = sequence(write, passes=1)
    with fits.open(paths[1]) as hdus:
        header = hdus[0].header.copy()
        header["HISTORY"] = "moved"
        packed = tmp_path / "zz.fits.fz"
        fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(hdus[0].data, header)]).writeto(packed)
        other = tmp_path / "zy.fits"
        fits.PrimaryHDU(hdus[0].data + 1, hdus[0].header).writeto(other)
    frames = FrameSet.read([*paths, packed, other], INSTRUMENT)
    reasons = dict(zip(frames.column("name"), frames.column("reason"), strict=True))
    assert reasons == {**{path.name: "" for path in paths}, "zz.fits.fz": f"a copy of {paths[1].name}", "zy.fits": ""}


def test_a_path_given_twice_counts_once(write: Callable[..., Path]) -> None:
    path = write("a.fits")
    assert len(FrameSet.read([path, str(path), path.parent / "." / "a.fits"], INSTRUMENT)) == 1
    assert len(FrameSet.read(str(path), INSTRUMENT)) == 1


@pytest.mark.parametrize("paths", [[], [np.zeros((3, 3))]])
def test_impossible_input_is_refused(paths: list[Any]) -> None:
    with pytest.raises(InputError, match="frames:"):
        FrameSet.read(paths, INSTRUMENT)


def test_impossible_gap_and_column(write: Callable[..., Path]) -> None:
    path = write("a.fits")
    with pytest.raises(InputError, match="gap = 0"):
        FrameSet.read([path], INSTRUMENT, gap=0)
    with pytest.raises(MissingError, match="no column 'angle'"):
        FrameSet.read([path], INSTRUMENT).column("angle")


def test_selections_leave_the_set_as_it_was(write: Callable[..., Path]) -> None:
    paths = [*sequence(write, passes=1), write("b.fits", 30, FRMKIND="bias"), write("f.fits", 31, FRMKIND="flat")]
    frames = FrameSet.read(paths, INSTRUMENT)
    assert [len(frames.science()), len(frames.calibrations()), len(frames.select([0, 2]))] == [4, 2, 2]
    frames.column("psi")[:] = -1
    frames.science().table["psi"][:] = -1
    assert frames.column("psi")[:4].tolist() == list(FOUR)
    assert frames.column("visit").tolist() == [1, 1, 1, 1, -1, -1]
    with pytest.raises(dataclasses.FrozenInstanceError):
        frames.table = None  # type: ignore[misc, assignment]


def test_parallactic_mount_and_target_coordinates(write: Callable[..., Path]) -> None:
    orientation = Orientation(mount="altaz", position_angle="parallactic", altitude=-1)
    instrument = dataclasses.replace(INSTRUMENT, orientation=orientation)
    paths = [write(f"{k}.fits", 15 * k, PLATE=FOUR[k], RA=None, DEC=None, OBJECT="My Star") for k in range(4)]
    unknown = FrameSet.read(paths, instrument)
    assert np.isnan(unknown.column("chi")).all()
    assert any("parallactic angle unknown for 4 science frames" in doubt for doubt in doubts(unknown))
    target = SimpleNamespace(name="A", object="my-star", ra=150.0, dec=-20.0)
    frames = FrameSet.read(paths, instrument, targets=[target])
    eta, altitude, chi = (frames.column(name) for name in ("eta", "altitude", "chi"))
    # An angle minus another in double precision; the unwrapping adds whole turns.
    assert np.sin(np.radians(chi)) == pytest.approx(np.sin(np.radians(eta - altitude)), abs=1e-12)
    assert np.cos(np.radians(chi)) == pytest.approx(np.cos(np.radians(eta - altitude)), abs=1e-12)


def test_angles_do_not_jump_within_a_visit(write: Callable[..., Path]) -> None:
    # North of the zenith of this site; the upper passage on this date comes between 02:00 and 05:00 UT.
    paths = [write(f"{k}.fits", 120 + 15 * k, PLATE=FOUR[k % 4], DEC=20.0) for k in range(12)]
    eta = FrameSet.read(paths, INSTRUMENT).column("eta")
    assert (eta % 360.0).min() < 180.0 < (eta % 360.0).max()
    # 15 min of 15 deg/h, at most 1/sin(49.3 deg) as fast on the sky: 5 deg a step.
    assert np.abs(np.diff(eta)).max() < 5.0


def test_without_plate_every_frame_is_a_cycle(write: Callable[..., Path]) -> None:
    instrument = dataclasses.replace(INSTRUMENT, wave_plate=None)
    paths = [write(f"{k}.fits", k, PLATE=None) for k in range(3)]
    frames = FrameSet.read(paths, instrument)
    assert frames.column("cycle").tolist() == [1, 2, 3]
    assert frames.column("reason").tolist() == [""] * 3


def test_nothing_usable_is_still_a_table(tmp_path: Path) -> None:
    frames = FrameSet.read([tmp_path / "none.fits"], INSTRUMENT)
    assert frames.visits() == []
    assert len(frames.science()) == 0
    assert "nothing to reduce" in describe(frames)


def test_description(write: Callable[..., Path]) -> None:
    paths = sequence(write) + sequence(write, start=20, passes=1, BAND="R")[:3]
    paths += [write(f"b{k}.fits", 200 + k, FRMKIND="bias") for k in range(3)]
    paths += [write(f"f{k}.fits", 300 + k, FRMKIND="flat", PLATE=FOUR[k % 4]) for k in range(4)]
    paths.append(write("parked.fits", 40, PLATE="parked"))
    frames = FrameSet.read(paths, INSTRUMENT)
    text = describe(frames)
    assert max(map(len, text.splitlines())) <= 100
    assert text.startswith("19 files: 18 used (11 science, 3 bias, 4 flat); 1 set aside")
    assert "flat  4 in V, plate at 0 (1), 22.5 (1), 45 (1), 67.5 (1)" in text
    found = doubts(frames)
    assert "parked.fits set aside: PLATE = 'parked': expected an angle in degrees" in found
    assert any(line.startswith("filter R: no flats") for line in found)
    assert not any("no flats" in line for line in doubts(frames, flat="off"))
    assert any(line.startswith("no dark frames") for line in found)
    assert "visit 2 (Star, R): a single cycle: no scatter of repeats to test the errors" in found
    assert not any("no bias" in line for line in found)


def test_frames_without_times_go_by_the_numbers_in_their_names(write: Callable[..., Path]) -> None:
    keywords = {name: keyword for name, keyword in INSTRUMENT.keywords.items() if name != "time"}
    instrument = dataclasses.replace(INSTRUMENT, keywords=keywords)
    paths = [write(f"a{k}.fits", PLATE=FOUR[k % 4]) for k in (10, 9, 11, 8)]
    frames = FrameSet.read(paths, instrument)
    assert frames.column("name").tolist() == ["a8.fits", "a9.fits", "a10.fits", "a11.fits"]
    assert frames.column("cycle").tolist() == [1] * 4


def test_a_frame_set_crosses_process_boundaries(write: Callable[..., Path]) -> None:
    frames = FrameSet.read(sequence(write), INSTRUMENT)
    there = pickle.loads(pickle.dumps(frames.visits()[0]))
    assert there.instrument == INSTRUMENT
    assert there.column("eta").tolist() == frames.column("eta").tolist()


def test_signs_of_a_wrong_site_or_unit(write: Callable[..., Path]) -> None:
    paths = sequence(write, AIRMASS=1.0)
    assert not any("check [site]" in line for line in doubts(FrameSet.read(paths, INSTRUMENT)))
    east = dataclasses.replace(INSTRUMENT, site=Site(109.3, -29.3))
    assert any("8 science frames point below the horizon" in line for line in doubts(FrameSet.read(paths, east)))
    keywords = {**INSTRUMENT.keywords, "airmass": Keyword(("AIRMASS",))}
    told = dataclasses.replace(INSTRUMENT, keywords=keywords)
    assert any("the airmass in the headers is 0.6" in line for line in doubts(FrameSet.read(paths, told)))


def test_angles_hidden_in_the_objects_name(write: Callable[..., Path]) -> None:
    paths = [write(f"{k}.fits", k, PLATE=FOUR[k], OBJECT=f"Star hwp={FOUR[k]}") for k in range(4)]
    assert any("give keywords.object a pattern" in line for line in doubts(FrameSet.read(paths, INSTRUMENT)))
    keywords = {
        **INSTRUMENT.keywords,
        "object": Keyword(("OBJECT",), pattern="(.*) hwp="),
        "wave_plate": Keyword(("OBJECT",), pattern="hwp=(.*)"),
    }
    frames = FrameSet.read(paths, dataclasses.replace(INSTRUMENT, keywords=keywords))
    assert [len(visit) for visit in frames.visits()] == [4]
    assert frames.column("psi").tolist() == list(FOUR)


def test_incomplete_cycles_are_told(write: Callable[..., Path]) -> None:
    paths = sequence(write, passes=3)
    found = doubts(FrameSet.read(paths[:5] + paths[6:], INSTRUMENT))
    assert "visit 1 (Star, V): cycle 2 lacks 22.5 deg; used as far as its angles go, and flagged" in found


def test_times_outside_the_tables_matter_where_eta_does(write: Callable[..., Path]) -> None:
    paths = [write(f"{k}.fits", k, PLATE=FOUR[k], **{"DATE-OBS": f"2044-03-05T00:{k:02d}:00"}) for k in range(4)]
    assert not any("UT1" in line for line in doubts(FrameSet.read(paths, INSTRUMENT)))
    telescope = dataclasses.replace(INSTRUMENT, orientation=Orientation(frame="telescope"))
    assert any("UT1" in line for line in doubts(FrameSet.read(paths, telescope)))


@pytest.mark.parametrize(
    ("psi", "analysers", "free", "known"),
    [
        (FOUR, (0.0, 90.0), True, True),
        ((0.0, 22.5, 45.0), (0.0, 90.0), True, True),
        ((0.0, 22.5), (0.0, 90.0), False, True),
        ((0.0, 45.0), (0.0, 90.0), False, False),
        ((0.0, 90.0, 180.0), (0.0, 90.0), False, False),
        (FOUR, (0.0,), True, True),
        ((0.0, 22.5), (0.0,), False, False),
        ((0.0,), (0.0, 45.0, 90.0, 135.0), False, True),
    ],
)
def test_which_angles_determine_q_and_u(
    psi: tuple[float, ...], analysers: tuple[float, ...], free: bool, known: bool
) -> None:
    """`free`: with fitted gains; `known`: with known gains. Counted by hand: rows less one T a frame, less gains."""
    instrument = dataclasses.replace(INSTRUMENT, beams=tuple(Beam(str(a), a) for a in analysers))
    assert determined(instrument, "V", np.array(psi)) is free
    assert determined(instrument, "V", np.array(psi), free_gain=False) is known


def test_a_plate_without_retardance_measures_nothing() -> None:
    instrument = dataclasses.replace(INSTRUMENT, wave_plate=WavePlate(retardance={"V": 360.0}))
    assert not determined(instrument, "V", np.array(FOUR))
    assert determined(instrument, "R", np.array(FOUR))
