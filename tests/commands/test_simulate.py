"""`hwpol simulate` and `hwpol demo`: only new folders; names, files and mistakes."""

import pytest

from hwpol.simulate import shipped_scenarios

SCENARIO = """
name = "one frame"
seed = 1
start = "2026-03-14T00:20:00"
array = { shape = [40, 40] }
[instrument]
name = "Wren"
detector = { gain = 2.0, read_noise = 4.0, saturation = 60000.0, pixel_scale = 0.5 }
keywords = { kind = "KIND", object = "OBJECT", filter = "BAND", exposure = "EXPTIME", time = "DATE-OBS", \
wave_plate = "PLATE", ra = "RA", dec = "DEC" }
[filters.V]
[[instrument.beam]]
name = "o"
analyser = 0.0
[[block]]
kind = "bias"
frames = 2
"""


@pytest.fixture
def scenario(tmp_path):
    path = tmp_path / "one.toml"
    path.write_text(SCENARIO, encoding="utf-8")
    return path


def test_makes_a_night(run, scenario, tmp_path):
    done = run("simulate", scenario, tmp_path / "new", "--jobs", "1")
    assert done.status == 0
    assert "2 frames" in done.out
    assert f"hwpol reduce {tmp_path / 'new' / 'night.toml'}" in done.out
    assert len(list((tmp_path / "new" / "raw").glob("*.fits"))) == 2


def test_quiet(run, scenario, tmp_path):
    assert run("simulate", scenario, tmp_path / "new", "--jobs", "1", "--quiet").err == ""


@pytest.mark.parametrize("words", [["simulate", "demo"], ["demo"]])
def test_folder_that_is_not_empty(refused, tmp_path, words):
    (tmp_path / "something").touch()
    said = refused(*words, tmp_path, "--quiet")
    assert f"{tmp_path}: exists and is not empty" in said
    assert sorted(path.name for path in tmp_path.iterdir()) == ["something"]


def test_unknown_scenario_names_those_shipped(refused, tmp_path):
    said = refused("simulate", "nonsuch", tmp_path / "new")
    assert all(name in said for name in shipped_scenarios())


def test_unknown_key(refused, scenario, tmp_path, edit):
    edit(scenario, "seed = 1", "sead = 1")
    said = refused("simulate", scenario, tmp_path / "new")
    assert "sead" in said
    assert "seed" in said
    assert not (tmp_path / "new").exists()


def test_folder_that_cannot_be_made(refused, scenario):
    assert str(scenario) in refused("simulate", scenario, scenario / "below")
