import copy

import pytest

SMALL = {
    "name": "small",
    "seed": 3,
    "start": "2026-03-14T00:20:00",
    "overhead": 10.0,
    "slew": 60.0,
    "instrument": {
        "name": "Sparrow",
        "detector": {"gain": 2.0, "read_noise": 4.0, "saturation": 60000.0, "pixel_scale": 0.5},
        "keywords": {
            "kind": "KIND", "object": "OBJECT", "filter": "BAND", "exposure": "EXPTIME", "time": "DATE-OBS",
            "wave_plate": "PLATE", "position_angle": "SKYANG", "ra": "RA", "dec": "DEC", "airmass": "AIRMASS",
        },
        "wave_plate": {"retardance": 180.0},
        "beam": [
            {"name": "o", "analyser": 0.0, "section": "[1:80,1:60]"},
            {"name": "e", "analyser": 90.0, "offset": [0.0, 64.0], "section": "[1:80,65:124]"},
        ],
        "site": {"longitude": -70.2, "latitude": -29.8, "height": 2450.0},
    },
    "array": {"shape": [80, 124]},
    "beam": [{}, {"throughput": 0.8}],
    "filters": {"V": {"ip": [0.004, -0.002], "efficiency": 0.98, "zero_angle": 5.0, "sky": 2.0}},
    "target": [
        {"name": "Fern", "ra": 118.0, "dec": -25.0, "rate": 20000.0, "p": 0.05, "theta": 30.0},
        {"name": "Moss", "ra": 120.0, "dec": -30.0, "role": "polarised", "rate": 10000.0, "q": 0.06, "u": 0.01},
        {"name": "Dew", "ra": 119.0, "dec": -28.0, "role": "zero-polarised", "rate": 10000.0},
    ],
    "block": [
        {"kind": "bias", "frames": 2},
        {"targets": ["Fern"], "filters": ["V"], "angles": [0.0, 22.5, 45.0, 67.5], "exposure": 10.0},
    ],
}  # fmt: skip


@pytest.fixture
def small():
    """A scenario tree to be changed at will: two strips, one filter, two bias frames and one cycle."""
    return copy.deepcopy(SMALL)
