"""A whole night: files, determinism, faults, and counts that agree with the truth."""

import tomllib

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from hwpol.errors import InputError
from hwpol.instrument import Instrument
from hwpol.simulate import Scenario, shipped_scenarios, simulate
from hwpol.simulate.files import toml_text

FALSE_ALARM = 3.29  # sigma: one in a thousand, two-sided


def _digits(night):
    return {path.name: path.read_bytes() for path in night.paths}


def test_the_seed_fixes_every_byte(small, tmp_path):
    small["array"].update(cosmic_rays=500.0, pixel_response=0.01, bias_drift=1.0)
    scenario = Scenario.from_dict(small)
    first = simulate(scenario, tmp_path / "a")
    again = simulate(scenario, tmp_path / "b", jobs=2)
    assert _digits(first) == _digits(again)
    assert (tmp_path / "a" / "truth.ecsv").read_bytes() == (tmp_path / "b" / "truth.ecsv").read_bytes()
    small["seed"] += 1
    other = simulate(Scenario.from_dict(small), tmp_path / "c")
    assert _digits(other).keys() == _digits(first).keys()
    assert all(_digits(other)[name] != data for name, data in _digits(first).items())


def test_a_missing_frame_changes_no_other(small, tmp_path):
    small["array"]["cosmic_rays"] = 500.0
    all_ = _digits(simulate(Scenario.from_dict(small), tmp_path / "a"))
    small["fault"] = [{"kind": "missing", "frames": [4]}]
    fewer = _digits(simulate(Scenario.from_dict(small), tmp_path / "b"))
    assert set(all_) - set(fewer) == {"night_0004.fits"}
    assert all(all_[name] == data for name, data in fewer.items())


def test_faulty_files(small, tmp_path):
    kinds = {"truncated": 1, "empty": 2, "not-fits": 3, "copy": 4, "shape": 5}
    small["fault"] = [{"kind": kind, "frames": [frame]} for kind, frame in kinds.items()]
    night = simulate(Scenario.from_dict(small), tmp_path)
    size = {path.name: path.stat().st_size for path in night.paths}
    assert len(size) == 7
    assert size["night_0001.fits"] < 0.7 * size["night_0006.fits"]
    assert size["night_0002.fits"] == 0
    assert not (tmp_path / "raw" / "night_0003.fits").read_bytes().startswith(b"SIMPLE")
    assert (tmp_path / "raw" / "night_0004.fits").read_bytes() == (
        tmp_path / "raw" / "night_0004_copy.fits"
    ).read_bytes()
    assert fits.getdata(tmp_path / "raw" / "night_0005.fits").shape == (116, 80)
    assert list(night.frames["faults"]) == [*kinds, ""]
    assert not list((tmp_path / "raw").glob(".*"))


def test_forced_hits_lie_in_the_aperture(small, tmp_path):
    small["fault"] = [{"kind": "hit", "frames": [3], "amount": 30000.0, "beam": 1}]
    hit = simulate(Scenario.from_dict(small), tmp_path / "a")
    assert hit.frames["hit_e"][2] == 30000.0
    assert not hit.frames["hit_o"].any()
    small["fault"] = []
    clean = simulate(Scenario.from_dict(small), tmp_path / "b")
    difference = fits.getdata(hit.paths[2]).astype(int) - fits.getdata(clean.paths[2])
    row, column = np.unravel_index(np.argmax(difference), difference.shape)
    assert difference[row, column] == pytest.approx(15000, abs=1)
    assert np.hypot(column - 39.5, row - 93.5) < 4.0 + 1


def test_a_folder_in_use_is_refused(small, tmp_path):
    scenario = Scenario.from_dict(small)
    simulate(scenario, tmp_path)
    with pytest.raises(InputError, match="holds files already"):
        simulate(scenario, tmp_path)


def test_the_files_beside_the_frames(small, tmp_path):
    small["array"]["bad_pixels"] = 4
    small["block"].append({"targets": ["Moss", "Dew"], "filters": ["V"], "angles": [0.0, 22.5], "exposure": 5.0})
    small["night"] = {"photometry": {"radius": 6.0}, "correction": {"field_order": 1}}
    progress = []
    night = simulate(Scenario.from_dict(small), tmp_path, progress=lambda *step: progress.append(step))
    assert progress == [(n, 10) for n in range(1, 11)]
    instrument = Instrument.read(night.instrument_path)
    assert instrument.beams[1].analyser == 90.0
    assert fits.getdata(instrument.detector.bad_pixels).sum() == 4
    tree = tomllib.loads(night.night_path.read_text())
    assert tree["photometry"] == {"radius": 6.0}
    assert tree["correction"] == {
        "catalogues": ["standards/polarised.ecsv", "standards/zero_polarised.ecsv"],
        "field_order": 1,
    }
    assert [target["name"] for target in tree["target"]] == ["Fern", "Moss", "Dew"]
    polarised = Table.read(tmp_path / "standards" / "polarised.ecsv")
    (row,) = polarised
    assert row["p"] == pytest.approx(np.hypot(0.06, 0.01), abs=5 * 0.0003)
    assert row["theta"] == pytest.approx(np.rad2deg(np.arctan2(0.01, 0.06)) / 2, abs=5 * 0.2)
    assert row["reference"]
    truth = Table.read(night.truth_path)
    assert list(truth["role"]) == ["science", "polarised", "zero-polarised"]
    assert len(Table.read(tmp_path / "truth_frames.ecsv")) == 10


def test_truth_is_what_was_put_in(small, tmp_path):
    small["target"][0]["v"] = 0.01
    (row,) = simulate(Scenario.from_dict(small), tmp_path).truth
    assert row["p"] == pytest.approx(0.05, rel=1e-12)
    assert row["theta"] == pytest.approx(30.0, rel=1e-12)
    assert (row["v"], row["rate"], row["efficiency"], row["zero_angle"]) == (0.01, 20000.0, 0.98, 5.0)
    z, a, ip = 0.05 * np.exp(1j * np.pi / 3), 0.98 * np.exp(2j * np.deg2rad(5)), 0.004 - 0.002j
    observed = (ip + a * z) / (1 + (np.conj(ip / a) * z).real)
    assert complex(row["q_inst"], row["u_inst"]) == pytest.approx(observed, abs=1e-12)
    # Both beams, throughputs 1 and 0.8, the polarisation averaging out over a cycle up to the weak diattenuator.
    assert row["flux"] == pytest.approx(18000.0, rel=3e-4)
    assert (row["x"], row["y"]) == (39.5, 29.5)


def test_light_and_instrument_change_with_time(small, tmp_path):
    small["target"][0].update(p_rate=0.01, theta_rate=-20.0)
    small["filters"]["V"] = {"ip_drift": [0.001, 0.0]}
    small["block"][1].update(at=1.0, angles=[0.0])
    small["block"].append({"targets": ["Dew"], "filters": ["V"], "angles": [0.0], "at": 3.0, "exposure": 10.0})
    fern, dew = simulate(Scenario.from_dict(small), tmp_path).truth
    hours = 1.0 + 5 / 3600
    assert fern["p"] == pytest.approx(0.05 + 0.01 * hours, rel=1e-12)
    assert fern["theta"] == pytest.approx(30.0 - 20.0 * hours, rel=1e-12)
    assert dew["q_inst"] == pytest.approx(0.001 * (3.0 + 5 / 3600), rel=1e-9)


def test_catalogues_share_their_errors_or_lie_as_asked(small, tmp_path):
    small["block"][1]["targets"] = ["Moss"]
    small["catalogue_seed"] = 5

    def listed(folder):
        simulate(Scenario.from_dict(small), tmp_path / folder)
        (row,) = Table.read(tmp_path / folder / "standards" / "polarised.ecsv")
        return np.array([row["p"], row["theta"]])

    first = listed("a")
    small["seed"] = 99
    np.testing.assert_array_equal(listed("b"), first)
    small["target"][1]["catalogue_shift"] = [0.003, 0.8]
    np.testing.assert_allclose(listed("c") - first, [0.003, 0.8], rtol=1e-9)


def _counts(night, radius=16):
    """Star minus sky in boxes about the true places, electrons, (frame, beam); the boxes hold all but 1e-4."""
    rows = night.frames[night.frames["kind"] == "science"]
    found = []
    for row in rows:
        electrons = (fits.getdata(night.paths[0].parent / row["file"]).astype(float) - 1000) * 2
        beams = []
        for start in (0, 64):
            x, y = round(39.5 + row["shift_x"]), round(29.5 + row["shift_y"]) + start
            star = electrons[y - radius : y + radius + 1, x - radius : x + radius + 1]
            sky = electrons[start + 2 : start + 58, 60:78].mean()
            beams.append(star.sum() - star.size * sky)
        found.append(beams)
    return np.array(found)


def test_counts_of_frames_give_the_truth_back(small, tmp_path):
    """The double ratio of box counts gives q, u as observed, within 3.29 sigma of photons and read noise."""
    small["atmosphere"] = {"seeing": 3.0, "beta": 4.5, "clouds": 0.2, "seeing_change": 0.1}
    small["optics"] = {"wobble": 1.0}
    small["block"][1].update(cycles=4, exposure=20.0)
    night = simulate(Scenario.from_dict(small), tmp_path)
    (row,) = night.truth
    counts = _counts(night).reshape(4, 4, 2).sum(axis=0)
    ratio = counts[:, 0] / counts[:, 1]
    boxes = 33 * 33 * 4 * (16 + 2.0 * 20 / 2) * (1 + 33 * 33 / (56 * 18))
    sigma = 0.25 * np.sqrt(sum((count + boxes) / count**2 for count in counts[[0, 2]].ravel()))
    for name, one, other in (("q_inst", 0, 2), ("u_inst", 1, 3)):
        r = np.sqrt(ratio[one] / ratio[other])
        assert abs((r - 1) / (r + 1) - row[name]) < FALSE_ALARM * sigma
    assert sigma < 1e-3  # far below ip and p: the comparison means something


def test_one_beam_without_a_plate(small, tmp_path):
    """Light through the analyser alone: I (1 + q)/2 of what is observed."""
    small["instrument"].pop("wave_plate")
    small["instrument"]["keywords"].pop("wave_plate")
    small["instrument"]["beam"] = small["instrument"]["beam"][:1]
    small["filters"]["V"] = {}
    small["beam"] = []
    small["block"][1]["angles"] = []
    (row,) = simulate(Scenario.from_dict(small), tmp_path).truth
    assert row["flux"] == pytest.approx(20000.0 / 2 * (1 + 0.05 * np.cos(np.pi / 3)), rel=1e-12)


def test_two_hdus(small, tmp_path):
    for number, beam in enumerate(small["instrument"]["beam"]):
        beam.update(extension=f"ARM{number}", section="[1:80,1:60]", offset=[0.0, 0.0])
    night = simulate(Scenario.from_dict(small), tmp_path)
    with fits.open(night.paths[-1]) as hdus:
        assert [hdu.name for hdu in hdus] == ["PRIMARY", "ARM0", "ARM1"]
        assert hdus[0].header["OBJECT"] == "Fern"
        assert all(hdus[n].data[30, 40] > 1200 for n in (1, 2))


def test_toml_text_is_read_back():
    tree = {
        "a": 1, "b": 2.5, "c": True, "d": 'x "y" \\', "e": [1.0, [2, 3]], "empty": [],
        "t": {"k k": "v", "inner": {"z": -1e-7}, "list": [{"n": 1, "deep": {"m": 2}}, {"n": 2}]},
    }  # fmt: skip
    assert tomllib.loads(toml_text(tree)) == tree


@pytest.mark.slow
@pytest.mark.parametrize("name", sorted(shipped_scenarios()))
def test_shipped_scenarios_run(name, tmp_path):
    night = simulate(Scenario.read(shipped_scenarios()[name]), tmp_path)
    sound = {row["file"] for row in night.frames if not row["faults"]}
    assert len(sound) > 30
    for path in night.paths:
        if path.name not in sound:
            continue
        with fits.open(path) as hdus:
            assert max(hdu.data.max() for hdu in hdus if hdu.data is not None) < 60000
    assert np.isfinite(night.truth["p"]).all()
