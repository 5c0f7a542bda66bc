"""The order of the night, its angles, and what goes wrong in it."""

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import AltAz, EarthLocation, SkyCoord
from astropy.time import Time

from hwpol.errors import ConfigError
from hwpol.simulate import Scenario
from hwpol.simulate.plan import plan


def _plan(tree):
    return plan(Scenario.from_dict(tree))


def test_time_runs_with_exposures_overheads_and_slews(small):
    small["block"].append({"targets": ["Moss"], "filters": ["V"], "angles": [0.0], "exposure": 5.0})
    frames = _plan(small)
    starts = (np.array([one.start for one in frames]) - frames[0].start) * 86400
    np.testing.assert_allclose(np.diff(starts), [10, 10, 20, 20, 20, 80], atol=1e-4)  # MJD holds 1e-6 s
    assert [one.number for one in frames] == list(range(1, 8))


def test_targets_alternate_and_filters_change_as_asked(small):
    small["filters"]["R"] = {}
    block = small["block"][1]
    block.update(targets=["Fern", "Moss"], filters=["V", "R"], cycles=2, angles=[0.0, 22.5])
    by_filter = [(one.filter, one.target, one.cycle) for one in _plan(small) if one.kind == "science"][::2]
    assert by_filter == [(f, t, c) for f in "VR" for c in (1, 2) for t in ("Fern", "Moss")]
    block["order"] = "cycles"
    by_cycle = [(one.filter, one.target, one.cycle) for one in _plan(small) if one.kind == "science"][::2]
    assert by_cycle == [(f, t, c) for c in (1, 2) for f in "VR" for t in ("Fern", "Moss")]


def test_a_gap_begins_a_visit(small):
    small["block"].append({**small["block"][1], "at": 0.5})
    assert {one.visit for one in _plan(small)} == {-1, 1}
    assert max(one.cycle for one in _plan(small)) == 2
    small["block"][2]["at"] = 1.2
    frames = _plan(small)
    assert [one.visit for one in frames[-8:]] == [1] * 4 + [2] * 4
    assert {one.cycle for one in frames[2:]} == {1}
    small["night"] = {"grouping": {"gap": 90.0}}
    assert {one.visit for one in _plan(small)} == {-1, 1}


def test_eta_points_to_the_zenith(small):
    """A step of 36 arcsec at position angle eta raises the altitude by all of it; one across by nothing.

    The neglected curvature is step^2/2 x tan(altitude) < 1e-5 of a degree here.
    """
    frames = [one for one in _plan(small) if one.kind == "science"]
    star = SkyCoord(118.0 * u.deg, -25.0 * u.deg)
    place = EarthLocation(lon=-70.2 * u.deg, lat=-29.8 * u.deg, height=2450 * u.m)
    for one in frames[::3]:
        frame = AltAz(obstime=Time(one.middle, format="mjd"), location=place)
        height = star.transform_to(frame).alt.deg
        assert one.altitude == pytest.approx(height, abs=1e-9)
        along, across = (
            star.directional_offset_by((one.eta + turn) * u.deg, 0.01 * u.deg).transform_to(frame).alt.deg - height
            for turn in (0, 90)
        )
        assert along == pytest.approx(0.01, abs=2e-5)
        assert across == pytest.approx(0.0, abs=2e-5)


def test_chi_as_the_instrument_says(small):
    small["instrument"]["orientation"] = {"position_angle": 40.0}
    assert {one.chi for one in _plan(small) if one.kind == "science"} == {40.0}
    small["block"][1]["position_angle"] = 70.0
    assert {one.chi for one in _plan(small) if one.kind == "science"} == {70.0}
    small["instrument"]["orientation"] = {"mount": "altaz", "position_angle": "parallactic", "altitude": -1}
    for one in _plan(small)[2:]:
        assert (one.chi - (one.eta - one.altitude) + 180) % 360 == pytest.approx(180, abs=1e-9)


def test_a_target_below_the_horizon_is_refused(small):
    small["target"][0]["dec"] = 85.0
    with pytest.raises(ConfigError, match="altitude"):
        _plan(small)


def test_stuck_and_mislabelled_plates(small):
    small["fault"] = [{"kind": "stuck", "frames": [4, 5]}, {"kind": "mislabelled", "frames": [6], "amount": 45.0}]
    frames = _plan(small)[2:]
    assert [one.psi for one in frames] == [0.0, 0.0, 0.0, 67.5]
    assert [one.psi_header for one in frames] == [0.0, 22.5, 45.0, 112.5]


def test_a_fault_beyond_the_night_is_refused(small):
    small["fault"] = [{"kind": "stuck", "frames": [7]}]
    with pytest.raises(ConfigError, match=r"fault\[1\].frames = 7"):
        _plan(small)


def test_weather_keeps_its_limits_and_its_time(small):
    small["block"][1].update(cycles=100)
    small["atmosphere"] = {"clouds": 0.7, "cloud_time": 2.0, "seeing": 4.0, "seeing_change": 0.1, "seeing_time": 10.0}
    frames = [one for one in _plan(small) if one.kind == "science"]
    light = np.array([one.transparency for one in frames])
    assert 0.3 <= light.min() < 0.45
    assert 0.9 < light.max() <= 1.0
    walk = np.log([one.fwhm / 4.0 for one in frames]) / 0.1
    # 133 min hold about 20 independent values of a walk of 10 min: its variance is known to sqrt(2/20).
    assert walk.var() == pytest.approx(1.0, abs=3.29 * np.sqrt(2 / 20))
    assert np.abs(np.diff(walk)).max() < 0.5  # 20 s of 600 s


def test_drift_wobble_and_pointing(small):
    small["guiding"] = {"drift": [0.5, -0.25]}
    small["optics"] = {"wobble": 2.0, "wobble_phase": 90.0}
    frames = _plan(small)[2:]
    angle = np.deg2rad(90 + np.array([0, 22.5, 45, 67.5]))
    expected = np.stack([0.5 * np.arange(4) + 2 * np.cos(angle), -0.25 * np.arange(4) + 2 * np.sin(angle)], axis=1)
    np.testing.assert_allclose([one.shift for one in frames], expected, atol=1e-12)


def test_random_parts_of_a_frame_depend_on_its_number_alone(small):
    small["optics"] = {"setting_noise": 0.3}
    small["guiding"] = {"jitter": 0.5}
    small["atmosphere"] = {"scintillation": 0.1}
    small["fault"] = [{"kind": "cloud", "frames": [4], "amount": 0.5}]
    clouded = _plan(small)
    small["fault"] = []
    clear = _plan(small)
    assert clouded[3].transparency == pytest.approx(0.5 * clear[3].transparency, rel=1e-12)
    assert [one for one in clouded if one.number != 4] == [one for one in clear if one.number != 4]
    assert clear[3].psi != 22.5
