"""`hwpol explain` knows every column, flag and setting."""

import pytest

from hwpol.commands.explain import explain
from hwpol.flags import FLAG_TEXT, Flag
from hwpol.instrument import reading
from hwpol.night import config
from hwpol.schema import TABLES


def flat(texts):
    return " ".join(" ".join(texts).split())


@pytest.mark.parametrize("table", TABLES)
def test_every_column(table):
    for column in TABLES[table]:
        said = flat(explain(column.name))
        assert f"column {column.name} of" in said
        assert f"{table}.ecsv" in said
        assert column.text in said
        assert column.unit in said


@pytest.mark.parametrize("flag", Flag)
def test_every_flag_in_either_case(flag):
    for name in (flag.name, flag.name.lower()):
        said = flat(explain(name))
        assert f"bit value {int(flag)}" in said
        assert FLAG_TEXT[flag] in said


@pytest.mark.parametrize(("known", "place"), [(reading.known_keys, "instrument"), (config.known_keys, "night")])
def test_every_setting_by_its_full_and_its_last_name(known, place):
    for label, info in known().items():
        said = flat(explain(label))
        assert f"setting {label} of the {place} file" in said
        assert " ".join(info.help.split()) in said
        assert " ".join(info.expected.split()) in said
        if label.rsplit(".", 1)[-1] != "*":
            assert explain(label.rsplit(".", 1)[-1])


def test_nearest_name_of_a_misspelling(refused):
    assert "nearest: p_debiased" in refused("explain", "p_debised")


def test_on_screen(run):
    done = run("explain", "photometry.radius")
    assert done.status == 0
    assert done.out.startswith("setting photometry.radius of the night file")
    assert done.err == ""
