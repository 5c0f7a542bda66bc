"""A whole injection: the same again from the same seed, kept frames that reduce alike, nothing left of a failure."""

import numpy as np
import pytest
from astropy.io import fits

from hwpol import Night
from hwpol.errors import InputError
from hwpol.inject import inject, run


@pytest.fixture(scope="module")
def kept(reduced_night, tmp_path_factory):
    """An injection of two stars whose frames were kept."""
    folder = tmp_path_factory.mktemp("kept") / "proof"
    return inject(Night.read(reduced_night[0]), stars=2, seed=5, folder=folder, keep=True), folder


def test_same_seed_same_stars_other_seed_other_stars(kept, reduced_night, tmp_path):
    night = Night.read(reduced_night[0])
    again = inject(night, stars=2, seed=5, folder=tmp_path / "again").table
    other = inject(night, stars=2, seed=6, folder=tmp_path / "other").table
    for name in ("x", "true_q", "true_flux", "q", "q_err"):
        assert np.array_equal(again[name], kept[0].table[name])
        assert not np.array_equal(other[name], kept[0].table[name])
    assert [p.name for p in (tmp_path / "again").iterdir()] == ["inject.ecsv"]


def test_kept_frames_reduce_to_the_same(kept):
    (folder,) = kept[0].kept
    assert folder == kept[1] / "visit_003_1"
    assert sorted(p.name for p in kept[1].iterdir()) == ["inject.ecsv", "visit_003_1"]
    results = Night.read(folder / "night.toml").reduce(write=False).results
    stars = {str(row["target"]): row for row in results}
    for row in kept[0].table:
        found = stars[f"artificial {row['star']}"]
        assert (found["q"], found["u"], found["q_err"]) == (row["q"], row["u"], row["q_err"])


def test_kept_frames_differ_by_the_light_put_in(kept, reduced_night, tiny_tree):
    copies = sorted((kept[0].kept[0] / "raw").iterdir())
    frames = reduced_night[1].frames
    names = [str(f) for f in frames["file"][frames["visit"] == 3]]
    assert len(copies) == len(names) == 8
    gain, exposure = 2.0, 20.0
    added = []
    for copy, name in zip(copies, names, strict=True):
        original = reduced_night[0].parent / name
        difference = fits.getdata(copy).astype(float) - fits.getdata(original)
        assert difference.min() >= 0
        added.append(gain * difference.sum() / exposure)
        header = fits.getheader(copy)
        assert "not an observation" in str(header["HISTORY"])
        header.remove("HISTORY", remove_all=True)
        assert dict(header.items()) == dict(fits.getheader(original).items())
    light = float(np.sum(kept[0].table["true_flux"]))
    # Clouds dim a frame by this much at the most; flat and photon noise of the sum are well below it.
    clouds = tiny_tree["atmosphere"]["clouds"]
    np.testing.assert_allclose(added, light, rtol=clouds)
    assert np.mean(added) == pytest.approx(light, rel=0.05)


def test_kept_frames_are_not_written_over(kept, reduced_night):
    with pytest.raises(InputError, match="visit_003_1: exists already"):
        inject(Night.read(reduced_night[0]), stars=2, folder=kept[1], keep=True)


def test_nothing_is_left_of_a_failure(reduced_night, tmp_path, monkeypatch):
    def fail(*_, **__):
        raise InputError("the disc is full")

    monkeypatch.setattr(run, "copy_with", fail)
    with pytest.raises(InputError, match="Fern in V: the disc is full"):
        inject(Night.read(reduced_night[0]), stars=2, folder=tmp_path / "proof", keep=True)
    assert list((tmp_path / "proof").iterdir()) == []


def test_a_standard_can_be_proved_and_room_is_told(reduced_night, tmp_path):
    done = inject(Night.read(reduced_night[0]), stars=50, target="moss", folder=tmp_path)
    assert set(done.table["target"]) == {"Moss"}
    assert 0 < len(done.table) < 50
    assert f"room for {len(done.table)} of 50" in done.notes[0]
