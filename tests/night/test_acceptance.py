"""Whole nights against the truth they were made from."""

import numpy as np
import pytest

from hwpol import Night
from hwpol.flags import Flag

#: Errors within which every target must lie (with errors that are right, one value in 1.7 million does not).
AGREE = 5.0

EIGHT = [22.5 * k for k in range(8)]
SIXTEEN = [22.5 * k for k in range(16)]


def set_angles(tree, angles, cycles):
    for block in tree["block"]:
        if "targets" in block:
            block["angles"], block["cycles"] = angles, cycles


def eight(tree):
    set_angles(tree, EIGHT, 1)


def sixteen_unsorted(tree):
    set_angles(tree, SIXTEEN[::2] + SIXTEEN[1::2], 1)


def uneven_angles(tree):
    set_angles(tree, [3.0, 20.0, 41.0, 77.0, 118.0, 160.0], 2)


def reversed_encoder(tree):
    tree["instrument"]["wave_plate"] = {"retardance": 180.0, "sense": -1, "scale": 0.5, "zero": 33.0}


def imperfect_plate(tree):
    tree["instrument"]["wave_plate"] = {"retardance": 174.0}


def mirrored(tree):
    tree["instrument"]["orientation"] = {"sense": -1, "position_angle": 28.0}
    del tree["instrument"]["keywords"]["position_angle"]


def cloudy(tree):
    tree["atmosphere"] |= {"clouds": 0.1, "cloud_time": 1.0}


def one_strip(tree):
    """Beams that share the detector, 20 pixels apart."""
    tree["array"]["shape"] = [96, 96]
    tree["instrument"]["beam"] = [{"name": "o", "analyser": 0.0}, {"name": "e", "analyser": 90.0, "offset": [20, 3]}]


def weak_beam(tree):
    tree["beam"] = [{}, {"throughput": 0.6, "shift": [2.0, -1.5]}]


def all_at_once(tree):
    for change in (eight, reversed_encoder, mirrored, cloudy):
        change(tree)


QUICK = [all_at_once, one_strip]
MORE = [eight, reversed_encoder, mirrored, sixteen_unsorted, uneven_angles, imperfect_plate, cloudy, weak_beam]


def check(judge, answer, truth):
    """Every value within five errors, the calibration as near as asked; return the comparison."""
    compared = judge.compare(answer.results, truth).known()
    judge.check_calibration(answer.calibration, truth)
    worst = compared.worst()
    assert worst < AGREE, f"{worst:.1f} errors from the truth"
    return compared


def test_tiny_night(judge, reduced_night, tiny_night):
    _, answer = reduced_night
    compared = check(judge, answer, tiny_night.truth)
    assert len(compared.results) == 3
    assert answer.clean


@pytest.mark.parametrize(
    "change", [*QUICK, *(pytest.param(one, marks=pytest.mark.slow) for one in MORE)], ids=lambda one: one.__name__
)
def test_kinds_of_instruments(judge, night_of, tiny_tree, change):
    change(tiny_tree)
    _, answer, truth = night_of(tiny_tree)
    assert len(check(judge, answer, truth).results) == 3
    assert set(answer.results["frame"]) == {"sky"}


def test_wrong_convention_is_seen(judge, night_path, tiny_night, edit):
    """The check of these tests can fail: a plate that turns the other way than the instrument file says."""
    edit(night_path.parent / "instrument.toml", "[wave_plate]", "[wave_plate]\nsense = -1")
    answer = Night.read(night_path).reduce(write=False)
    assert judge.compare(answer.results, tiny_night.truth).science().worst() > AGREE


@pytest.mark.slow
def test_counted_positions(judge, night_of, shipped):
    """Sixteen positions that the header counts, two filter wheels, overscan, polarised sky."""
    _, answer, truth = night_of(shipped("strips16"))
    assert len(check(judge, answer, truth).results) == 3
    # The scenario's plate polarises: its half-turn partners differ, and the null must tell.
    assert np.all(np.asarray(answer.results["flags"]) & int(Flag.NULL_FAILED))


@pytest.mark.slow
@pytest.mark.parametrize("name", ["mirrored", "nasmyth", "four_beams", "rough"])
def test_shipped_night(judge, night_of, shipped, name):
    _, answer, truth = night_of(shipped(name))
    compared = check(judge, answer, truth)
    assert len(compared.results) == len(truth[truth["source"] == 0])


@pytest.mark.slow
def test_demo(judge, night_of, shipped):
    _, answer, truth = night_of(shipped("demo"))
    compared = check(judge, answer, truth)
    assert len(compared.results) == 14
    judge.check_rms([compared.science()])
    assert answer.clean


@pytest.mark.slow
def test_field_of_dozens_of_stars(judge, night_of, shipped):
    tree = shipped("field")
    # Standards in the middle of the field alone cannot tell how the instrumental polarisation runs over it.
    del tree["filters"]["V"]["ip_field"]
    tree.setdefault("night", {})["photometry"] = {"sources": "field"}
    _, answer, truth = night_of(tree)
    compared = check(judge, answer, truth)
    stars = compared.science()
    assert len(stars.results) > 24
    judge.check_rms([stars])
