"""A night in which much goes wrong: what is broken stands aside with its reason, the rest is reduced."""

from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

from hwpol import Night
from hwpol.flags import Flag
from hwpol.simulate import Scenario, shipped_scenarios, simulate

#: File of the shipped scenario "faulty", status, and words of the reason, by the fault it has.
ASIDE = {
    "night_0005.fits": ("set aside", "truncated"),
    "night_0046.fits": ("set aside", "truncated"),
    "night_0047.fits": ("unread", "empty"),
    "night_0006.fits": ("unread", "not a FITS file"),
    "night_0030_copy.fits": ("set aside", "a copy of night_0030.fits"),
    "night_0052_copy.fits": ("set aside", "a copy of night_0052.fits"),
    "night_0053.fits": ("set aside", "160 x 152 pixels, most have 160 x 160"),
    "night_0056.fits": ("set aside", "PLATE is missing"),
    "night_0057.fits": ("set aside", "PLATE = '???'"),
    "night_0064.fits": ("set aside", "does not fit its wave-plate angle"),
    "night_0069.fits": ("set aside", "does not fit its wave-plate angle"),
    "night_0074.fits": ("set aside", "cosmic ray"),
}


@pytest.fixture(scope="module")
def faulty(tmp_path_factory):
    """The night file of the shipped scenario, reduced, with what it answered and the truth."""
    scenario = Scenario.read(shipped_scenarios()["faulty"])
    night = simulate(scenario, tmp_path_factory.mktemp("faulty") / "night")
    with night.night_path.open("a", encoding="utf-8") as stream:
        stream.write("\n[products]\nreport = false\n")
    (night.night_path.parent / "raw" / "notes.fits").write_text("seeing poor\n", encoding="utf-8")
    return night.night_path, Night.read(night.night_path).reduce(), night.truth


def test_every_fault_stands_in_the_table_of_frames_with_its_reason(faulty):
    path, _, _ = faulty
    table = Table.read(path.parent / "reduced" / "frames.ecsv")
    aside = {Path(row["file"]).name: (row["status"], row["reason"]) for row in table if row["status"] != "used"}
    assert aside.pop("notes.fits") == ("unread", "not a FITS file")
    assert aside.keys() == ASIDE.keys()
    wrong = {name: aside[name] for name, (status, words) in ASIDE.items()
             if aside[name][0] != status or words not in aside[name][1]}  # fmt: skip
    assert wrong == {}
    assert [row["file"] for row in table if row["status"] == "used" and row["reason"]] == []


def test_no_input_file_is_missing_from_the_table_of_frames(faulty):
    path, answer, _ = faulty
    names = sorted(file.relative_to(path.parent).as_posix() for file in (path.parent / "raw").iterdir())
    assert sorted(answer.frames["file"]) == names


def test_the_rest_is_reduced_and_true(judge, faulty):
    _, answer, truth = faulty
    compared = judge.compare(answer.results, truth)
    assert list(compared.results["target"]) == ["Calm 10", "Beacon 10", "Nettle 1", "Nettle 2"]
    assert compared.known().worst() < 5
    assert list(compared.known().results["target"]) == ["Calm 10", "Beacon 10", "Nettle 1"]
    judge.check_calibration(answer.calibration, truth)
    assert not answer.clean


def test_flags_tell_what_happened_to_the_target(faulty):
    _, answer, _ = faulty
    flags = int(answer.results["flags"][answer.results["target"] == "Nettle 1"][0])
    told = Flag.COSMIC_RAY | Flag.INCOMPLETE_CYCLE | Flag.PLATE_SUSPECT
    assert Flag(flags) & told == told


def test_angles_that_do_not_determine_q_and_u_give_no_number(faulty):
    _, answer, _ = faulty
    for table in (answer.results, answer.cycles):
        row = table[table["target"] == "Nettle 2"][0]
        assert row["flags"] & int(Flag.UNDETERMINED)
        for name in ("q", "u", "q_err", "u_err", "p", "p_debiased", "p_upper95", "theta"):
            assert np.isnan(row[name]), name


def test_frames_counted_are_frames_used(faulty):
    _, answer, _ = faulty
    for row in answer.results:
        used = (answer.frames["visit"] == row["visit"]) & (answer.frames["status"] == "used")
        assert row["frames"] == np.sum(used)


def test_frames_left_out_on_request_are_listed(faulty):
    path, _, _ = faulty
    text = path.read_text(encoding="utf-8").replace('output = "reduced"', 'output = "other"\nexclude = ["night_0014*"]')
    other = path.with_name("other.toml")
    other.write_text(text, encoding="utf-8")
    frames = Night.read(other).inventory().table
    row = frames[frames["name"] == "night_0014.fits"][0]
    assert row["status"] == "set aside"
    assert "exclude" in row["reason"]
