"""Proposals as files: written whole, never over others, read as they stand where the headers tell enough."""

from __future__ import annotations

import gzip
import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import InputError
from hwpol.instrument import Instrument
from hwpol.night.config import frame_paths, read_night
from hwpol.setup import Finding, propose

SIDE = (220, 200)
FWHM = 4.0


def stars(count: int, seed: int = 4) -> tuple[Any, Any, Any]:
    """Positions in the lower half of the array, and fluxes (adu) that differ by a factor of 30."""
    rng = np.random.default_rng(seed)
    return rng.uniform(15, 205, count), rng.uniform(12, 85, count), 10 ** rng.uniform(3.7, 5.2, count)


def image(x: Any, y: Any, flux: Any, seed: int = 0) -> Any:
    rng = np.random.default_rng(seed)
    rows, columns = np.mgrid[: SIDE[1], : SIDE[0]]
    light = np.full((SIDE[1], SIDE[0]), 50.0)
    width = FWHM / 2.3548
    for a, b, f in zip(x, y, flux, strict=True):
        light += f / (2 * np.pi * width**2) * np.exp(-((columns - a) ** 2 + (rows - b) ** 2) / (2 * width**2))
    return np.clip(1000 + rng.poisson(light) + rng.normal(0, 4, light.shape), 0, 60000).astype(np.uint16)


def frame(number: int, **cards: Any) -> fits.Header:
    header = fits.Header()
    clock = f"2024-03-05T01:{number:02d}:00"
    usual = {
        "OBJECT": "HD 161056", "IMAGETYP": "object", "FILTER": "V", "EXPTIME": 30.0, "DATE-OBS": clock,
        "HWPANG": 22.5 * (number % 4), "EGAIN": 1.6, "RDNOISE": 5.5, "RA": "17:43:47", "DEC": "-07:04:46",
        "INSTRUME": "Plover",
    }  # fmt: skip
    for key, value in {**usual, **{k.replace("_", "-"): v for k, v in cards.items()}}.items():
        if value is not None:
            header[key] = value
    return header


def write(
    folder: Path, *, count: int = 8, pixels: Callable[[int], Any] | None = None, ending: str = ".fits", **cards: Any
) -> Path:
    folder.mkdir(exist_ok=True, parents=True)
    for number in range(count):
        data = np.zeros((SIDE[1], SIDE[0]), np.uint16) if pixels is None else pixels(number)
        own = {key: value[number % len(value)] if isinstance(value, list) else value for key, value in cards.items()}
        hdu = fits.PrimaryHDU(data, frame(number, **own))
        path = folder / f"a{number:03d}{ending}"
        if ending.endswith(".gz"):
            plain = folder / "plain"
            hdu.writeto(plain)
            path.write_bytes(gzip.compress(plain.read_bytes(), 1))
            plain.unlink()
        else:
            hdu.writeto(path)
    return folder


def finding(folder: Path, key: str, **options: bool) -> Finding:
    return next(f for f in propose(folder, **options).findings if f.key == key)


def pairs(offset: tuple[float, float], count: int) -> Callable[[int], Any]:
    """Two beams: every star a second time at an offset, a little brighter."""

    def pixels(number: int) -> Any:
        x, y, flux = stars(count)
        x2, y2 = np.append(x, x + offset[0]), np.append(y, y + offset[1])
        return image(x2, y2, np.append(flux, 1.1 * flux), number)

    return pixels


@pytest.mark.parametrize("count", [1, 3, 15])
def test_the_offset_is_measured_and_then_both_files_can_be_used(tmp_path: Path, count: int) -> None:
    write(tmp_path, count=4, pixels=pairs((-3.4, 97.2), count))
    proposal = propose(tmp_path, measure_offset=True)
    assert proposal.problems == ()
    paths = proposal.write(tmp_path)
    instrument = Instrument.read(paths[0])
    # Centroids of the faintest stars (S/N above 20) are good to FWHM / 20; the offset is written to 0.1.
    assert instrument.beams[1].offset == pytest.approx((-3.4, 97.2), abs=FWHM / 20 + 0.05)
    found = next(f for f in proposal.findings if f.key == "beam[2].offset")
    assert found.how == "guessed"
    assert "pairs of stars" in found.why
    night = read_night(paths[1])
    assert frame_paths(night) == sorted(tmp_path.glob("*.fits"))


def test_no_second_beam_is_made_up(tmp_path: Path) -> None:
    write(tmp_path, count=4, pixels=lambda number: image(*stars(14), number))
    found = finding(tmp_path, "beam[2].offset", measure_offset=True)
    assert (found.value, found.how) == (None, "to fill in")


def test_an_empty_field_measures_nothing(tmp_path: Path) -> None:
    write(tmp_path, count=4, pixels=lambda number: image([], [], [], number))
    assert finding(tmp_path, "beam[2].offset", measure_offset=True).value is None


def test_two_images_of_a_size_are_two_beams(tmp_path: Path) -> None:
    for number in range(8):
        x, y, flux = stars(10)
        images = [image(x, y, flux, number), image(x + 4.0, y - 7.0, flux, number + 50)]
        hdus = [fits.PrimaryHDU(header=frame(number, EGAIN=None)), *(fits.ImageHDU(data) for data in images)]
        hdus[1].header["GAIN"], hdus[2].header["GAIN"] = (1.5, "e-/ADU"), (1.7, "e-/ADU")
        fits.HDUList(hdus).writeto(tmp_path / f"b{number}.fits")
    proposal = propose(tmp_path, measure_offset=True)
    assert proposal.problems == ()
    instrument = Instrument.read(proposal.write(tmp_path)[0])
    assert [instrument.extension_of(beam) for beam in (0, 1)] == [1, 2]
    assert instrument.beams[1].offset == pytest.approx((4.0, -7.0), abs=0.15)
    assert [beam.gain for beam in instrument.beams] == [1.5, 1.7]


def test_files_that_exist_are_never_touched(tmp_path: Path) -> None:
    proposal = propose(write(tmp_path / "night"))
    first = proposal.write(tmp_path)
    assert [path.name for path in first] == ["instrument.toml", "night.toml"]
    first[0].write_text("mine")
    second = proposal.write(tmp_path)
    assert [path.name for path in second] == ["instrument.new.toml", "night.new.toml"]
    assert tomllib.loads(second[1].read_text())["instrument"] == "instrument.new.toml"
    before = {path: path.read_bytes() for path in tmp_path.glob("*.toml")}
    with pytest.raises(InputError, match=r"instrument\.toml and instrument\.new\.toml exist; nothing was written"):
        proposal.write(tmp_path)
    assert {path: path.read_bytes() for path in tmp_path.glob("*.toml")} == before
    assert first[0].read_text() == "mine"


def test_both_files_are_written_or_none(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    proposal = propose(write(tmp_path / "night"))
    target = tmp_path / "out"
    from hwpol.setup import proposal as module

    wrote = module.write_text

    def fails(path: Path, text: str) -> None:
        if path.name == "night.toml":
            raise InputError(f"{path}: cannot be written")
        wrote(path, text)

    monkeypatch.setattr(module, "write_text", fails)
    with pytest.raises(InputError):
        proposal.write(target)
    assert list(target.iterdir()) == []


@pytest.mark.parametrize("where", [".", "beside", "night/below"])
def test_the_night_file_finds_the_frames_from_wherever_it_is_written(tmp_path: Path, where: str) -> None:
    folder = tmp_path / "night"
    write(folder / "raw [new]", count=4)
    write(folder / "cal", count=3, ending=".fit.gz", IMAGETYP="bias", OBJECT="bias")
    text = propose(folder)
    completed = text.instrument_text.replace("# offset = ...", "offset = [0.0, 90.0]")
    paths = text.write(tmp_path / where)
    paths[0].write_text(completed)
    found = frame_paths(read_night(paths[1]))
    assert len(found) == 7
    assert {path.parent.name for path in found} == {"raw [new]", "cal"}


def test_other_files_are_left_out_and_named(tmp_path: Path) -> None:
    write(tmp_path, count=4)
    (tmp_path / "observing.log").write_text("clouds at 3 UT")
    (tmp_path / "preview.png").write_bytes(b"\x89PNG....")
    (tmp_path / "empty.fits").write_bytes(b"")
    fits.HDUList([fits.PrimaryHDU()]).writeto(tmp_path / "table.fits")
    (tmp_path / "reduced").mkdir()
    (tmp_path / "reduced" / "results.ecsv").write_text("")
    fits.PrimaryHDU(np.zeros((4, 4))).writeto(tmp_path / "reduced" / "map.fits")
    notes = "\n".join(propose(tmp_path).notes)
    for name in ("observing.log", "preview.png", "empty.fits", "table.fits", "reduced"):
        assert name in notes
    assert "4 frames: 4 science" in notes


def test_a_folder_without_frames_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="holds no FITS file"):
        propose(tmp_path)
    with pytest.raises(InputError, match="is no folder"):
        propose(tmp_path / "nowhere")


def test_header_text_cannot_break_the_files(tmp_path: Path) -> None:
    write(
        tmp_path, count=4, OBJECT='A "quoted" \\ name', INSTRUME="two''s # [cam]", FILTER='V "new"', IMAGETYP="object"
    )
    proposal = propose(tmp_path)
    assert tomllib.loads(proposal.instrument_text)["name"] == "two''s # [cam]"
    assert tomllib.loads(proposal.night_text)["target"][0]["name"] == 'A "quoted" \\ name'


# Greenwich mean sidereal time at 2024-03-05 01:00 UTC, 8829.541667 d after J2000.0, is 18.697374558 h plus
# 24.06570982441908 h/d times that, 11h53m06s (low-precision formula of the
# Astronomical Almanac, from memory); 70.2 deg west it is 7h12m18s.
@pytest.mark.parametrize(("value", "sidereal", "longitude", "how"), [
    ("70:12:00", "07:12:18", -70.2, "recognised"),
    ("-70:12:00", "07:12:18", -70.2, "recognised"),
    (289.8, None, -70.2, "guessed"),
    ((70.2, "west longitude"), None, -70.2, "guessed"),
    ((-70.2, "[deg] east"), None, -70.2, "recognised"),
])  # fmt: skip
def test_the_sign_of_the_longitude(tmp_path: Path, value: Any, sidereal: Any, longitude: float, how: str) -> None:
    write(tmp_path, count=1, LONGITUD=value, LATITUDE="-29:15:00", LST=sidereal)
    found = finding(tmp_path, "site.longitude")
    assert found.value == pytest.approx(longitude, abs=1e-5)
    assert found.how == how
    assert finding(tmp_path, "site.latitude").value == pytest.approx(-29.25)


def wcs(angle: float, mirrored: bool = False) -> dict[str, Any]:
    """North through east, +y lies at `angle`; 0.36 arcsec pixels."""
    size, turn = 1e-4, np.radians(angle)
    sense = -1 if mirrored else 1
    return {
        "CRVAL1": 265.9, "CRVAL2": -7.1, "CD1_1": -sense * size * np.cos(turn), "CD1_2": size * np.sin(turn),
        "CD2_1": sense * size * np.sin(turn), "CD2_2": size * np.cos(turn),
    }  # fmt: skip


@pytest.mark.parametrize("mirrored", [False, True])
def test_a_rotator_that_runs_with_the_wcs_is_proposed(tmp_path: Path, mirrored: bool) -> None:
    angles = [10.0, 10.0, 55.0, 55.0]
    columns = {key: [wcs(angle, mirrored)[key] for angle in angles] for key in wcs(0.0)}
    for number in range(8):
        header = frame(number, ROTANG=angles[number % 4] - 4.0)
        for key, values in columns.items():
            header[key] = values[number % 4]
        fits.PrimaryHDU(np.zeros((4, 5), np.int16), header).writeto(tmp_path / f"c{number}.fits")
    entry = finding(tmp_path, "keywords.position_angle")
    assert entry.how == "guessed"
    assert entry.value["keyword"] == "ROTANG"
    # value = scale x (header - zero) is the angle of +y.
    assert entry.value.get("scale", 1.0) * (6.0 - entry.value["zero"]) == pytest.approx(10.0, abs=0.02)
    assert finding(tmp_path, "orientation.sense").value == (-1 if mirrored else 1)
    assert finding(tmp_path, "detector.pixel_scale").value == pytest.approx(0.36)


def test_sections_and_levels_are_taken_from_the_header(tmp_path: Path) -> None:
    write(tmp_path, TRIMSEC="[1:200, 1:200]", BIASSEC="[201:220,1:200]", SATURATE=55000)
    tree = tomllib.loads(propose(tmp_path).instrument_text)["detector"]
    assert (tree["trim"], tree["overscan"], tree["saturation"]) == ("[1:200,1:200]", "[201:220,1:200]", 55000.0)
    assert tree["read_noise"] == 5.5


def test_a_section_outside_the_image_is_not_taken(tmp_path: Path) -> None:
    write(tmp_path, TRIMSEC="[1:2048,1:2048]")
    found = finding(tmp_path, "detector.trim")
    assert found.value is None
    assert "does not lie in the image" in found.why


@pytest.mark.parametrize(("cards", "expected"), [
    ({"RA": 265.9458, "DEC": -7.0794}, "RA"),
    ({"RA": (17.72972, "hours"), "DEC": -7.0794}, {"keyword": "RA", "unit": "hourangle"}),
    ({"EQUINOX": 2000.0}, "RA"),
    ({"EQUINOX": 2024.2}, {"keyword": "RA", "equinox": "EQUINOX"}),
])  # fmt: skip
def test_right_ascensions_in_any_form(tmp_path: Path, cards: dict[str, Any], expected: Any) -> None:
    write(tmp_path, count=4, **cards)
    assert finding(tmp_path, "keywords.ra").value == expected


@pytest.mark.parametrize(("cards", "expected", "how"), [
    ({"DATE_OBS": (["2024-03-05T01:00:00"], "")[0]}, "DATE-OBS", "recognised"),
    ({"DATE_OBS": None, "JD": [2460374.5 + i / 1440 for i in range(8)]}, {"keyword": "JD", "format": "jd"}, "guessed"),
    ({"DATE_OBS": "2024-03-05", "UTC": [3600.0 + 60 * i for i in range(8)]},
     {"keyword": ["DATE-OBS", "UTC"], "unit": "s"}, "guessed"),
    ({"DATE_OBS": "05/03/99", "TIME_OBS": "01:02:03"}, ["DATE-OBS", "TIME-OBS"], "guessed"),
    ({"DATE_OBS": None, "MJD_MID": 60374.04}, {"keyword": "MJD-MID", "format": "mjd", "marks": "middle"}, "recognised"),
    ({"DATE_OBS": None}, "DATE-OBS", "to fill in"),
])  # fmt: skip
def test_times_in_any_form(tmp_path: Path, cards: dict[str, Any], expected: Any, how: str) -> None:
    write(tmp_path, **cards)
    found = finding(tmp_path, "keywords.time")
    assert (found.value, found.how) == (expected, how)


def test_the_summary_names_what_is_open(tmp_path: Path) -> None:
    proposal = propose(write(tmp_path))
    text = proposal.summary()
    for found in proposal.findings:
        assert found.key.partition("target.")[2] or found.key in text
    assert "Before the files can be used:" in text
    assert "beam[2].offset" in text
    assert "HD 161056" in text


KEYS = (
    "OBJECT IMAGETYP OBSTYPE FILTER FILTER1 HWPANG WPPOS ROTPA EXPTIME DATE-OBS UT MJD-OBS RA DEC EQUINOX CRVAL1 CD1_1 "
    "CD1_2 CD2_2 CDELT1 CDELT2 CROTA2 AIRMASS GAIN RDNOISE SATURATE BIASSEC TRIMSEC LONGITUD LATITUDE LST PIXSCALE "
    "FOCALLEN XPIXSZ"
)
TEXTS = (
    "bias;object;Flat Field;V;clear;22.5;hwp 45;2024-03-05;2024-03-05T01:02:03;05/03/99;12:34:56;[1:3,1:4];[0:9,1:2];;"
    "NaN;inf;P1;_"
)
NUMBERS = (0, 1, -1, 90, 65535, 0.0, 22.5, 45.0, 1e-12, -99.9, 1e30, 60374.04, 359.9, 0.3927, True, None)
VALUES = (*TEXTS.split(";"), *NUMBERS)


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**31))
def test_no_header_makes_it_stumble(tmp_path_factory: pytest.TempPathFactory, seed: int) -> None:
    rng = np.random.default_rng(seed)
    folder = tmp_path_factory.mktemp("any")
    pools = {
        key: rng.integers(0, len(VALUES), 3) for key in rng.choice(KEYS.split(), rng.integers(0, 20), replace=False)
    }
    for number in range(int(rng.integers(1, 7))):
        hdu = fits.PrimaryHDU(np.zeros((4, 5), np.int16))
        for key, pool in pools.items():
            hdu.header[str(key)] = VALUES[rng.choice(pool)]
        hdu.writeto(folder / f"{number}.fits")
    proposal = propose(folder, measure_offset=bool(seed % 2))
    tomllib.loads(proposal.instrument_text)
    tomllib.loads(proposal.night_text)
    assert "Targets" in proposal.summary()
    # Whatever is written is allowed; only what no header tells may be missing.
    assert {line.replace(" = ", ": ").split(": ")[1] for line in proposal.problems} <= {
        "detector.gain",
        "beam[2].offset",
    }
