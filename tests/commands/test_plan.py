"""`hwpol plan`: visits, cycles, roles and doubts, from headers alone."""

import numpy as np
import pytest
from astropy.io import fits


def test_shows_visits_cycles_calibrations_and_roles(run, tiny_night):
    done = run("plan", tiny_night.night_path)
    assert done.status == 0
    assert "31 used (24 science, 3 bias, 4 flat)" in done.out
    roles = done.out[done.out.index("Roles") :].splitlines()
    assert [line.split()[1:4] for line in roles[3:6]] == [
        ["Dew", "V", "zero-polarised"],
        ["Moss", "V", "polarised"],
        ["Fern", "V", "science"],
    ]


def test_opens_no_pixels(run, tiny_night, monkeypatch):
    def refuse(*_, **__):
        raise AssertionError("pixels were opened")

    monkeypatch.setattr(fits.PrimaryHDU, "data", property(refuse))
    monkeypatch.setattr(fits.ImageHDU, "data", property(refuse))
    monkeypatch.setattr(np, "fromfile", refuse)
    assert run("plan", tiny_night.night_path).status == 0


def test_writes_nothing(run, night_path):
    before = sorted(night_path.parent.rglob("*"))
    run("plan", night_path)
    assert sorted(night_path.parent.rglob("*")) == before


def test_a_file_set_aside_is_listed_and_makes_status_1(run, night_path):
    (night_path.parent / "raw" / "night_0010.fits").write_text("this is no image\n")
    done = run("plan", night_path)
    assert done.status == 1
    assert "night_0010.fits" in done.out


def test_nothing_to_reduce_makes_status_1(run, night_path, edit):
    edit(night_path, "raw/*.fits", "raw/night_000[1-3].fits")
    done = run("plan", night_path)
    assert done.status == 1
    assert "Roles" not in done.out


@pytest.mark.parametrize("role", ["science", "polarised"])
def test_a_role_of_the_night_file_goes_before_the_catalogue(run, night_path, edit, role):
    edit(night_path, 'name = "Dew"', f'name = "Dew"\nrole = "{role}"')
    done = run("plan", night_path)
    line = next(line.split() for line in done.out[done.out.index("Roles") :].splitlines() if " Dew " in line)
    assert line[3] == role
    doubt = "role 'polarised', but the catalogue lists it as zero-polarised"
    assert (doubt in done.out) == (role == "polarised")
