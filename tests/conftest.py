"""Nights that several folders of tests use."""

import copy
import shutil

import pytest
from hypothesis import settings

# The same examples on every run and machine: what fails can be run again, and what passes stays so.
settings.register_profile("same", derandomize=True)
settings.load_profile("same")

ANGLES = [0.0, 22.5, 45.0, 67.5]

TINY = {
    "name": "tiny",
    "seed": 7,
    "start": "2026-03-14T00:20:00",
    "overhead": 6.0,
    "slew": 30.0,
    "instrument": {
        "name": "Wren",
        "detector": {"gain": 2.0, "read_noise": 4.0, "saturation": 60000.0, "pixel_scale": 0.5},
        "keywords": {
            "kind": "KIND", "object": "OBJECT", "filter": "BAND", "exposure": "EXPTIME", "time": "DATE-OBS",
            "wave_plate": "PLATE", "position_angle": "SKYANG", "ra": "RA", "dec": "DEC", "airmass": "AIRMASS",
        },
        "wave_plate": {"retardance": 180.0},
        "beam": [
            {"name": "o", "analyser": 0.0, "section": "[1:96,1:48]"},
            {"name": "e", "analyser": 90.0, "offset": [0.0, 52.0], "section": "[1:96,53:100]"},
        ],
        "site": {"longitude": -70.2, "latitude": -29.8, "height": 2450.0},
    },
    "array": {"shape": [96, 100]},
    "night": {"products": {"report": False}},
    "beam": [{}, {"throughput": 0.9}],
    "filters": {"V": {"ip": [0.004, -0.002], "efficiency": 0.98, "zero_angle": 5.0, "sky": 2.0}},
    "atmosphere": {"seeing": 3.0, "seeing_change": 0.03, "clouds": 0.05},
    "guiding": {"jitter": 0.1},
    "target": [
        {"name": "Dew", "ra": 119.0, "dec": -28.0, "role": "zero-polarised", "rate": 200000.0},
        {"name": "Moss", "ra": 120.0, "dec": -30.0, "role": "polarised", "rate": 200000.0, "q": 0.06, "u": 0.01},
        {"name": "Fern", "ra": 118.0, "dec": -25.0, "rate": 50000.0, "p": 0.05, "theta": 30.0},
    ],
    "block": [
        {"kind": "bias", "frames": 3},
        {"kind": "flat", "filters": ["V"], "angles": ANGLES, "frames": 1, "exposure": 3.0, "level": 40000.0},
        {"targets": ["Dew"], "filters": ["V"], "angles": ANGLES, "cycles": 2, "exposure": 10.0},
        {"targets": ["Moss"], "filters": ["V"], "angles": ANGLES, "cycles": 2, "exposure": 10.0},
        {"targets": ["Fern"], "filters": ["V"], "angles": ANGLES, "cycles": 2, "exposure": 20.0},
    ],
}  # fmt: skip


@pytest.fixture
def tiny_tree():
    """The scenario of `tiny_night`, to be changed at will."""
    return copy.deepcopy(TINY)


@pytest.fixture(scope="session")
def tiny_night(tmp_path_factory):
    """A simulated night of two standards and a target, two cycles each; not to be written to."""
    from hwpol.simulate import Scenario, simulate

    return simulate(Scenario.from_dict(copy.deepcopy(TINY)), tmp_path_factory.mktemp("tiny") / "night")


@pytest.fixture(scope="session")
def reduced_night(tiny_night, tmp_path_factory):
    """The night file of a copy of `tiny_night`, and what its reduction answered; not to be written to."""
    from hwpol import Night

    path = copy_night(tiny_night, tmp_path_factory.mktemp("reduced") / "night")
    return path, Night.read(path).reduce()


@pytest.fixture
def night_path(tiny_night, tmp_path):
    """The night file of a copy of `tiny_night` that a test may spoil."""
    return copy_night(tiny_night, tmp_path / "night")


@pytest.fixture
def reduced_path(reduced_night, tmp_path):
    """The night file of a copy of `reduced_night` that a test may spoil; its visits were measured elsewhere."""
    shutil.copytree(reduced_night[0].parent, tmp_path / "reduced")
    return tmp_path / "reduced" / "night.toml"


def copy_night(night, folder):
    """Copy a simulated night without its products; return the night file."""
    shutil.copytree(night.night_path.parent, folder, ignore=shutil.ignore_patterns("reduced"))
    return folder / night.night_path.name


@pytest.fixture
def edit():
    """A function that replaces text of a file, which must hold it."""

    def replace(path, old, new):
        text = path.read_text(encoding="utf-8")
        assert old in text, f"{path} does not hold {old!r}"
        path.write_text(text.replace(old, new), encoding="utf-8")

    return replace
