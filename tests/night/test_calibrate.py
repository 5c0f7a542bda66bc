"""Words for standards that contradict each other."""

import numpy as np
import pytest

from hwpol import Night
from hwpol.correction import Calibration, Standard
from hwpol.night.calibrate import _sense_hint
from hwpol.stokes import Stokes, observed_from_instrument


def standards(sense, rng, *, scramble=False):
    """Four standards as an instrument of the other plate sense would show them where `sense` is -1."""
    listed = []
    for name, p, theta in (
        ("A", 0.0, np.nan),
        ("B", 0.0, np.nan),
        ("C", 0.05, 30.0),
        ("D", 0.07, 110.0),
        ("E", 0.06, 75.0),
    ):
        z = 0j if p == 0 else p * np.exp(2j * np.radians(theta))
        observed = observed_from_instrument(z, 0.004 - 0.002j, 0.97 * np.exp(0.2j))
        observed = np.conj(observed) if sense < 0 else observed
        if scramble and p:
            observed = observed * np.exp(1j * rng.uniform(1, 5))
        noise = 2e-4
        value = observed + noise * (rng.normal() + 1j * rng.normal())
        stokes = Stokes(q=[value.real], u=[value.imag], covariance=np.eye(2) * noise**2, frame="instrument", filter="V")
        listed.append(Standard(stokes, p, theta, 1e-4, 0.1, name))
    return listed


@pytest.mark.parametrize("sense", [1, -1])
def test_a_wrong_sense_is_named(sense):
    listed = standards(sense, np.random.default_rng(3))
    hint = _sense_hint(Calibration.fit(listed), listed, "instrument")
    assert ("check wave_plate.sense and orientation.sense" in hint) == (sense < 0)
    assert (hint == "") == (sense > 0)


def test_other_contradictions_are_told_without_blaming_the_sense():
    listed = standards(1, np.random.default_rng(5), scramble=True)
    hint = _sense_hint(Calibration.fit(listed), listed, "instrument")
    assert "contradict each other" in hint
    assert "sense" not in hint


def test_only_keeps_what_an_earlier_run_finished(reduced_path, edit):
    before = Night.read(reduced_path).reduce()
    after = Night.read(reduced_path).reduce(only=["Dew"])
    assert list(after.results["target"]) == list(before.results["target"])
    assert list(after.results["q"]) == list(before.results["q"])


def test_a_target_that_no_frame_bears_is_named(night_path):
    text = night_path.read_text(encoding="utf-8")
    night_path.write_text(text + '\n[[target]]\nname = "Ferm"\n', encoding="utf-8")
    notes = Night.read(night_path).reduce().notes
    assert any("'Ferm' matches the object of no science frame; did you mean 'Fern'?" in note for note in notes)
