"""Headers as observatories write them, each read to values worked out by hand."""

from __future__ import annotations

import bz2
import gzip
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from hwpol.frames.headers import FileProblem, Frame, image_index, read_frame, read_headers
from hwpol.instrument.description import Beam, Detector, Instrument, Keyword, WavePlate

KINDS = {"bias": ("bias", "zero"), "dark": ("dark",), "flat": ("flat", "skyflat"), "science": ("object", "light")}
BEAMS = (Beam("o", 0.0), Beam("e", 90.0))
PLAIN: dict[str, Any] = {
    "FRMKIND": "object",
    "OBJECT": "Star 1",
    "BAND": "V",
    "EXPTIME": 60.0,
    "DATE-OBS": "2024-03-05T00:00:00",
    "PLATE": 22.5,
}
NAMES = {
    "kind": "FRMKIND",
    "object": "OBJECT",
    "filter": "BAND",
    "exposure": "EXPTIME",
    "time": "DATE-OBS",
    "wave_plate": "PLATE",
}
MIDNIGHT = 60374.0  # 2024-03-05 00:00 UTC: 2000-01-01 is MJD 51544, and 8830 days follow
SECOND = 1 / 86400
# Half a unit in the last place of an MJD of 6e4 is 3.6e-12 d; three operations.
TIME_ROUNDING = 2e-11


def instrument(*, detector: Detector | None = None, beams: tuple[Beam, ...] = BEAMS, **changes: Any) -> Instrument:
    plate = changes.pop("plate", WavePlate())
    clear = changes.pop("clear", ("clear", "open", ""))
    keywords = {name: Keyword((key,)) for name, key in NAMES.items()}
    for name, value in changes.items():
        if value is None:
            keywords.pop(name)
        else:
            keywords[name] = value if isinstance(value, Keyword) else Keyword((value,))
    return Instrument(
        "test", detector or Detector(), keywords, beams, kinds=KINDS, wave_plate=plate, clear_filters=clear
    )


def write(path: Path, shape: tuple[int, ...] = (4, 5), **cards: Any) -> Path:
    hdu = fits.PrimaryHDU(np.zeros(shape, dtype=np.int16))
    for key, value in {**PLAIN, **{k.replace("_", "-"): v for k, v in cards.items()}}.items():
        if value is not None:
            hdu.header[key] = value
    hdu.writeto(path)
    return path


def read(tmp_path: Path, cards: dict[str, Any] | None = None, **changes: Any) -> Frame:
    return read_frame(write(tmp_path / "a.fits", **(cards or {})), instrument(**changes))


def test_plain_header(tmp_path: Path) -> None:
    frame = read(tmp_path)
    assert frame.reasons == []
    assert (frame.kind, frame.object, frame.filter, frame.name) == ("science", "Star 1", "V", "a.fits")
    assert (frame.exposure, frame.psi, frame.wave_plate) == (60.0, 22.5, "22.5")
    assert frame.mjd == pytest.approx(MIDNIGHT + 30 * SECOND, abs=TIME_ROUNDING)
    assert frame.shape == "5 x 4"
    assert frame.hdus == (0,)


@pytest.mark.parametrize(
    ("cards", "time", "seconds"),
    [
        # The middle of a 60 s exposure, seconds after midnight.
        ({"DATE-OBS": "2024-03-05 01:02:03.25"}, Keyword(("DATE-OBS",)), 3723.25 + 30),
        ({"DATE-OBS": "2024-03-05T01:02:03Z"}, Keyword(("DATE-OBS",), marks="middle"), 3723),
        ({"DATE-OBS": "2024-03-05T01:02:03"}, Keyword(("DATE-OBS",), marks="end"), 3723 - 30),
        ({"DATE-OBS": "2024/03/05", "UT": "01:02:03.5"}, Keyword(("DATE-OBS", "UT")), 3723.5 + 30),
        ({"DATE-OBS": "2024-03-05", "UT": " 1 02 03"}, Keyword(("UT", "DATE-OBS")), 3723 + 30),
        ({"DATE-OBS": "2024-03-05", "UT": 3723.0}, Keyword(("DATE-OBS", "UT"), unit="s"), 3723 + 30),
        ({"DATE-OBS": "2024-03-05", "UT": 1.5}, Keyword(("UT", "DATE-OBS"), unit="h"), 5400 + 30),
        ({"DATE-OBS": "2024-03-05T09:09:09", "UT": "01:02"}, Keyword(("DATE-OBS", "UT")), 3720 + 30),
        ({"MJD-OBS": 60374.5}, Keyword(("MJD-OBS",), format="mjd"), 43200 + 30),
        ({"JD": "2460374.75"}, Keyword(("JD",), format="jd", marks="middle"), 21600),
        ({"HISTO": "exposed 2024-03-05T01:00:00 at"}, Keyword(("HISTO",), pattern=r"exposed (\S+)"), 3600 + 30),
    ],
)
def test_times(tmp_path: Path, cards: dict[str, Any], time: Keyword, seconds: float) -> None:
    frame = read(tmp_path, cards, time=time)
    assert frame.reasons == []
    assert frame.mjd == pytest.approx(MIDNIGHT + seconds * SECOND, abs=TIME_ROUNDING)


def test_old_fits_dates_are_of_the_twentieth_century(tmp_path: Path) -> None:
    frame = read(tmp_path, {"DATE-OBS": "17/11/58", "UT": "12:00:00"}, time=Keyword(("DATE-OBS", "UT"), marks="middle"))
    assert frame.mjd == 36524.5  # 100 years after MJD 0, 24 of them leap


@pytest.mark.parametrize(
    "cards",
    [{"DATE-OBS": "yesterday"}, {"DATE-OBS": "2024-13-05T00:00:00"}, {"DATE-OBS": "2024-03-05"}, {"DATE-OBS": None}],
)
def test_science_without_a_time_is_set_aside(tmp_path: Path, cards: dict[str, Any]) -> None:
    frame = read(tmp_path, cards)
    assert math.isnan(frame.mjd)
    assert "DATE-OBS" in frame.reasons[0]


@pytest.mark.parametrize(
    ("value", "keyword", "plate", "psi"),
    [
        (22.5, Keyword(("PLATE",)), WavePlate(), 22.5),
        ("22.5 ", Keyword(("PLATE",)), WavePlate(), 22.5),
        ("22.5 deg", Keyword(("PLATE",)), WavePlate(), 22.5),
        ("22,5", Keyword(("PLATE",)), WavePlate(), 22.5),
        ("+045.0", Keyword(("PLATE",)), WavePlate(), 45.0),
        (742.5, Keyword(("PLATE",)), WavePlate(), 22.5),
        (-22.5, Keyword(("PLATE",)), WavePlate(), 337.5),
        (45, Keyword(("PLATE",)), WavePlate(scale=0.5), 22.5),
        (30.0, Keyword(("PLATE",)), WavePlate(sense=-1, zero=52.5), 22.5),
        (0.125, Keyword(("PLATE",), unit="cycle"), WavePlate(), 45.0),
        (math.pi / 8, Keyword(("PLATE",), unit="rad"), WavePlate(), 22.5),
        (9000, Keyword(("PLATE",), scale=0.0025, zero=0.0), WavePlate(), 22.5),
        (2, Keyword(("PLATE",)), WavePlate(values={"1": 0.0, "2": 22.5}), 22.5),
        ("2.0", Keyword(("PLATE",)), WavePlate(values={"1": 0.0, "2": 22.5}), 22.5),
        (" Pos B", Keyword(("PLATE",)), WavePlate(values={"posa": 0.0, "posb": 45.0}, scale=0.5, zero=5.0), 20.0),
        ("STAR hwp=67.5", Keyword(("PLATE",), pattern=r"hwp=([\d.]+)"), WavePlate(), 67.5),
        ("step 3 of 16", Keyword(("PLATE",), pattern=r"step (\d+)", scale=22.5, zero=1.0), WavePlate(), 45.0),
    ],
)
def test_plate_angles(tmp_path: Path, value: Any, keyword: Keyword, plate: WavePlate, psi: float) -> None:
    frame = read(tmp_path, {"PLATE": value}, wave_plate=keyword, plate=plate)
    assert frame.reasons == []
    # Rounding of one product of numbers up to 1e4.
    assert frame.psi == pytest.approx(psi, abs=1e-11)


@pytest.mark.parametrize(
    ("value", "reason"),
    [
        ("None", "PLATE = 'None': expected an angle in degrees"),
        ("NaN", "PLATE = 'NaN': expected an angle in degrees"),
        ("inf", "PLATE = 'inf': expected an angle in degrees"),
        (True, "PLATE = 'T': expected an angle in degrees"),
        ("22.5 furlongs", "PLATE = '22.5 furlongs': expected an angle in degrees, not in units of 'furlongs'"),
        ("", "PLATE is blank"),
        (None, "PLATE is missing"),
    ],
)
def test_nonsense_plate_angles_set_science_aside(tmp_path: Path, value: Any, reason: str) -> None:
    frame = read(tmp_path, {"PLATE": value})
    assert math.isnan(frame.psi)
    assert frame.reasons == [reason]


def test_plate_position_that_is_not_listed(tmp_path: Path) -> None:
    frame = read(tmp_path, {"PLATE": 7}, plate=WavePlate(values={"1": 0.0}))
    assert frame.reasons == ["PLATE = '7' is not listed in [wave_plate] values"]
    assert frame.wave_plate == "7"


def test_a_card_that_breaks_the_standard(tmp_path: Path) -> None:
    path = write(tmp_path / "a.fits")
    raw = path.read_bytes()
    card = next(raw[at : at + 80] for at in range(0, 2880, 80) if raw[at : at + 5] == b"PLATE")
    path.write_bytes(raw.replace(card, b"PLATE   = 22,5 / plate".ljust(80)))
    assert read_frame(path, instrument()).psi == 22.5
    path.write_bytes(raw.replace(card, b"PLATE   = NaN".ljust(80)))
    assert read_frame(path, instrument()).reasons == ["PLATE = 'NaN': expected an angle in degrees"]


def test_a_degree_sign_in_a_header_does_no_harm(tmp_path: Path) -> None:
    path = write(tmp_path / "a.fits", PLATE="22.5 deg")
    raw = path.read_bytes()
    for sign in (b"\xb0  ", b"\xc2\xb0 "):
        path.write_bytes(raw.replace(b"22.5 deg", b"22.5 " + sign))
        assert (read_frame(path, instrument()).reasons, read_frame(path, instrument()).psi) == ([], 22.5)


@settings(deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.dictionaries(st.integers(0, 1400), st.integers(0, 255), max_size=12), st.integers(0, 2880 + 40))
def test_no_damage_to_a_header_raises(tmp_path: Path, bytes_: dict[int, int], length: int) -> None:
    path = tmp_path / "a.fits"
    if not path.exists():
        write(path, RA="12:00:00", DEC=-5.0, AIRMASS=1.1)
    raw = bytearray(path.read_bytes()[: 2880 + 40])
    for place, value in bytes_.items():
        raw[place] = value
    damaged = tmp_path / "b.fits"
    damaged.write_bytes(raw[:length] if length % 2 else raw)
    frame = read_frame(damaged, instrument(ra="RA", dec="DEC", airmass="AIRMASS"))
    assert not frame.unread or len(frame.reasons) == 1
    assert not length % 2 or frame.reasons


def test_calibrations_need_no_plate_angle_and_bias_no_exposure(tmp_path: Path) -> None:
    for number, kind in enumerate((" Zero ", "FLAT", "Sky Flat", "dark")):
        cards = {**PLAIN, "FRMKIND": kind, "PLATE": "None", "EXPTIME": None if kind == " Zero " else 1.0}
        frame = read_frame(write(tmp_path / f"{number}.fits", **cards), instrument())
        assert frame.reasons == []
        assert frame.kind == ("bias", "flat", "flat", "dark")[number]


def test_kinds(tmp_path: Path) -> None:
    assert read(tmp_path, {"FRMKIND": "FOCUS"}).reasons == ["kind 'FOCUS' is not listed in [kinds]"]
    assert read_frame(tmp_path / "a.fits", instrument(kind=None)).kind == "science"
    assert read_frame(tmp_path / "a.fits", instrument(kind="ELSE")).reasons[0] == (
        "kind of frame unknown: ELSE is missing"
    )


@pytest.mark.parametrize(
    ("cards", "keys", "name"),
    [
        ({"BAND": " Bess R  76 "}, ("BAND",), "Bess R 76"),
        ({"BAND": "V", "WHEEL2": "Clear"}, ("BAND", "WHEEL2"), "V"),
        ({"BAND": "V", "WHEEL2": "OG590"}, ("BAND", "WHEEL2"), "V+OG590"),
        ({"BAND": "open", "WHEEL2": ""}, ("BAND", "WHEEL2"), "clear"),
        ({"BAND": 3}, ("BAND",), "3"),
        ({"BAND": None, "WHEEL2": "R"}, ("BAND", "WHEEL2"), "R"),
    ],
)
def test_filters(tmp_path: Path, cards: dict[str, Any], keys: tuple[str, ...], name: str) -> None:
    assert read(tmp_path, cards, filter=Keyword(keys)).filter == name


def test_a_missing_filter_is_noted(tmp_path: Path) -> None:
    frame = read(tmp_path, {"BAND": None}, clear=("open",))
    assert (frame.filter, frame.reasons, frame.notes) == ("", [], ["BAND missing"])


@pytest.mark.parametrize(
    ("value", "keyword", "seconds"),
    [
        (1500, Keyword(("EXPTIME",), unit="ms"), 1.5),
        ("2.5 min", Keyword(("EXPTIME",)), 150.0),
        ("90 sec", Keyword(("EXPTIME",)), 90.0),
        ("1.5D+01", Keyword(("EXPTIME",)), 15.0),
        (11, Keyword(("EXPTIME",), zero=1.0), 10.0),
    ],
)
def test_exposures(tmp_path: Path, value: Any, keyword: Keyword, seconds: float) -> None:
    assert read(tmp_path, {"EXPTIME": value}, exposure=keyword).exposure == pytest.approx(seconds, rel=1e-15)


@pytest.mark.parametrize("value", [0.0, -5.0, "long", None])
def test_impossible_exposures_set_science_aside(tmp_path: Path, value: Any) -> None:
    assert "EXP" in read(tmp_path, {"EXPTIME": value}).reasons[0].upper()


@pytest.mark.parametrize(
    ("ra", "dec", "changes", "degrees"),
    [
        # 12h34m56.4s is 188.735 deg; -0d30m36s is -0.51 deg.
        ("12:34:56.4", "-00:30:36", {}, (188.735, -0.51)),
        ("12 34 56.4", "-00 30 36", {}, (188.735, -0.51)),
        ("12h34m56.4s", "-00d30m36s", {}, (188.735, -0.51)),
        ("12:34.94", "-0:30.6", {}, (188.735, -0.51)),
        (188.735, -0.51, {}, (188.735, -0.51)),
        ("188.735", "-0.51", {}, (188.735, -0.51)),
        (-171.265, "+12:00", {}, (188.735, 12.0)),
        (12.582333333333333, 1.0, {"ra": Keyword(("RA",), unit="hourangle")}, (188.735, 1.0)),
        ("188:44:06", "1", {"ra": Keyword(("RA",), unit="deg")}, (188.735, 1.0)),
    ],
)
def test_coordinates(
    tmp_path: Path, ra: Any, dec: Any, changes: dict[str, Keyword], degrees: tuple[float, float]
) -> None:
    frame = read(tmp_path, {"RA": ra, "DEC": dec}, **{"ra": "RA", "dec": "DEC", **changes})
    assert frame.notes == []
    # Rounding of a sum of three terms below 360.
    assert (frame.ra, frame.dec) == pytest.approx(degrees, abs=3e-13)


@pytest.mark.parametrize(
    ("given", "card", "read_as"),
    [
        (None, None, ""),
        (2000.0, None, "J2000.0"),
        ("J2000", None, "J2000.0"),
        ("B1950", None, "B1950.0"),
        (1950.0, None, "B1950.0"),
        ("ICRS", None, ""),
        ("EQUINOX", 2024.3, "J2024.3"),
        ("EQUINOX", "FK5", "J2000.0"),
    ],
)
def test_equinoxes(tmp_path: Path, given: str | float | None, card: Any, read_as: str) -> None:
    keywords = {"ra": Keyword(("RA",), equinox=given), "dec": Keyword(("DEC",), equinox=given)}
    assert read(tmp_path, {"RA": 1.0, "DEC": 2.0, "EQUINOX": card}, **keywords).equinox == read_as


def test_optional_quantities(tmp_path: Path) -> None:
    changes = {"position_angle": Keyword(("SKYANG",), scale=-1.0, zero=90.0), "airmass": "AIRMASS", "gain": "EGAIN"}
    frame = read(tmp_path, {"SKYANG": 30.0, "AIRMASS": "1.25", "EGAIN": 1.5}, **changes)
    assert (frame.chi, frame.airmass, frame.gain) == (60.0, 1.25, 1.5)
    (tmp_path / "a.fits").unlink()
    frame = read(tmp_path, {"AIRMASS": 0.0, "EGAIN": -1}, **changes)
    assert np.isnan([frame.chi, frame.airmass, frame.gain]).all()
    assert frame.notes == [
        "gain -1 is not above 0 and was left aside",
        "SKYANG is missing: chi taken from [orientation]",
    ]
    (tmp_path / "a.fits").unlink()
    assert read(tmp_path, {"SKYANG": "east"}, **changes).reasons == ["SKYANG = 'east': expected an angle in degrees"]


def test_the_image_header_goes_before_the_primary(tmp_path: Path) -> None:
    primary, image, other = fits.PrimaryHDU(), fits.ImageHDU(np.zeros((4, 5)), name="SCI"), fits.ImageHDU()
    primary.header.update(PLAIN)
    image.header["PLATE"] = 45.0
    image.header["BAND"] = ""
    other.header["AIRMASS"] = 1.5
    fits.HDUList([primary, other, image]).writeto(tmp_path / "m.fits")
    for extension in (2, "sci"):
        frame = read_frame(tmp_path / "m.fits", instrument(detector=Detector(extension=extension), airmass="AIRMASS"))
        assert (frame.reasons, frame.psi, frame.filter, frame.airmass) == ([], 45.0, "V", 1.5)


def test_beams_in_hdus_of_their_own(tmp_path: Path) -> None:
    beams = (Beam("o", 0.0, extension=1), Beam("e", 90.0, extension=2))
    primary = fits.PrimaryHDU()
    primary.header.update(PLAIN)
    images = [fits.ImageHDU(np.zeros((4, 5))), fits.ImageHDU(np.zeros((6, 5)))]
    fits.HDUList([primary, *images]).writeto(tmp_path / "m.fits")
    frame = read_frame(tmp_path / "m.fits", instrument(beams=beams))
    assert (frame.reasons, frame.hdus, frame.shape) == ([], (1, 2), "5 x 4 and 5 x 6")
    fits.HDUList([primary, images[0]]).writeto(tmp_path / "n.fits")
    reason = "no image in HDU 2 (but in HDU 1: set extension)"
    assert read_frame(tmp_path / "n.fits", instrument(beams=beams)).reasons == [reason]


def test_compressed_files_read_like_plain_ones(tmp_path: Path) -> None:
    plain = write(tmp_path / "a.fits", shape=(40, 50))
    (tmp_path / "a.fits.gz").write_bytes(gzip.compress(plain.read_bytes()))
    (tmp_path / "a.fits.bz2").write_bytes(bz2.compress(plain.read_bytes()))
    with fits.open(plain) as hdus:
        header = hdus[0].header.copy()
        fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(hdus[0].data, header)]).writeto(tmp_path / "a.fits.fz")
    wanted = read_frame(plain, instrument())
    for name in ("a.fits.gz", "a.fits.bz2", "a.fits.fz"):
        frame = read_frame(tmp_path / name, instrument())
        assert frame.reasons == []
        assert (frame.mjd, frame.psi, frame.filter, frame.shape) == (wanted.mjd, 22.5, "V", "50 x 40")


def test_which_hdu_an_extension_means() -> None:
    empty = fits.PrimaryHDU().header
    image = fits.ImageHDU(np.zeros((2, 2)), name="SCI").header
    packed = fits.Header([("XTENSION", "BINTABLE"), ("ZIMAGE", True), ("ZNAXIS", 1), ("ZNAXIS1", 2)])
    assert image_index((empty, packed, packed), 0) == 1
    assert image_index((empty, packed, packed), 2) == 2
    assert image_index((empty, image), 0) is None
    assert image_index((empty, image), 1) == 1
    assert image_index((empty, image), "sci") == 1
    assert image_index((empty, image), "other") is None
    assert image_index((empty, image), 2) is None


def test_two_beams_that_compression_laid_together(tmp_path: Path) -> None:
    beams = (Beam("o", 0.0, extension=0), Beam("e", 90.0, extension=1))
    packed = [fits.CompImageHDU(np.zeros((4, 5), dtype=np.int16)) for _ in range(2)]
    packed[0].header.update(PLAIN)
    fits.HDUList([fits.PrimaryHDU(), *packed]).writeto(tmp_path / "a.fits.fz")
    reasons = read_frame(tmp_path / "a.fits.fz", instrument(beams=beams)).reasons
    assert reasons == ["HDU 1 is that of another beam: compression changed the numbers of the HDUs"]


@pytest.mark.parametrize("suffix", ["fits", "fits.gz"])
@pytest.mark.parametrize("extensions", [0, 2])
def test_truncated_files_are_noticed(tmp_path: Path, suffix: str, extensions: int) -> None:
    rng = np.random.default_rng(1)
    primary = fits.PrimaryHDU(rng.integers(0, 9999, (60, 50)).astype(np.int16))
    primary.header.update(PLAIN)
    images = [fits.ImageHDU(rng.integers(0, 9999, (60, 50)).astype(np.int16)) for _ in range(extensions)]
    path = tmp_path / f"a.{suffix}"
    fits.HDUList([primary, *images]).writeto(path)
    assert read_frame(path, instrument()).reasons == []
    raw = path.read_bytes()
    path.write_bytes(raw[: len(raw) - 3000])
    frame = read_frame(path, instrument())
    assert frame.reasons[0].startswith("truncated")
    assert not frame.unread
    assert frame.object == "Star 1"


def test_a_bzip2_file_cut_within_its_only_block_is_unread(tmp_path: Path) -> None:
    path = tmp_path / "a.fits.bz2"
    path.write_bytes(bz2.compress(write(tmp_path / "a.fits").read_bytes())[:-20])
    frame = read_frame(path, instrument())
    assert frame.unread
    assert "ended before" in frame.reasons[0]


def test_missing_padding_is_no_truncation(tmp_path: Path) -> None:
    path = write(tmp_path / "a.fits")
    path.write_bytes(path.read_bytes()[: 2880 + 40])
    assert read_frame(path, instrument()).reasons == []
    path.write_bytes(path.read_bytes()[: 2880 + 39])
    assert read_frame(path, instrument()).reasons == ["truncated: the headers declare 2920 bytes, the file has 2919"]


@pytest.mark.parametrize(
    ("content", "reason"),
    [
        (b"", "the file is empty"),
        (b"\0" * 5000, "not a FITS file"),
        (b"time,flux\n1,2\n" * 500, "not a FITS file"),
        (b"SIMPLE  =                    T".ljust(80), "the header has no end"),
        (b"\x1f\x8b broken", "the file cannot be read"),
        (b"\x1f", "not a FITS file"),
        (b"SIMPLE  =                    T".ljust(80) + b"END".ljust(2800), "BITPIX and NAXIS make no sense"),
    ],
)
def test_what_is_not_fits_is_unread(tmp_path: Path, content: bytes, reason: str) -> None:
    path = tmp_path / "a.fits"
    path.write_bytes(content)
    frame = read_frame(path, instrument())
    assert frame.unread
    assert reason in frame.reasons[0]
    with pytest.raises(FileProblem):
        read_headers(path)


def test_missing_files_and_folders_are_unread(tmp_path: Path) -> None:
    assert "No such file" in read_frame(tmp_path / "none.fits", instrument()).reasons[0]
    assert "directory" in read_frame(tmp_path, instrument()).reasons[0]


def test_images_that_are_not_flat(tmp_path: Path) -> None:
    assert "3 axes (5 x 4 x 3)" in read_frame(write(tmp_path / "cube.fits", (3, 4, 5)), instrument()).reasons[0]
    assert read_frame(write(tmp_path / "one.fits", (1, 4, 5)), instrument()).shape == "5 x 4"
    header_only = fits.PrimaryHDU()
    header_only.header.update(PLAIN)
    header_only.writeto(tmp_path / "none.fits")
    assert read_frame(tmp_path / "none.fits", instrument()).reasons == ["no image in HDU 0"]
