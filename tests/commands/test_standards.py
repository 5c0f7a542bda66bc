"""`hwpol standards`: the check against catalogue values, and the listing."""

import shutil

import pytest
from astropy.table import Table

from hwpol import Calibration


def test_one_night(run, reduced_path):
    output = reduced_path.parent / "reduced"
    (output / "calibration.toml").unlink()
    done = run("standards", reduced_path, "--jobs", "1")
    assert done.status == 0
    assert "Moss" in done.out
    assert "Fern" not in done.out
    assert list(Table.read(output / "standards.ecsv")["name"]) == ["Dew", "Moss"]
    model = Calibration.read(output / "calibration.toml").filters["V"]
    # The simulated truth within four stated errors, which are 0.03 percent of the catalogue and 0.05 of counts on p.
    assert 0.005 < model.efficiency_err < 0.02
    assert model.efficiency == pytest.approx(0.98, abs=4 * model.efficiency_err)


def test_two_nights_have_visits_numbered_on(run, reduced_path, tmp_path):
    shutil.copytree(reduced_path.parent, tmp_path / "second")
    done = run(
        "standards", reduced_path, tmp_path / "second" / "night.toml", "--output", tmp_path / "both", "--jobs", "1"
    )
    assert done.status == 0
    table = Table.read(tmp_path / "both" / "standards.ecsv")
    assert list(zip(table["name"], table["visit"], strict=True)) == [("Dew", 1), ("Moss", 2), ("Dew", 4), ("Moss", 5)]


def test_nights_of_two_instruments(refused, reduced_path, tmp_path, edit):
    shutil.copytree(reduced_path.parent, tmp_path / "second")
    edit(tmp_path / "second" / "instrument.toml", "Wren", "Robin")
    assert "Robin, Wren" in refused("standards", reduced_path, tmp_path / "second" / "night.toml")


def test_night_without_a_standard(refused, night_path, edit):
    for name in ("Dew", "Moss"):
        edit(night_path, f'name = "{name}"', f'name = "{name}"\nrole = "science"')
    assert "no target of these nights is a standard star" in refused("standards", night_path, "--jobs", "1")


def test_no_night(refused):
    assert "give one or more night files" in refused("standards")


def test_listing_by_band(run):
    done = run("standards", "--list", "--band", "V")
    assert done.status == 0
    lines = done.out.splitlines()
    assert len(lines) > 10
    assert [line for line in lines[2:] if "V" not in line.split()] == []


def test_listing_of_a_band_that_no_table_has(refused):
    assert "nonsense" in refused("standards", "--list", "--band", "nonsense")


def test_up_needs_a_site(refused):
    assert "--up needs a night file" in refused("standards", "--up", "2026-03-14")


def test_up_on_a_night(run, tiny_night):
    done = run("standards", tiny_night.night_path, "--up", "2026-03-14", "--band", "V")
    assert done.status == 0
    assert "Moss" in done.out
