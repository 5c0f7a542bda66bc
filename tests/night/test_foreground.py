"""Foreground taken off a night's science targets, and instrumental polarisation over the field, end to end."""

import numpy as np
import pytest
from astropy.table import Table

from hwpol import Night
from hwpol.simulate import Scenario, simulate

VALUE = '[correction.foreground]\nmethod = "value"\nq = 0.012\nu = -0.005\nq_err = 0.0004\nu_err = 0.0003\n'
#: float64 rounding of a difference of fractions.
ROUNDING = 1e-12


def reduced(path, text):
    content = path.read_text(encoding="utf-8")
    path.write_text(content.replace("[[target]]", text + "\n[[target]]", 1), encoding="utf-8")
    return Night.read(path).reduce()


def by_name(results):
    return {str(row["target"]): row for row in results}


def test_a_given_vector_is_taken_off_science_alone(night_path, reduced_night):
    before, after = by_name(reduced_night[1].results), by_name(reduced(night_path, VALUE).results)
    assert after["Fern"]["q"] == pytest.approx(before["Fern"]["q"] - 0.012, abs=ROUNDING)
    assert after["Fern"]["u"] == pytest.approx(before["Fern"]["u"] + 0.005, abs=ROUNDING)
    assert after["Fern"]["q_err"] == pytest.approx(np.hypot(before["Fern"]["q_err"], 0.0004), rel=1e-9)
    for standard in ("Dew", "Moss"):
        assert after[standard]["q"] == before[standard]["q"]


def test_it_is_carried_to_the_filter_and_held_against_the_reddening(night_path, reduced_night):
    answer = reduced(night_path, VALUE + "wavelength = 0.80\nreddening = 0.1\n")
    before, after = by_name(reduced_night[1].results), by_name(answer.results)
    taken = complex(before["Fern"]["q"] - after["Fern"]["q"], before["Fern"]["u"] - after["Fern"]["u"])
    given = complex(0.012, -0.005)
    # Serkowski's law with lambda_max = 0.545 micron: more at V (0.55) than at 0.80 micron, at the same angle.
    assert 1.05 < abs(taken) / abs(given) < 1.4
    assert np.angle(taken / given) == pytest.approx(0, abs=1e-6)
    assert any("9 percent" in note for note in answer.notes)


def test_too_few_field_stars_are_told(night_path):
    answer = reduced(night_path, '[correction.foreground]\nmethod = "field"\n')
    assert any("no foreground was removed: 0 field stars" in note for note in answer.notes)


@pytest.mark.slow
def test_ip_over_the_field_is_found_by_stars_all_over_it(tiny_tree, tmp_path):
    """Fifteen zero stars over the field, a pattern of 1 percent at the edge: under 0.05 percent is left (rms)."""
    tree = tiny_tree
    tree["array"] = {"shape": [220, 200]}
    tree["instrument"]["beam"] = [
        {"name": "o", "analyser": 0.0, "section": "[1:220,1:98]"},
        {"name": "e", "analyser": 90.0, "offset": [0.0, 102.0], "section": "[1:220,103:200]"},
    ]
    tree["filters"]["V"]["ip_field"] = {"xx": [0.008, -0.004], "x": [0.002, 0.003]}
    places = [[x, y] for x in (30.0, 70.0, 110.0, 150.0, 190.0) for y in (30.0, 50.0, 68.0)]
    zero = [dict(tree["target"][0], name=f"Dew {n}", xy=xy, rate=150000.0, ra=110.0 + n) for n, xy in enumerate(places)]
    moss, fern = (dict(target, xy=xy) for target, xy in zip(tree["target"][1:], ([110, 50], [185, 60]), strict=True))
    tree["target"] = [*zero, moss, dict(fern, rate=100000.0)]
    names = [target["name"] for target in tree["target"]]
    tree["block"] = [*tree["block"][:2], dict(tree["block"][2], targets=names, cycles=4)]
    night = simulate(Scenario.from_dict(tree), tmp_path / "field")
    answer = _with_order(night)
    truth = {str(row["target"]): row for row in Table.read(night.truth_path) if row["source"] == 0}
    left = []
    for row in answer.results:
        true = truth[str(row["target"])]
        if row["target"] == "Fern":
            total = np.hypot(row["q_err"], row["q_cal_err"])
            assert abs(row["q"] - true["q"]) < 5 * total
        elif row["role"] == "zero-polarised":
            left += [row["q"] - true["q"], row["u"] - true["u"]]
    model = answer.calibration.filters["V"]
    assert any(name.count("_") == 2 for name in model.names)
    assert np.sqrt(np.mean(np.square(left))) < 5e-4


def _with_order(night):
    text = night.night_path.read_text(encoding="utf-8")
    assert "[correction]" in text
    night.night_path.write_text(text.replace("[correction]", '[correction]\nfield_order = "best"', 1), encoding="utf-8")
    return Night.read(night.night_path).reduce()
