"""Result tables: typed, with units and meanings, and the same after a round trip through every format."""

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits, votable
from astropy.table import QTable
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import InputError
from hwpol.flags import FLAG_TEXT, Flag
from hwpol.products import FORMATS, make_table, read_results, read_table, write_table
from hwpol.schema import TABLES

ROW = {"target": "Fern, 1 \"b\"", "source": 3, "filter": "Å 500", "visit": 2, "q": 0.1 + 0.2, "u": np.float64(-1e-17),
       "flux": 12.5, "flags": int(Flag.EDGE | Flag.NO_REPEATS), "frame": "sky"}  # fmt: skip
KINDS = {"text": "U", "integer": "i", "number": "f", "truth": "b"}


@pytest.mark.parametrize("name", TABLES)
def test_columns_never_depend_on_the_rows(name):
    for rows in ([], [{}], [{}, {}]):
        table = make_table(rows, name)
        assert table.colnames == [column.name for column in TABLES[name]]
        for column in TABLES[name]:
            assert table[column.name].dtype.kind == KINDS[column.kind]
            assert (table[column.name].unit or u.dimensionless_unscaled) == u.Unit(column.unit)
            assert table[column.name].description == column.text


def test_what_is_not_known_is_nan_or_empty():
    row = make_table([{}], "results")[0]
    assert np.isnan(row["q"])
    assert row["target"] == ""
    assert row["visit"] == -1


def test_unknown_column_is_refused():
    with pytest.raises(KeyError, match="nonsense"):
        make_table([{"nonsense": 1}], "results")


@pytest.mark.parametrize("form", FORMATS)
def test_round_trip(tmp_path, form):
    row = ROW if form == "ecsv" else {**ROW, "filter": "A 500"}
    table = make_table([row, {}], "results", {"instrument": "Wren"})
    path = write_table(table, tmp_path / f"results{FORMATS[form]}")
    back = read_table(path)
    assert back.colnames == table.colnames
    for name, value in row.items():
        assert back[name][0] == value
    assert np.ma.getmaskarray(back["q"])[1] or np.isnan(back["q"][1])
    assert back["mjd"].unit == u.d
    assert back["x"].unit == u.pix


@settings(deadline=None, max_examples=20)
@given(st.lists(st.tuples(st.floats(allow_nan=False), st.integers(0, 2**31)), min_size=1, max_size=4))
def test_any_number_comes_back(tmp_path_factory, values):
    path = tmp_path_factory.mktemp("tables") / "frames.ecsv"
    write_table(make_table([{"mjd": number, "visit": visit} for number, visit in values], "frames"), path)
    back = read_table(path)
    assert list(zip(back["mjd"], back["visit"], strict=True)) == values


@pytest.mark.parametrize("text", ["a b", "a,b", 'a"b', "a'b", "a#", "\\", "é", "", '"', ",", "nan", "-1"])
def test_any_name_comes_back(tmp_path, text):
    back = read_table(write_table(make_table([{"target": text}], "results"), tmp_path / "results.ecsv"))
    assert len(back) == 1
    assert (text == "" and np.ma.is_masked(back["target"][0])) or back["target"][0] == text


def test_fits_writes_other_letters_in_ascii(tmp_path):
    back = read_table(write_table(make_table([{"target": "Ångström ☆"}], "results"), tmp_path / "results.fits"))
    assert back["target"][0] == "Angstrom ?"


def test_flags_are_named_in_the_metadata(tmp_path):
    back = read_table(write_table(make_table([ROW], "results", {"instrument": "Wren"}), tmp_path / "results.ecsv"))
    assert back.meta["instrument"] == "Wren"
    assert dict(back.meta["flags"]) == {f.name.lower(): int(f) for f in Flag}
    assert back.meta["flag_texts"]["edge"] == FLAG_TEXT[Flag.EDGE]


def test_fits_carries_units_words_and_flags(tmp_path):
    path = write_table(make_table([ROW], "results"), tmp_path / "results.fits")
    with fits.open(path) as hdus:
        header = hdus["RESULTS"].header
        names = [header[f"TTYPE{n}"] for n in range(1, header["TFIELDS"] + 1)]
        number = names.index("flux") + 1
        assert header[f"TUNIT{number}"] == "count s-1"
        assert header[f"TUCD{number}"] == "phot.count"
        assert "electrons" in header[f"TCOMM{number}"]
        assert any("edge" in str(line) for line in header["COMMENT"])
        assert hdus["RESULTS"].verify_checksum() == 1


def test_votable_is_valid_and_carries_words(tmp_path):
    path = write_table(make_table([ROW | {"filter": "A"}], "results"), tmp_path / "results.vot")
    assert votable.is_votable(str(path))
    sheet = votable.parse_single_table(str(path))
    words = {field.name: field.ucd for field in sheet.fields}
    assert words["q"] == "phys.polarization.stokes.Q;arith.ratio"
    assert all(votable.ucd.check_ucd(word, check_controlled_vocabulary=True) for word in words.values() if word)


def test_results_as_quantities(tmp_path):
    table = read_results(write_table(make_table([ROW], "results"), tmp_path / "results.ecsv"))
    assert isinstance(table, QTable)
    assert table["flux"].unit == u.electron / u.s


def test_unknown_suffix(tmp_path):
    with pytest.raises(InputError, match=r"suffix '\.csv'"):
        write_table(make_table([], "results"), tmp_path / "results.csv")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("suffix", FORMATS.values())
def test_reading_what_is_not_there_or_no_table(tmp_path, suffix):
    path = tmp_path / f"results{suffix}"
    with pytest.raises(InputError, match="no such file"):
        read_table(path)
    path.write_text("this is no table\n")
    with pytest.raises(InputError, match="cannot be read as a table"):
        read_table(path)
