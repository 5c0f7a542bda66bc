"""Runs: the same bytes each time, taken up where they stopped, products whole or not at all."""

import json
import os
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from multiprocessing import get_context
from pathlib import Path

import pytest
from astropy.table import Table

from hwpol import Night
from hwpol.errors import HwpolError, InputError
from hwpol.night import run as runs
from hwpol.night.output import write_products

TABLES = ["results.ecsv", "cycles.ecsv", "frames.ecsv", "standards.ecsv", "calibration.toml"]


def contents(path):
    """Bytes of every product but run.json, which tells the time, by name."""
    folder = path.parent / "reduced"
    files = [file for file in folder.rglob("*") if file.is_file() and ".cache" not in file.parts]
    return {file.relative_to(folder).as_posix(): file.read_bytes() for file in files if file.name != "run.json"}


@pytest.fixture
def measured(reduced_night, monkeypatch):
    """Numbers of the visits that are measured; what comes out is what `reduced_night` measured of its own copy."""
    numbers = []
    known = {visit.task_number: visit for visit in reduced_night[1].visits}

    def look_up(task):
        numbers.append(task.number)
        return known[task.number]

    monkeypatch.setattr(runs, "reduce_visit", look_up)
    return numbers


def test_all_products_are_there(reduced_night):
    path, answer = reduced_night
    names = set(contents(path))
    assert set(TABLES) <= names
    assert {f"visits/visit_{visit.task_number:03d}.fits" for visit in answer.visits} <= names
    assert list(Table.read(path.parent / "reduced" / "results.ecsv")["q"]) == list(answer.results["q"])


def test_run_json_tells_inputs_and_configuration(reduced_night):
    path, answer = reduced_night
    told = json.loads((path.parent / "reduced" / "run.json").read_text(encoding="utf-8"))
    assert set(told["inputs"]) == set(answer.frames["file"])
    assert all(len(checksum) == 64 for checksum in told["inputs"].values())
    assert told["configuration"]["photometry"]["sources"] == "target"
    assert {"python", "hwpol", "numpy", "astropy"} <= set(told["versions"])


def test_the_same_bytes_on_a_rerun_and_with_two_processes(reduced_night, night_path):
    with ProcessPoolExecutor(2, mp_context=get_context("spawn")) as pool:
        Night.read(night_path).reduce(executor=pool)
    first = contents(night_path)
    assert first == contents(reduced_night[0])
    Night.read(night_path).reduce()
    assert contents(night_path) == first


def test_goes_on_where_it_stopped(reduced_night, night_path, measured):
    def stop(done, *_):
        if done == 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        Night.read(night_path).reduce(progress=stop)
    assert not (night_path.parent / "reduced" / "results.ecsv").exists()
    assert measured == [1, 2]
    Night.read(night_path).reduce()
    assert measured == [1, 2, 3]
    assert contents(night_path) == contents(reduced_night[0])


def test_takes_up_only_what_nothing_changed(night_path, edit, measured):
    night = Night.read(night_path)
    night.reduce(write=False)
    measured.clear()
    night.reduce(write=False)
    assert measured == []
    os.utime(night_path.parent / "raw" / "night_0020.fits", (1e9, 1e9))
    night.reduce(write=False)
    assert measured == [2]
    for stored in (night_path.parent / "reduced" / ".cache" / "visits").iterdir():
        stored.write_bytes(stored.read_bytes()[:100])
    edit(night_path, "[correction]", '[statistics]\nestimator = "mode"\n[correction]')
    Night.read(night_path).reduce(write=False)
    assert measured == [2, 1, 2, 3]
    measured.clear()
    edit(night_path, "[correction]", "[photometry]\nradius = 5.0\n[correction]")
    Night.read(night_path).reduce(write=False)
    assert measured == [1, 2, 3]


@pytest.fixture
def products(reduced_night, tmp_path):
    """A configuration whose products go to a new folder, and an answer to write there."""
    path, answer = reduced_night
    return replace(Night.read(path).config, output=tmp_path / "products"), answer


@pytest.mark.parametrize("raised", [OSError(28, "No space left on device"), KeyboardInterrupt()])
@pytest.mark.parametrize("name", ["results.ecsv", "standards.ecsv"])
def test_products_are_written_whole_or_not_at_all(products, monkeypatch, raised, name):
    config, answer = products
    config.output.mkdir()
    for old in TABLES:
        (config.output / old).write_text("what an earlier run wrote\n")
    original = Table.__dict__["write"]

    def fail(table, path, **options):
        if name in str(path):
            Path(path).write_text("half of i")
            raise raised
        original.__get__(table, Table)(path, **options)

    monkeypatch.setattr(Table, "write", fail)
    with pytest.raises(HwpolError if isinstance(raised, OSError) else KeyboardInterrupt) as caught:
        write_products(config, answer)
    if isinstance(raised, OSError):
        assert name in str(caught.value)
        assert "No space left" in str(caught.value)
    assert (config.output / name).read_text() == "what an earlier run wrote\n"
    assert [file for file in config.output.rglob("*") if file.name.endswith(".part")] == []


def test_a_visit_that_fails_does_not_take_the_night_with_it(night_path, measured, monkeypatch):
    original = runs.reduce_visit

    def fail(task):
        if task.targets[0].name == "Fern":
            raise InputError("the sky fell in")
        return original(task)

    monkeypatch.setattr(runs, "reduce_visit", fail)
    answer = Night.read(night_path).reduce()
    assert list(answer.results["target"]) == ["Dew", "Moss"]
    fern = answer.frames[answer.frames["object"] == "Fern"]
    assert set(fern["status"]) == {"set aside"}
    assert set(fern["reason"]) == {"the sky fell in"}
    assert any("the sky fell in" in note for note in answer.notes)
    assert not answer.clean


def test_raw_frames_stay_as_they_were(tiny_night, reduced_night):
    path, _ = reduced_night
    for raw in tiny_night.paths:
        assert (path.parent / "raw" / raw.name).read_bytes() == raw.read_bytes()


def test_other_formats(products):
    config, answer = products
    write_products(replace(config, products=replace(config.products, formats=("fits", "votable"))), answer)
    values = [Table.read(config.output / "results.ecsv"), Table.read(config.output / "results.fits"),
              Table.read(config.output / "results.vot", format="votable")]  # fmt: skip
    assert [list(table["q"]) for table in values] == [list(answer.results["q"])] * 3


def test_visits_of_an_earlier_run_that_are_no_more_go(products):
    config, answer = products
    write_products(config, answer)
    assert len(list((config.output / "visits").iterdir())) == 3
    write_products(config, replace(answer, visits=answer.visits[:1], solutions=answer.solutions[:1]))
    assert [file.name for file in (config.output / "visits").iterdir()] == ["visit_001.fits"]
