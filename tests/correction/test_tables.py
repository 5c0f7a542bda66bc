"""The shipped tables: a guard for each file, and what is said of wrong ones."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

import hwpol
from hwpol.correction.catalogue.stars import separation
from hwpol.correction.catalogue.tables import (
    BAND_COLUMNS,
    CURVE_COLUMNS,
    STAR_COLUMNS,
    own_tables,
    read_table,
    star_key,
    tables_root,
)
from hwpol.errors import ConfigError

# Positions of one star in two files come from the same row of one source: they agree to its last digit (1e-6 deg).
SAME_POSITION = 0.01  # arcsec


def test_tables_of_the_source_tree_go_first():
    """An editable installation may hold a stale copy; the tree's own folder is read."""
    assert tables_root() == Path(hwpol.__file__).parents[1] / "calib_tables"


def test_tables_inside_an_installed_package(tmp_path):
    package = tmp_path / "hwpol"
    shutil.copytree(Path(hwpol.__file__).parent, package, ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copytree(tables_root(), package / "calib_tables")
    code = "from hwpol.correction.catalogue.tables import own_tables; print(own_tables()[0].path)"
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True,
                          env={**os.environ, "PYTHONPATH": str(tmp_path)})  # fmt: skip
    assert done.stdout.strip() == str(package / "calib_tables" / "polarised.ecsv")


def rows(name):
    return Table.read(tables_root() / f"{name}.ecsv", format="ascii.ecsv")


@pytest.mark.parametrize(
    ("name", "columns", "length"),
    [
        ("polarised", STAR_COLUMNS, 58),
        ("zero_polarised", STAR_COLUMNS, 46),
        ("serkowski", CURVE_COLUMNS, 21),
        ("bands", BAND_COLUMNS, 32),
    ],
)
def test_columns_references_and_provenance(name, columns, length):
    table = rows(name)
    assert set(columns) <= set(table.colnames)
    assert len(table) == length
    for row in table:
        assert row["reference"]
        assert row["provenance"] in {"read", "memory", "derived"}
        assert ("not read" in row["reference"]) == (row["provenance"] == "memory")
        assert str(row["reference"]).count("(") == str(row["reference"]).count(")")


def test_ranges_of_polarised():
    table = rows("polarised")
    valued = table[np.isfinite(table["p"])]
    assert len(valued) == len(table) - 1  # one star is listed as a warning only
    assert np.all((valued["p"] > 0.01) & (valued["p"] < 0.12))
    assert np.all((valued["p_err"] > 0) & (valued["p_err"] < 0.002))
    angles = valued["theta"][np.isfinite(valued["theta"])]
    assert np.all((angles >= 0) & (angles < 180))
    assert set(valued["band"]) == {"B", "V", "R", "I"}
    assert len({(str(r["name"]), str(r["band"])) for r in table}) == len(table)


def test_ranges_of_zero_polarised():
    table = rows("zero_polarised")
    values = table["p"][np.isfinite(table["p"])]
    assert values.max() < 0.002
    assert np.isnan(table["theta"]).all()


def test_ranges_of_serkowski():
    table = rows("serkowski")
    assert np.all((table["lambda_max"] >= 0.45) & (table["lambda_max"] <= 0.80))
    assert np.all((table["p_max"] > 0.01) & (table["p_max"] < 0.10))
    first = {}
    for row in table:
        first.setdefault(row["name"], row["provenance"])
    # What was read stands before what was recalled of the same star.
    assert all(first[r["name"]] == "read" for r in table if r["provenance"] == "read")


def test_wavelengths_of_bands_agree_between_systems():
    table = rows("bands")
    for band in ("U", "B", "V", "Rc", "Ic"):
        values = table["wavelength"][table["band"] == band]
        # Definitions (effective, mean, pivot) of one band differ by less than a tenth of its wavelength.
        assert np.ptp(values) < 0.1 * values.mean()


def test_two_sources_of_one_star_agree():
    """Serkowski parameters read (Serkowski 1974) and recalled (a compilation) agree at the rounding of the former."""
    table = rows("serkowski")
    read = {r["name"]: r for r in table if r["provenance"] == "read"}
    both = [r for r in table if r["provenance"] == "memory" and r["name"] in read]
    assert len(both) == 5
    for row in both:
        other = read[row["name"]]
        assert abs(row["p_max"] - other["p_max"]) < 0.0012
        assert abs(row["lambda_max"] - other["lambda_max"]) < 0.015
        assert abs(row["theta"] - other["theta"]) < 1.0


def test_positions_agree_between_files():
    places = {}
    for table in own_tables():
        if table.kind == "bands":
            continue
        for row in table.rows:
            key = star_key(row["name"])
            ra, dec = places.setdefault(key, (row["ra"], row["dec"]))
            assert separation(ra, dec, row["ra"], row["dec"]) < SAME_POSITION, row["name"]


def test_variable_stars_say_who_says_so():
    said = {r["name"]: r["variable"] for t in own_tables() if t.kind != "bands" for r in t.rows if r["variable"]}
    for name in ("HD 80558", "HD 111613", "HD 160529", "HD 183143", "HD 198478"):
        assert "Cotton et al. 2024" in said[name]
    for name in ("HD 43384", "HD 183143", "HD 198478"):
        assert "Hsu & Breger 1982" in said[name]
    assert "HD 251204" in said
    assert not {"HD 84810", "HD 147084", "HD 154445", "HD 161056", "HD 161471"} & set(said)


def write(path, text):
    path.write_text(text)
    return path


HEAD = """# %ECSV 1.0
# ---
# datatype:
# - {name: name, datatype: string}
# - {name: aliases, datatype: string}
# - {name: ra, datatype: float64}
# - {name: dec, datatype: float64}
# - {name: vmag, datatype: float64}
# - {name: band, datatype: string}
# - {name: p, datatype: float64}
# - {name: p_err, datatype: float64}
# - {name: theta, datatype: float64}
# - {name: theta_err, datatype: float64}
# - {name: variable, datatype: string}
# - {name: reference, datatype: string}
# delimiter: ','
# schema: astropy-2.0
name,aliases,ra,dec,vmag,band,p,p_err,theta,theta_err,variable,reference
"""


def test_all_problems_of_a_table_are_listed(tmp_path):
    path = write(
        tmp_path / "mine.ecsv",
        HEAD
        + "A,,10,20,9,V,5.2,0.01,30,0.2,,me\n"
        + "B,,370,20,9,V,0.05,-0.01,30,0.2,,me\n"
        + "C,,10,20,9,V,0.05,0.01,200,0.2,,\n",
    )
    with pytest.raises(ConfigError) as caught:
        read_table(path)
    text = str(caught.value)
    for part in ("mine.ecsv", "row 1 (A): p = 5.2", "row 2 (B): ra = 370", "p_err = -0.01", "theta = 200", "reference"):
        assert part in text


@pytest.mark.parametrize(
    ("content", "said"),
    [
        ("not a table", "not a readable ECSV table"),
        (HEAD.replace("# - {name: theta, datatype: float64}\n", "").replace(",theta,", ","), "missing column theta"),
    ],
)
def test_unreadable_tables(tmp_path, content, said):
    with pytest.raises(ConfigError, match=said):
        read_table(write(tmp_path / "bad.ecsv", content))


def test_missing_file_names_it(tmp_path):
    with pytest.raises(ConfigError, match=r"nowhere\.ecsv: no such file"):
        read_table(tmp_path / "nowhere.ecsv")


def test_units_are_converted(tmp_path):
    text = HEAD.replace("{name: p, datatype: float64}", "{name: p, unit: '%', datatype: float64}")
    text = text.replace("{name: ra, datatype: float64}", "{name: ra, unit: rad, datatype: float64}")
    table = read_table(write(tmp_path / "mine.ecsv", text + "A,,1.0,20,9,V,5.2,0.01,30,0.2,,me\n"))
    assert table.rows[0]["p"] == pytest.approx(0.052, rel=1e-12)
    assert table.rows[0]["ra"] == pytest.approx(np.degrees(1.0), rel=1e-12)
