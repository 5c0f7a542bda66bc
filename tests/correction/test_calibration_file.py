"""calibration.toml: the same numbers both ways, whole or not at all, and wrong files refused."""

from __future__ import annotations

import tomllib

import numpy as np
import pytest

from hwpol.correction import Calibration
from hwpol.errors import ConfigError


@pytest.fixture
def calibration(bench):
    b = bench(rng=np.random.default_rng(1))
    stars = [b.zero(f'z "{k}"', mjd=61000.0 + k / 7, x=300.0 * k, y=100.0 * k * k) for k in range(5)]
    bad = [b.zero("bad", true=0.02, mjd=61000.1, x=3.0, y=4.0)]
    red = [b.zero("z", filter="Bess R 76"), b.pol("p", 0.05, 20, filter="Bess R 76")]
    return Calibration.fit([*stars, *bad, *red], instrument="bench é", nights=("2026-03-01", "2026-03-02"))


def test_round_trip_is_exact(tmp_path, calibration):
    path = tmp_path / "calibration.toml"
    calibration.write(path)
    back = Calibration.read(path)
    assert (back.instrument, back.nights, back.mjd) == (calibration.instrument, calibration.nights, calibration.mjd)
    assert list(back.filters) == ["V", "Bess R 76"]
    for name, model in calibration.filters.items():
        other = back.filters[name]
        for key in ("values", "covariance", "field_range"):
            assert np.array_equal(getattr(model, key), getattr(other, key)), key
        for key in ("names", "frame", "held", "chi2", "dof", "scatter", "used", "left_out", "flags"):
            assert getattr(model, key) == getattr(other, key), key
        assert np.array_equal(model.mjd, other.mjd, equal_nan=True)
    again = tmp_path / "again.toml"
    back.write(again)
    assert again.read_text() == path.read_text()


def test_content_follows_the_model(tmp_path, calibration):
    path = tmp_path / "calibration.toml"
    calibration.write(path)
    tree = tomllib.loads(path.read_text())
    assert tree["schema"] == 1
    entry = tree["filters"]["Bess R 76"]
    model = calibration.filters["Bess R 76"]
    assert entry["efficiency"] == model.efficiency
    assert entry["zero_angle"] == model.zero_angle
    assert entry["ip_q_err"] == model.error("ip_q")
    assert entry["parameters"] == ["ip_q", "ip_u", "a_re", "a_im"]
    visual = tree["filters"]["V"]
    assert [item["name"] for item in visual["left_out"]] == ["bad"]
    assert visual["held"] == ["a_re", "a_im"]
    assert "efficiency_err" not in visual
    assert visual["flags"] == ["angle_uncalibrated", "efficiency_assumed"]


def test_a_failed_write_leaves_the_old_file(tmp_path, calibration, monkeypatch):
    path = tmp_path / "calibration.toml"
    path.write_text("old")

    def fail(*_):
        raise OSError("disk full")

    monkeypatch.setattr("os.replace", fail)
    with pytest.raises(OSError, match="disk full"):
        calibration.write(path)
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["calibration.toml"]


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("schema = 1", "schema = 7", "schema = 7: expected 1"),
        ('"a_re", "a_im"]', '"a_re"]', r"filters\.V\.parameters: expected names"),
        ("values = [", "values = [1.0, ", r"filters\.V\.values: expected numbers of shape \(4,\)"),
        ('frame = "instrument"', 'frame = "sky"', r"filters\.V\.frame = 'sky'"),
        ("angle_uncalibrated", "nonsense", "'nonsense' is not a flag"),
        ('"ip_q"', '"ip_w"', r"parameters: expected names"),
    ],
)
def test_wrong_files_are_refused(tmp_path, calibration, old, new, said):
    path = tmp_path / "calibration.toml"
    calibration.write(path)
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new))
    with pytest.raises(ConfigError, match=said) as caught:
        Calibration.read(path)
    assert "calibration.toml" in str(caught.value)


@pytest.mark.parametrize("content", [None, "schema = [", "schema = 1\n"])
def test_unreadable_files(tmp_path, content):
    path = tmp_path / "calibration.toml"
    if content is not None:
        path.write_text(content)
    with pytest.raises(ConfigError, match=r"calibration\.toml"):
        Calibration.read(path)
