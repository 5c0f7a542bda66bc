"""What the keys of the night file change, on one night whose visits are measured once."""

import numpy as np
import pytest

from hwpol.flags import Flag

MORE = "[correction]"


def row_of(table, target):
    (row,) = table[table["target"] == target]
    return row


def test_calibration_off_leaves_the_instrument_frame(variant):
    answer = variant((MORE, '[correction]\ncalibration = "off"'))
    assert answer.calibration is None
    assert set(answer.results["frame"]) == {"instrument"}
    assert np.all(answer.results["flags"] & int(Flag.UNCALIBRATED))
    for name in "qu":
        np.testing.assert_array_equal(answer.results[name], answer.results[f"{name}_inst"])
    assert np.all(np.isnan(answer.results["q_cal_err"]))
    assert any("calibration off" in note for note in answer.notes)


def test_calibration_from_a_file_gives_what_the_fit_gave(variant, reduced_night):
    _, fitted = reduced_night
    answer = variant((MORE, '[correction]\ncalibration = "reduced/calibration.toml"'))
    for name in ("q", "u", "q_cal_err", "theta"):
        # The file holds twelve digits or more.
        np.testing.assert_allclose(
            row_of(answer.results, "Fern")[name], row_of(fitted.results, "Fern")[name], rtol=1e-9
        )
    assert row_of(answer.results, "Fern")["calibration"] == "calibration.toml"


def test_without_standards_says_what_is_missing(variant):
    science = [(f'name = "{name}"', f'name = "{name}"\nrole = "science"') for name in ("Dew", "Moss")]
    answer = variant(*science)
    assert answer.calibration is None
    assert len(answer.standards) == 0
    assert np.all(answer.results["flags"] & int(Flag.UNCALIBRATED))
    assert any("observe at least one zero-polarised and one polarised standard" in note for note in answer.notes)


@pytest.mark.parametrize(
    ("lost", "flag"),
    [("Dew", Flag.IP_UNCALIBRATED), ("Moss", Flag.ANGLE_UNCALIBRATED)],
    ids=["no zero", "no polarised"],
)
def test_half_of_the_standards_gives_half_of_the_calibration(variant, lost, flag):
    answer = variant((f'name = "{lost}"', f'name = "{lost}"\nrole = "science"'))
    assert row_of(answer.results, "Fern")["flags"] & int(flag)
    assert list(answer.standards["name"]) == [{"Dew": "Moss", "Moss": "Dew"}[lost]]
    assert list(answer.results["target"]) == ["Dew", "Moss", "Fern"]


def test_role_that_no_catalogue_has_is_said(variant):
    answer = variant(('name = "Fern"', 'name = "Fern"\nrole = "polarised"'))
    assert row_of(answer.results, "Fern")["role"] == "polarised"
    assert any("Fern: role 'polarised', but no catalogue has it" in note for note in answer.notes)
    assert "Fern" not in answer.standards["name"]


def test_catalogue_name_of_a_target(variant, reduced_night):
    """A standard whose header calls it otherwise is found by the name the night file gives."""
    answer = variant(('name = "Fern"', 'name = "Fern"\ncatalogue = "moss"'))
    assert row_of(answer.results, "Fern")["role"] == "polarised"
    assert list(answer.standards["name"]) == ["Dew", "Moss", "Fern"]


@pytest.mark.parametrize("method", ["double-difference", "double-ratio"])
def test_methods_agree_within_their_noise(variant, reduced_night, method):
    answer = variant((MORE, f'[demodulation]\nmethod = "{method}"\n[correction]'))
    fern, other = row_of(reduced_night[1].results, "Fern"), row_of(answer.results, "Fern")
    # The same counts: what differs is the weighting, of a fifth of the error here (bright star, equal exposures), and
    # for the difference the bias of unequal beams, p (1 - g)^2 / 4 < 2e-4 for g = 0.9 (difference method, first order).
    assert abs(fern["q"] - other["q"]) < 0.5 * fern["q_err"]
    assert abs(fern["u"] - other["u"]) < 0.5 * fern["u_err"]


@pytest.mark.parametrize("gain", ["cycle", "night"])
def test_other_spans_of_the_gain_agree(variant, reduced_night, gain):
    answer = variant((MORE, f'[demodulation]\ngain = "{gain}"\n[correction]'))
    fern, other = row_of(reduced_night[1].results, "Fern"), row_of(answer.results, "Fern")
    assert abs(fern["q"] - other["q"]) < 0.5 * fern["q_err"]
    assert abs(fern["u"] - other["u"]) < 0.5 * fern["u_err"]
    assert fern["q"] != other["q"]


def test_gain_of_the_night_is_the_mean_of_its_visits(variant, reduced_night):
    answer = variant((MORE, '[demodulation]\ngain = "night"\n[correction]'))
    _, own = reduced_night
    shared = {visit.fluxes.throughput[1] for visit in answer.visits}
    assert len(shared) == 1
    gains = [solution.gain[0, 1] for solution in own.solutions]
    assert min(gains) < shared.pop() < max(gains)
    # The simulated beam passes 0.9 of the first; flats take that out but for their own polarisation and noise.
    assert all(np.isfinite(visit.fluxes.throughput_err[1]) for visit in answer.visits)


def test_estimator_and_level(variant, reduced_night):
    answer = variant((MORE, '[statistics]\nestimator = "mode"\nlevel = 0.95\n[correction]'))
    fern, other = row_of(reduced_night[1].results, "Fern"), row_of(answer.results, "Fern")
    assert other["p_high"] - other["p_low"] > 1.8 * (fern["p_high"] - fern["p_low"])
    assert other["p_debiased"] != fern["p_debiased"]
    assert other["q"] == fern["q"]
    assert answer.results.meta["estimator"] == "mode"


def test_fixed_radius_is_the_radius(variant, judge, tiny_night):
    answer = variant((MORE, "[photometry]\nradius = 5.5\n[correction]"))
    assert set(answer.results["radius"]) == {5.5}
    assert judge.compare(answer.results, tiny_night.truth).worst() < 5


def test_radius_in_fwhm(variant, tiny_tree):
    answer = variant((MORE, '[photometry]\nradius = "2.0 fwhm"\n[correction]'))
    # Medians over frames and over frames and beams: they differ by no more than the scenario lets the seeing change.
    change = tiny_tree["atmosphere"]["seeing_change"]
    np.testing.assert_allclose(answer.results["radius"], 2 * np.asarray(answer.results["fwhm"]), rtol=change)
