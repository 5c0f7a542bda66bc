"""The objects from a script: five lines give what the night gives, and mistakes are told."""

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord

import hwpol
from hwpol.errors import InputError
from hwpol.night.photometer import extent


@pytest.fixture(scope="module")
def frames(reduced_night):
    """The frames of the reduced night."""
    folder = reduced_night[0].parent
    instrument = hwpol.Instrument.read(folder / "instrument.toml")
    return hwpol.FrameSet.read(sorted((folder / "raw").glob("*.fits")), instrument)


@pytest.fixture(scope="module")
def fern(frames):
    """The frames of one target, with those that calibrate the detector."""
    return frames.select((frames.column("object") == "Fern") | (frames.column("kind") != "science"))


def test_five_lines_equal_the_night(fern, reduced_night):
    path, answer = reduced_night
    row = answer.results[answer.results["target"] == "Fern"][0]
    fluxes = hwpol.photometer(fern, positions=[(row["x"], row["y"])])
    stokes = hwpol.demodulate(fluxes, method="least-squares")
    sky = hwpol.Calibration.read(path.parent / "reduced" / "calibration.toml").apply(stokes)
    # The file of the calibration holds twelve digits or more, the night starts from a place rounded less.
    for name, value in (("q", sky.q), ("u", sky.u), ("q_inst", stokes.q), ("u_inst", stokes.u), ("p", sky.p),
                        ("theta", sky.theta), ("p_debiased", sky.debiased())):  # fmt: skip
        np.testing.assert_allclose(value, [row[name]], rtol=1e-6)


def test_inputs_stay_as_they_were(fern):
    before = fern.table.copy()
    positions = np.array([[47.0, 24.0]])
    hwpol.photometer(fern, positions, radius=5.0, annulus=(9, 14))
    for name in before.colnames:
        np.testing.assert_array_equal(before[name], fern.table[name])
    np.testing.assert_array_equal(positions, [[47.0, 24.0]])


def test_units_are_understood(fern):
    plain = hwpol.photometer(fern, [(47.0, 24.0)], radius=5.0, annulus=(9, 14))
    units = hwpol.photometer(fern, [(47.0, 24.0)] * u.pix, radius=5.0 * u.pix, annulus=(9 * u.pix, 14 * u.pix))
    np.testing.assert_array_equal(plain.flux, units.flux)
    assert plain.shape == (1, 8, 2)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"radius": -2}, r"radius = -2: expected pixels > 0, \"best\", or a multiple of fwhm such as \"2.0 fwhm\""),
        ({"radius": "wide"}, "radius = 'wide'"),
        ({"radius": float("nan")}, "radius = nan"),
        ({"annulus": ("best", 9)}, "annulus = 'best': expected pixels > 0, or a multiple"),
        ({"annulus": (12, 6)}, "annulus"),
        ({"positions": []}, "positions"),
        ({"positions": [(1.0, 2.0, 3.0)]}, "positions: expected pairs"),
        ({"positions": [(np.nan, 2.0)]}, "positions: expected pairs"),
        ({"positions": SkyCoord(118 * u.deg, -25 * u.deg)}, "world coordinates; give pixels"),
        ({"registration": "guess"}, "registration.method = 'guess'"),
    ],
)
def test_refusals(fern, options, message):
    positions = options.pop("positions", [(47.0, 24.0)])
    with pytest.raises(InputError, match=message):
        hwpol.photometer(fern, positions, **options)


def test_one_visit_at_a_time(frames):
    with pytest.raises(InputError, match="3 visits"):
        hwpol.photometer(frames, [(47.0, 24.0)])


def test_no_science_frame(frames):
    with pytest.raises(InputError, match="no usable science frame"):
        hwpol.photometer(frames.select(frames.column("kind") != "science"), [(47.0, 24.0)])


def test_calibrations_may_come_from_elsewhere(frames, fern):
    science = frames.select(frames.column("object") == "Fern")
    ours = hwpol.photometer(fern, [(47.0, 24.0)], radius=5.0)
    theirs = hwpol.photometer(science, [(47.0, 24.0)], radius=5.0, calibrations=frames)
    np.testing.assert_array_equal(ours.flux, theirs.flux)


@pytest.mark.parametrize(
    ("value", "number", "unit"),
    [("best", 0.0, "best"), (" Best ", 0.0, "best"), ("2.0 fwhm", 2.0, "fwhm"), ("2.5FWHM", 2.5, "fwhm"),
     (6, 6.0, "pixel"), ("6", 6.0, "pixel"), (6 * u.pix, 6.0, "pixel"), (np.float32(6), 6.0, "pixel")],
)  # fmt: skip
def test_extent(value, number, unit):
    assert (extent(value).value, extent(value).unit) == (number, unit)
