"""The checker of TOML trees."""

from __future__ import annotations

import math
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import ConfigError
from hwpol.instrument.toml_check import (
    Either,
    FilePath,
    Key,
    ListOf,
    Table,
    Then,
    known_keys_of,
    read_toml,
    read_tree,
    shown,
)
from hwpol.instrument.toml_kinds import choice, integer, number, truth, words

SPEC = Table(
    keys=(
        Key("name", words(), "A name.", required=True),
        Key("gain", number(above=0), "A gain.", 1.5),
        Key("count", integer(at_least=1, at_most=9), "A count.", 3),
        Key("on", truth(), "A switch.", True),
        Key("method", choice("exact", "centre"), "A method.", "exact"),
        Key("sense", choice(1, -1), "A sense.", 1),
        Key("radii", ListOf(number(above=0), "a list of radii", at_least=1), "Radii.", [4.0]),
        Key("size", Either((choice("best"), number(above=0))), "A size.", "best"),
        Key("upper", Then(words(), str.upper), "A text made upper case."),
        Key("free", Table(others=number(), others_help="Any number.", text="a table of numbers"), "Free names.", {}),
        Key("part", Table((Key("gap", number(), "A gap.", 2.0),), text="a table with gap"), "A part."),
    ),
)


def problems_of(tree: dict) -> list[str]:
    with pytest.raises(ConfigError) as caught:
        read_tree(SPEC, tree)
    return caught.value.problems


def test_defaults_are_parsed_and_absent_tables_are_none() -> None:
    assert read_tree(SPEC, {"name": "a"}) == {
        "name": "a",
        "gain": 1.5,
        "count": 3,
        "on": True,
        "method": "exact",
        "sense": 1,
        "radii": (4.0,),
        "size": "best",
        "upper": None,
        "free": {},
        "part": None,
    }


def test_values_are_parsed_and_integers_stand_for_numbers() -> None:
    found = read_tree(SPEC, {"name": "a", "gain": 2, "radii": [1, 2.5], "upper": "x", "free": {"a b": 1}, "part": {}})
    assert (found["gain"], found["radii"], found["upper"]) == (2.0, (1.0, 2.5), "X")
    assert isinstance(found["gain"], float)
    assert found["free"] == {"a b": 1.0}
    assert found["part"] == {"gap": 2.0}


def test_all_problems_come_at_once_each_with_place_value_and_what_is_allowed() -> None:
    tree = {
        "gian": 1.5,
        "count": 2.0,
        "on": 1,
        "method": "exakt",
        "sense": True,
        "radii": [4.0, "six", 8.0, -1],
        "size": "2",
        "free": {"a b": "1"},
        "part": {"gap": "x", "gop": 1},
    }
    assert problems_of(tree) == [
        "gian = 1.5: unknown key, expected one of name, gain, count, on, method, sense, radii, size, upper, free, "
        'part; did you mean "gain"?',
        "name: missing, expected a text",
        "count = 2.0: expected a whole number >= 1 and <= 9",
        "on = 1: expected true or false",
        'method = "exakt": expected "exact" or "centre"; did you mean "exact"?',
        "sense = true: expected 1 or -1",
        'radii[2] = "six": expected a number > 0',
        "radii[4] = -1: expected a number > 0",
        'size = "2": expected "best" or a number > 0',
        'free."a b" = "1": expected a number',
        'part.gop = 1: unknown key, expected only gap; did you mean "gap"?',
        'part.gap = "x": expected a number',
    ]


def test_a_key_of_another_section_is_named_with_it() -> None:
    (line,) = problems_of({"name": "a", "gap": 60.0})
    assert line.endswith('did you mean "part.gap"?')
    (line,) = problems_of({"name": "a", "part": {"method": "exact"}})
    assert line.endswith('did you mean "method"?')


@pytest.mark.parametrize("value", ["1.5", True, math.nan, math.inf, -math.inf, 0, -1.0, [1.0], {}, 10**400, None])
def test_a_number_is_never_made_of_something_else(value: object) -> None:
    (line,) = problems_of({"name": "a", "gain": value})
    assert line == f"gain = {shown(value)}: expected a number > 0"


@pytest.mark.parametrize("value", [0, 10, 3.0, "3", True, 10**4000])
def test_an_integer_is_never_made_of_something_else(value: object) -> None:
    (line,) = problems_of({"name": "a", "count": value})
    assert line.startswith("count = ")


def test_a_choice_forgives_no_case_but_names_the_nearest() -> None:
    (line,) = problems_of({"name": "a", "method": "EXACT"})
    assert line.endswith('did you mean "exact"?')
    (line,) = problems_of({"name": "a", "size": "bets"})
    assert line == 'size = "bets": expected "best" or a number > 0; did you mean "best"?'


@pytest.mark.parametrize("value", ["", "  ", 3, True])
def test_a_text_is_not_blank(value: object) -> None:
    assert problems_of({"name": value}) == [f"name = {shown(value)}: expected a text"]


def test_values_are_shown_on_one_short_line_as_in_the_file() -> None:
    assert shown({"a": True, "b c": ["x\ny", 1.0]}) == '{a = true, "b c" = ["x\\ny", 1.0]}'
    long = shown("x" * 500)
    assert len(long) == 60
    assert long.endswith("...")


def test_deeply_nested_tables_are_shown_too(tmp_path: Path) -> None:
    path = tmp_path / "deep.toml"
    path.write_text("[gain" + ".a" * 3000 + "]\n[extra" + ".a" * 3000 + "]\n")
    tree = {"name": "a", **read_toml(path)}
    assert problems_of(tree)[1] == "gain = {a = {a = {a = {a = {a = ...}}}}}: expected a number > 0"


def test_paths_start_at_the_folder_and_must_exist_where_asked(tmp_path: Path) -> None:
    table = Table((Key("old", FilePath("an existing file"), ""), Key("new", FilePath("a path", exists=False), "")))
    (tmp_path / "a.txt").touch()
    assert read_tree(table, {"old": "a.txt", "new": "sub/../b"}, folder=tmp_path) == {
        "old": tmp_path / "a.txt",
        "new": tmp_path / "b",
    }
    with pytest.raises(ConfigError) as caught:
        read_tree(table, {"old": "b.txt", "new": ""}, folder=tmp_path)
    assert caught.value.problems == [
        f'old = "b.txt": expected an existing file; {tmp_path / "b.txt"} does not exist',
        'new = "": expected a path',
    ]
    with pytest.raises(ConfigError, match="is a folder"):
        read_tree(table, {"old": "."}, folder=tmp_path)


def test_a_rule_sees_the_good_values_and_the_result_is_built_only_without_problem() -> None:
    seen: list[dict] = []
    table = Table(
        (Key("low", number(), "Low."), Key("high", number(), "High.")),
        rule=lambda values, place, problems: seen.append(dict(values)),
        build=lambda values: values["low"] + values["high"],
    )
    assert read_tree(table, {"low": 1, "high": 2}) == 3.0
    with pytest.raises(ConfigError):
        read_tree(table, {"low": "x", "high": 2})
    assert seen == [{"low": 1.0, "high": 2.0}, {"high": 2.0}]


def test_every_key_is_listed_with_its_default() -> None:
    keys = known_keys_of(SPEC)
    assert list(keys)[-4:] == ["free", "free.*", "part", "part.gap"]
    assert keys["radii"].default == "[4.0]"
    assert keys["upper"].default == "none"
    assert keys["name"].required
    assert keys["size"].expected == '"best" or a number > 0'


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"a = 1\nb = = 2\n", "line 2, column 5: not valid TOML"),
        (b"a = 1\na = 2\n", "line 2, column"),
        (b'a = 1\nb = "x', "line 2, column 7: not valid TOML"),
        (b"a = 1\n\nb = '\xe9'", "line 3: not UTF-8 text (byte 0xe9)"),
        (b"a = " + b"9" * 5000, "not valid TOML"),
        (b"a = " + b"[" * 100000, "not valid TOML"),
    ],
)
def test_a_file_that_is_not_toml_says_where(tmp_path: Path, content: bytes, message: str) -> None:
    path = tmp_path / "bad.toml"
    path.write_bytes(content)
    with pytest.raises(ConfigError) as caught:
        read_toml(path)
    assert str(caught.value).startswith(f"{path}: {message}")
    assert "\n" not in str(caught.value)


def test_a_file_that_cannot_be_read_says_why(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="no such file"):
        read_toml(tmp_path / "absent.toml")
    with pytest.raises(ConfigError, match="is a folder"):
        read_toml(tmp_path)
    with pytest.raises(ConfigError, match="cannot be read"):
        read_toml("a\0b")


def test_a_byte_order_mark_and_windows_line_ends_are_taken(tmp_path: Path) -> None:
    path = tmp_path / "a.toml"
    path.write_bytes(b"\xef\xbb\xbfa = 1\r\nb = 2\r\n")
    assert read_toml(path) == {"a": 1, "b": 2}


@settings(deadline=None, max_examples=100)
@given(st.binary(max_size=60))
def test_any_bytes_are_read_or_refused_clearly(tmp_path_factory: pytest.TempPathFactory, content: bytes) -> None:
    path = tmp_path_factory.getbasetemp() / "any.toml"
    path.write_bytes(content)
    try:
        found = read_toml(path)
    except ConfigError as error:
        found = error.problems
    assert isinstance(found, dict) or len(found) == 1
