"""Fluxes from arrays: shapes, units, refusals."""

import numpy as np
import pytest

from hwpol.errors import InputError
from hwpol.fluxes import Fluxes

PSI = [0.0, 22.5, 45.0, 67.5]


def test_a_missing_source_axis_is_added():
    fluxes = Fluxes.from_arrays(np.ones((4, 2)), np.ones((4, 2)), wave_plate=PSI, analyser=[0, 90])
    assert fluxes.shape == (1, 4, 2)
    assert fluxes.analyser.shape == (4, 2)
    assert np.isnan(fluxes.parallactic).all()


def test_selection_keeps_everything_together():
    flux = np.arange(24.0).reshape(3, 4, 2) + 1
    fluxes = Fluxes.from_arrays(
        flux, flux, wave_plate=PSI, analyser=[0, 90], x=[1, 2, 3], y=[4, 5, 6], cycle=[1, 1, 2, 2]
    )
    part = fluxes.take_frames(fluxes.cycle == 2).take_sources([2])
    assert np.array_equal(part.flux, flux[2:, 2:])
    assert part.x == [3.0]
    assert np.array_equal(part.wave_plate, PSI[2:])


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"flux": np.ones(4)}, "expected"),
        ({"variance": np.zeros((4, 2))}, "variance"),
        ({"variance": -np.ones((4, 2))}, "variance"),
        ({"variance": np.ones((3, 2))}, "variance"),
        ({"wave_plate": [0, 1, 2]}, "wave_plate"),
        ({"wave_plate": [0, 1, 2, np.nan]}, "wave_plate"),
        ({"analyser": [0, 45, 90]}, "analyser"),
        ({"sense": 0}, "sense"),
        ({"x": [1, 2]}, "x"),
        ({"cycle": [1, 2]}, "cycle"),
    ],
)
def test_bad_input_is_named(change, match):
    arguments = {"flux": np.ones((4, 2)), "variance": np.ones((4, 2)), "wave_plate": PSI, "analyser": [0, 90]} | change
    with pytest.raises(InputError, match=match):
        Fluxes.from_arrays(arguments.pop("flux"), arguments.pop("variance"), **arguments)
