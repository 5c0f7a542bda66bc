"""`hwpol inject` on screen: the night proved, nothing of it changed, no copy among raw frames."""

import hashlib

import numpy as np
import pytest
from astropy.table import Table
from scipy import stats

#: Chance that pulls of true errors fail the test here.
FALSE_ALARM = 1e-4


def digests(folder):
    return {str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest()
            for p in sorted(folder.rglob("*")) if p.is_file()}  # fmt: skip


def test_truth_comes_back_and_the_night_stays_as_it_was(run, reduced_path):
    home = reduced_path.parent
    before = digests(home)
    done = run("inject", reduced_path, "--jobs", "1", "--stars", "4", "--repeats", "2", "--quiet")
    after = digests(home)
    table = Table.read(home / "reduced" / "inject" / "inject.ecsv")
    fresh = {name for name in after if name not in before and not name.startswith("reduced/.cache/")}
    assert fresh == {"reduced/inject/inject.ecsv"}
    assert {name: after[name] for name in before} == before
    assert set(table["target"]) == {"Fern"}
    assert set(table["repeat"]) == {1, 2}
    assert set(table["frame"]) == {"sky"}
    pulls = np.concatenate([table["pull_q"], table["pull_u"]])
    assert np.sum(pulls**2) < stats.chi2.isf(FALSE_ALARM, len(pulls))
    assert np.allclose(pulls[: len(table)], (table["q"] - table["true_q"]) / table["q_err"])
    assert done.status == 0, done.out
    for words in ("Sound:", "bias of q (%)", "rms pull", "inject.ecsv"):
        assert words in done.out


@pytest.mark.parametrize("place", ["raw", "raw/inject", ".", "raw/night_0001.fits"])
def test_never_among_raw_frames(refused, night_path, place):
    before = digests(night_path.parent)
    said = refused("inject", night_path, "--jobs", "1", "--output", night_path.parent / place)
    assert "--output" in said
    assert "reduced/inject" in said
    assert digests(night_path.parent) == before


def test_unknown_target_names_the_known(refused, reduced_night, tmp_path):
    said = refused("inject", reduced_night[0], "--jobs", "1", "--quiet", "--target", "Nobody", "--output", tmp_path)
    assert "--target Nobody" in said
    assert "Dew, Fern, Moss" in said


@pytest.mark.parametrize("option", ["--stars", "--repeats"])
def test_numbers_that_make_no_sense(refused, night_path, option):
    assert f"{option[2:]} = 0" in refused("inject", night_path, option, "0", "--jobs", "1")


def test_missing_night_file(refused, tmp_path):
    assert f"{tmp_path / 'none.toml'}: no such file" in refused("inject", tmp_path / "none.toml")
