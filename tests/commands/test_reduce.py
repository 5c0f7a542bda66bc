"""`hwpol reduce` on screen; what it writes is tested with the night."""

import pytest
from astropy.table import Table


def test_prints_results_and_calibration(run, reduced_path):
    done = run("reduce", reduced_path, "--jobs", "1")
    assert done.status == 0
    for word in ("Dew", "Moss", "Fern", "Calibration:", "efficiency", "results.ecsv"):
        assert word in done.out
    assert [line.split(":")[0] for line in done.err.splitlines()] == [
        "visit 0/3",
        "visit 1/3",
        "visit 2/3",
        "visit 3/3",
    ]


def test_quiet_prints_results_alone(run, reduced_path):
    done = run("reduce", reduced_path, "--jobs", "1", "--quiet")
    assert done.status == 0
    assert done.err == ""
    assert "Fern" in done.out
    assert "To be kept in mind" not in done.out


def test_a_file_set_aside_makes_status_1_and_is_named(run, reduced_path):
    (reduced_path.parent / "raw" / "night_0000.fits").write_text("this is no image\n")
    done = run("reduce", reduced_path, "--jobs", "1")
    assert done.status == 1
    assert "1 of 32 files not used" in done.out
    assert "raw/night_0000.fits: unread" in done.out


def test_only_one_target_and_the_standards_it_needs(run, night_path, edit):
    edit(night_path, 'name = "Dew"', 'name = "Dew"\nrole = "science"')
    done = run("reduce", night_path, "--only", "fern", "--jobs", "1")
    assert done.status == 0
    results = Table.read(night_path.parent / "reduced" / "results.ecsv")
    assert list(results["target"]) == ["Moss", "Fern"]


def test_only_a_name_that_is_not_there(refused, night_path):
    said = refused("reduce", night_path, "--only", "Nobody 7")
    assert "--only Nobody 7" in said
    assert "Dew, Fern, Moss" in said


def test_nothing_to_reduce(refused, night_path, edit):
    edit(night_path, "raw/*.fits", "raw/night_000[1-3].fits")
    assert "nothing to reduce" in refused("reduce", night_path, "--jobs", "1")


def test_output_folder_that_cannot_be_made(refused, night_path, edit):
    edit(night_path, 'output = "reduced"', 'output = "instrument.toml/reduced"')
    said = refused("reduce", night_path, "--jobs", "1", "--quiet")
    assert "instrument.toml/reduced" in said
    assert "folder" in said


def test_output_that_is_a_file(refused, night_path, edit):
    edit(night_path, 'output = "reduced"', 'output = "instrument.toml"')
    assert "output" in refused("reduce", night_path, "--jobs", "1")


def test_no_scheduler_at_the_address(refused, night_path):
    pytest.importorskip("distributed")
    assert "--dask = 'nowhere'" in refused("reduce", night_path, "--dask", "nowhere")
