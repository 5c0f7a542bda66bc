"""The examples run as they stand and say what they promise."""

import runpy
from pathlib import Path

import pytest

EXAMPLES = Path(__file__).resolve().parents[2] / "examples"


def run(name, folder, capsys):
    runpy.run_path(str(EXAMPLES / f"{name}.py"))["main"](str(folder))
    return capsys.readouterr().out


@pytest.mark.slow
def test_night_by_config(tmp_path, capsys):
    text = run("night_by_config", tmp_path / "out", capsys)
    assert "percent (95 percent); theta is not determined" in text
    assert "theta = " in text


@pytest.mark.slow
def test_light_curve(tmp_path, capsys):
    text = run("light_curve", tmp_path / "out", capsys)
    assert (tmp_path / "out" / "light_curve.png").stat().st_size > 5000
    turned = float(text.split("theta turned by ")[1].split(" deg")[0])
    minutes = float(text.split(" deg in ")[1].split(" min")[0])
    # The scenario turns the angle by 14 deg an hour; each end is measured to about 1 deg.
    assert turned == pytest.approx(14 * minutes / 60, abs=4)
    assert float(text.split("chance ")[1].split()[0]) < 1e-6


@pytest.mark.slow
def test_standards_two_nights(tmp_path, capsys):
    text = run("standards_two_nights", tmp_path / "out", capsys)
    assert "written and read again: ['g', 'r']" in text


@pytest.mark.slow
def test_field_of_stars(tmp_path, capsys):
    text = run("field_of_stars", tmp_path / "out", capsys)
    assert (tmp_path / "out" / "field.png").stat().st_size > 5000
    alone, together = (float(text.split(word)[1].split()[0].rstrip(",")) for word in ("stars alone ", "they share "))
    assert together > alone


def test_every_example_is_listed():
    listed = (EXAMPLES / "README.md").read_text(encoding="utf-8")
    for script in EXAMPLES.glob("*.py"):
        assert f"`{script.name}`" in listed
