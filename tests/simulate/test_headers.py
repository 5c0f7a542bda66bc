"""Headers in the habits of an instrument file, read back by its formulas as written in the file's description."""

import math
import re

import pytest

from hwpol.errors import ConfigError
from hwpol.simulate import Scenario
from hwpol.simulate.headers import header_of
from hwpol.simulate.plan import plan


def _headers(tree, kind="science"):
    scenario = Scenario.from_dict(tree)
    return [(one, header_of(scenario, one, 2.0)) for one in plan(scenario) if one.kind == kind]


def test_plain_habits(small):
    (one, header), *_ = _headers(small)
    assert header["KIND"].lower() in ("object", "science", "light")
    assert header["OBJECT"] == "Fern"
    assert header["BAND"] == "V"
    assert header["EXPTIME"] == 10.0
    assert header["DATE-OBS"].startswith("2026-03-14T00:20:20")
    assert header["RA"] == "07:52:00.000"
    assert header["DEC"] == "-25:00:00.000"
    assert header["AIRMASS"] == pytest.approx(1 / math.sin(math.radians(one.altitude)), abs=1e-8)
    assert _headers(small, "bias")[0][1]["KIND"].lower() in ("bias", "zero")


@pytest.mark.parametrize("sense", [1, -1])
@pytest.mark.parametrize("scale", [1.0, 0.5, 0.013])
@pytest.mark.parametrize("zero", [0.0, 37.3, -120.0])
@pytest.mark.parametrize("unit", [None, "rad"])
def test_plate_formula_turned_round(small, sense, scale, zero, unit):
    """psi = sense x scale x (value - zero), the same plate every 180 deg."""
    small["instrument"]["wave_plate"] = {"sense": sense, "scale": scale, "zero": zero}
    if unit:
        small["instrument"]["keywords"]["wave_plate"] = {"keyword": "PLATE", "unit": unit}
    for one, header in _headers(small):
        value = math.degrees(header["PLATE"]) if unit else header["PLATE"]
        psi = sense * scale * (value - zero)
        assert math.remainder(psi - one.psi_header, 180) == pytest.approx(0, abs=1e-7)  # nine decimals written


def test_plate_positions_by_name(small):
    small["instrument"]["wave_plate"] = {"zero": 10.0, "values": {"A": 10.0, "B": 32.5, "C": 55.0, "D": 77.5}}
    assert [header["PLATE"] for _, header in _headers(small)] == list("ABCD")
    small["block"][1]["angles"] = [0.0, 30.0]
    with pytest.raises(ConfigError, match=r"block\[2\].angles = 30: no entry of wave_plate.values"):
        Scenario.from_dict(small)


def test_text_with_a_pattern(small):
    pattern = r"at ([-0-9.]+) deg"
    small["instrument"]["keywords"]["wave_plate"] = {"keyword": "PLATE", "pattern": pattern}
    small["headers"] = {"format": {"wave_plate": "at {:.2f} deg"}}
    found = [float(re.search(pattern, header["PLATE"])[1]) for _, header in _headers(small)]
    assert found == [0.0, 22.5, 45.0, 67.5]
    small["headers"] = {"format": {"wave_plate": "{:.2f}"}}
    with pytest.raises(ConfigError, match="pattern"):
        _headers(small)


@pytest.mark.parametrize(("marks", "late"), [("start", 0.0), ("middle", 5.0), ("end", 10.0)])
@pytest.mark.parametrize(("form", "offset"), [("mjd", 0.0), ("jd", 2400000.5)])
def test_times_as_numbers(small, marks, late, form, offset):
    small["instrument"]["keywords"]["time"] = {"keyword": "WHEN", "format": form, "marks": marks}
    one, header = _headers(small)[0]
    # A Julian date of a double holds 4e-10 d.
    assert header["WHEN"] == pytest.approx(one.start + late / 86400 + offset, abs=2e-9)


def test_date_and_time_apart_and_two_wheels(small):
    small["filters"]["R"] = {}
    small["instrument"]["filters"] = {"clear": ["open"]}
    small["instrument"]["keywords"].update(time=["DATE", "UT"], filter=["WHEEL1", "WHEEL2"])
    small["block"][1]["filters"] = ["V", "R"]
    found = [(h["DATE"], h["WHEEL1"], h["WHEEL2"]) for _, h in _headers(small)]
    assert found == [("2026-03-14", "V", "open")] * 4 + [("2026-03-14", "open", "R")] * 4
    assert _headers(small)[0][1]["UT"].startswith("00:20:20")


def test_position_angle_exposure_and_coordinates_in_other_units(small):
    small["instrument"]["orientation"] = {"position_angle": 30.0}
    small["instrument"]["keywords"].update(
        position_angle={"keyword": "ROT", "scale": -1.0, "zero": 90.0},
        exposure={"keyword": "MSEC", "unit": "ms"},
        ra={"keyword": "RAH", "unit": "hourangle"},
        dec={"keyword": "DECD", "unit": "deg"},
    )
    _, header = _headers(small)[0]
    assert -1.0 * (header["ROT"] - 90.0) == pytest.approx(30.0)
    assert header["MSEC"] == pytest.approx(10000.0)
    assert header["RAH"] * 15 == pytest.approx(118.0, abs=1e-7)
    assert header["DECD"] == -25.0


def test_old_equinox(small):
    """50 years of precession, 46.12 + 20.04 sin(ra) tan(dec) and 20.04 cos(ra) arcsec a year (common practice).

    The second order is about 50 years x 20 arcsec = 0.5 percent of the shift.
    """
    for name in ("ra", "dec"):
        small["instrument"]["keywords"][name] = {"keyword": name.upper(), "unit": "deg", "equinox": "J1950"}
    _, header = _headers(small)[0]
    ra, dec = math.radians(118), math.radians(-25)
    shift_ra = 50 * (46.12 + 20.04 * math.sin(ra) * math.tan(dec)) / 3600
    assert 118 - header["RA"] == pytest.approx(shift_ra, rel=0.01)
    assert -25 - header["DEC"] == pytest.approx(50 * 20.04 * math.cos(ra) / 3600, rel=0.01)


def test_wcs_leads_back_to_the_star(small):
    from astropy.wcs import WCS

    small["headers"] = {"wcs": True}
    for sense in (1, -1):
        small["instrument"]["orientation"] = {"position_angle": 25.0, "sense": sense}
        _, header = _headers(small)[0]
        del header["DATE-OBS"]  # of no use here, and translated with a warning
        wcs = WCS(header)
        assert wcs.pixel_to_world_values(39.5, 29.5) == pytest.approx((118.0, -25.0), abs=1e-9)
        ra, dec = wcs.pixel_to_world_values(39.5, 39.5)
        east, north = (ra - 118) * math.cos(math.radians(25)), dec + 25
        assert math.degrees(math.atan2(east, north)) == pytest.approx(25.0, abs=0.01)  # +y lies at chi
        ra, dec = wcs.pixel_to_world_values(29.5, 29.5)
        east, north = (ra - 118) * math.cos(math.radians(25)), dec + 25
        assert math.degrees(math.atan2(east, north)) == pytest.approx(25.0 + sense * 90, abs=0.01)


def test_missing_and_nonsense_angles(small):
    small["fault"] = [{"kind": "no-angle", "frames": [3]}, {"kind": "nonsense-angle", "frames": [4]}]
    headers = [header for _, header in _headers(small)]
    assert "PLATE" not in headers[0]
    assert headers[1]["PLATE"] == "???"


def test_long_keywords(small):
    small["instrument"]["keywords"]["wave_plate"] = "INS HWP ANGLE"
    assert [header["INS HWP ANGLE"] for _, header in _headers(small)] == [0.0, 22.5, 45.0, 67.5]


def test_no_plate_no_angle(small):
    small["instrument"].pop("wave_plate")
    small["instrument"]["keywords"].pop("wave_plate")
    small["block"] = [
        {"kind": "flat", "filters": ["V"], "level": 100.0, "exposure": 1.0},
        {"targets": ["Fern"], "filters": ["V"], "exposure": 10.0},
    ]
    for kind in ("flat", "science"):
        ((one, header),) = _headers(small, kind)
        assert math.isnan(one.psi)
        assert "PLATE" not in header
