"""The instrument file: what it means and what is refused."""

from __future__ import annotations

import copy
import datetime
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import ConfigError
from hwpol.instrument import Band, Beam, Instrument, Keyword, Orientation, Section, Site, WavePlate
from hwpol.instrument.reading import instrument_from_dict, known_keys, read_instrument

FULL = """
name = "Full"

[detector]
gain = 1.5
read_noise = 5
saturation = 60000.0
pixel_scale = 0.40
trim = "[1:2048,1:1024]"
overscan = "[2049:2080, 1:1024]"
extension = 0
bad_pixels = "bad.fits"
linearity = [1.0, 1e-7]

[keywords]
kind = "FRMKIND"
object = "OBJECT"
filter = ["WHEEL1", "WHEEL2"]
exposure = {keyword = "EXPTIME", unit = "ms"}
time = {keyword = ["DATE-OBS", "UT"], unit = "h"}
wave_plate = {keyword = "PLATE", pattern = "pos([0-9]+)", scale = -0.5, zero = 3}
position_angle = "SKYANG"
ra = {keyword = "RA", unit = "hourangle", equinox = 2000}
dec = {keyword = "DEC", equinox = " EQUINOX"}
airmass = "AIRMASS"
gain = "EGAIN"

[kinds]
bias = ["Bias ", "zero"]
science = ["object", "flat"]

[filters]
"Bess R 76" = {band = "R", wavelength = 0.64}
clear = ["Clear", "open", ""]

[wave_plate]
retardance = {V = 178.0, R = 181.5}
scale = 0.5
zero = 12.5
sense = -1
values = {"1" = 0.0, 2 = 22.5}
tolerance = 0.5

[[beam]]
name = "ordinary"
analyser = 0.0
section = "[1:2048,1:512]"
[[beam]]
name = "extraordinary"
analyser = 90.0
section = "[11:2048,513:1024]"
throughput = 0.97
throughput_err = 0.01
gain = 1.6
extension = "RIGHT"

[orientation]
mount = "altaz"
position_angle = "parallactic"
altitude = -1
sense = -1
frame = "both"

[site]
longitude = -70.7
latitude = -29.3
height = 2300.0
"""

SMALL: dict[str, Any] = {
    "name": "Small",
    "detector": {"gain": 1.0},
    "keywords": {"object": "OBJECT", "exposure": "EXPTIME", "time": "DATE-OBS", "wave_plate": "PLATE"},
    "beam": [{"name": "a", "analyser": 0}, {"name": "b", "analyser": 90, "offset": [0, 62]}],
}


def small(change: Callable[[dict[str, Any]], object] = lambda tree: None) -> dict[str, Any]:
    tree = copy.deepcopy(SMALL)
    change(tree)
    return tree


def problems_of(tree: dict[str, Any]) -> list[str]:
    with pytest.raises(ConfigError) as caught:
        instrument_from_dict(tree)
    return caught.value.problems


def test_the_full_file_reads_as_written(tmp_path: Path) -> None:
    path = tmp_path / "instrument.toml"
    path.write_text(FULL, encoding="utf-8")
    (tmp_path / "bad.fits").touch()
    found = Instrument.read(path)
    assert found == read_instrument(str(path))
    assert (found.name, found.path) == ("Full", path)
    detector = found.detector
    assert (detector.gain, detector.read_noise, detector.saturation, detector.pixel_scale) == (1.5, 5.0, 60000.0, 0.4)
    assert (detector.trim, detector.overscan) == (Section(0, 2048, 0, 1024), Section(2048, 2080, 0, 1024))
    assert (detector.bad_pixels, detector.linearity) == (tmp_path / "bad.fits", (1.0, 1e-7))
    words = found.keywords
    assert words["kind"] == Keyword(("FRMKIND",))
    assert words["filter"] == Keyword(("WHEEL1", "WHEEL2"))
    assert words["time"] == Keyword(("DATE-OBS", "UT"), unit="h", format="isot")
    assert words["exposure"] == Keyword(("EXPTIME",), unit="ms")
    assert words["wave_plate"] == Keyword(("PLATE",), scale=-0.5, zero=3.0, pattern="pos([0-9]+)")
    assert words["ra"] == Keyword(("RA",), unit="hourangle", equinox=2000.0)
    assert words["dec"] == Keyword(("DEC",), equinox="EQUINOX")
    assert found.kinds == {
        "bias": ("bias", "zero"),
        "dark": ("dark",),
        "flat": ("skyflat",),
        "science": ("object", "flat"),
    }
    assert found.filters == {"Bess R 76": Band("R", 0.64)}
    assert found.clear_filters == ("clear", "open", "")
    plate = WavePlate({"V": 178.0, "R": 181.5}, 0.5, 12.5, -1, {"1": 0.0, "2": 22.5}, 0.5)
    assert found.wave_plate == plate
    assert found.beams[0] == Beam("ordinary", 0.0, section=Section(0, 2048, 0, 512))
    assert found.beams[1].offset == (10.0, 512.0)
    assert (found.beams[1].gain, found.beams[1].throughput, found.beams[1].extension) == (1.6, 0.97, "RIGHT")
    assert found.orientation == Orientation("altaz", "parallactic", -1, -1, "both")
    assert found.site == Site(-70.7, -29.3, 2300.0)


def test_the_smallest_file_has_the_defaults() -> None:
    found = instrument_from_dict(SMALL)
    assert found.kinds == {
        "bias": ("bias", "zero"),
        "dark": ("dark",),
        "flat": ("flat", "skyflat"),
        "science": ("object", "science", "light"),
    }
    assert found.clear_filters == ("clear", "open", "")
    assert found.wave_plate == WavePlate()
    assert found.orientation == Orientation()
    assert found.site is None
    assert found.beams == (Beam("a", 0.0), Beam("b", 90.0, (0.0, 62.0)))


def test_the_tree_is_left_as_it_is() -> None:
    tree = small()
    instrument_from_dict(tree)
    assert tree == SMALL


def test_without_plate_and_keyword_there_is_no_plate() -> None:
    assert instrument_from_dict(small(lambda tree: tree["keywords"].pop("wave_plate"))).wave_plate is None


def test_a_filter_named_like_a_clear_value_is_a_filter() -> None:
    found = instrument_from_dict(small(lambda tree: tree.update(filters={"Open": {"band": "R"}})))
    assert found.clear_filters == ("clear", "")


def test_numeric_plate_positions_are_taken() -> None:
    found = instrument_from_dict(small(lambda tree: tree.update(wave_plate={"values": {1: 0, 2: 22.5}})))
    assert found.wave_plate is not None
    assert found.wave_plate.values == {"1": 0.0, "2": 22.5}


@pytest.mark.parametrize("count", [1, 4])
def test_one_beam_and_four_beams_are_taken(count: int) -> None:
    beams = [{"name": str(k), "analyser": 45 * k, "offset": [0, 50 * k]} for k in range(count)]
    assert len(instrument_from_dict(small(lambda tree: tree.update(beam=beams))).beams) == count


def test_the_gain_may_come_from_a_keyword_or_from_every_beam() -> None:
    assert (
        instrument_from_dict(
            small(lambda tree: (tree.pop("detector"), tree["keywords"].update(gain="EGAIN")))
        ).detector.gain
        is None
    )
    found = instrument_from_dict(
        small(lambda tree: (tree.pop("detector"), [beam.update(gain=2) for beam in tree["beam"]]))
    )
    assert [beam.gain for beam in found.beams] == [2.0, 2.0]


@pytest.mark.parametrize(
    ("change", "start"),
    [
        (lambda t: t["detector"].pop("gain"), "detector.gain: missing"),
        (lambda t: t["detector"].update(trim="[0:5,1:5]"), 'detector.trim = "[0:5,1:5]"'),
        (lambda t: t["detector"].update(trim="[5:1,1:5]"), 'detector.trim = "[5:1,1:5]"'),
        (lambda t: t["detector"].update(linearity=[]), "detector.linearity = []"),
        (lambda t: t["detector"].update(linearity=[0.0, 1.0]), "detector.linearity = [0.0, 1.0]"),
        (lambda t: t["detector"].update(bad_pixels="no.fits"), 'detector.bad_pixels = "no.fits"'),
        (lambda t: t["detector"].update(extension=-1), "detector.extension = -1"),
        (lambda t: t["detector"].update(gain=0), "detector.gain = 0"),
        (lambda t: t["detector"].update(saturation=0.0), "detector.saturation = 0.0"),
        (lambda t: t["keywords"].pop("time"), "keywords.time: missing"),
        (lambda t: t["keywords"].update(object=["A", "B"]), 'keywords.object = ["A", "B"]'),
        (lambda t: t["keywords"].update(time=["A", "B", "C"]), 'keywords.time = ["A", "B", "C"]'),
        (
            lambda t: t["keywords"].update(time={"keyword": ["A", "B"], "format": "jd"}),
            'keywords.time.format = "jd": expected "isot"',
        ),
        (lambda t: t["keywords"].update(ra="RA"), "keywords.dec: missing"),
        (
            lambda t: t["keywords"].update(ra={"keyword": "RA", "equinox": 20}, dec="DEC"),
            "keywords.ra.equinox = 20: expected a year",
        ),
        (lambda t: t["keywords"].update(airmass={}), "keywords.airmass.keyword: missing"),
        (
            lambda t: t["keywords"].update(exposure={"keyword": "E", "unit": "deg"}),
            'keywords.exposure.unit = "deg": expected a unit that converts to s',
        ),
        (
            lambda t: t["keywords"].update(object={"keyword": "O", "pattern": "a(b)(c)"}),
            'keywords.object.pattern = "a(b)(c)"',
        ),
        (lambda t: t["keywords"].update(object={"keyword": "O", "pattern": "(("}), 'keywords.object.pattern = "(("'),
        (lambda t: t["keywords"].update(exposure={"keyword": "E", "scale": 0}), "keywords.exposure.scale = 0"),
        (lambda t: t["keywords"].pop("wave_plate") and t.update(wave_plate={}), "keywords.wave_plate: missing"),
        (lambda t: t.update(kinds={"bias": ["x y"], "dark": ["X-Y"]}), 'kinds.dark = "x-y"'),
        (lambda t: t.update(filters={"R": {"wavelength": 640}}), "filters.R.wavelength = 640"),
        (lambda t: t.update(wave_plate={"retardance": 360}), "wave_plate.retardance = 360"),
        (lambda t: t.update(wave_plate={"retardance": {"V": 0}}), "wave_plate.retardance.V = 0"),
        (lambda t: t.update(wave_plate={"sense": 1.0}), "wave_plate.sense = 1.0"),
        (lambda t: t.update(wave_plate={"scale": 0.0}), "wave_plate.scale = 0.0"),
        (lambda t: t.update(wave_plate={"tolerance": 0}), "wave_plate.tolerance = 0"),
        (lambda t: t.update(wave_plate={"values": {"a b": "x"}}), 'wave_plate.values."a b" = "x"'),
        (lambda t: t.update(beam=[]), "beam = []"),
        (lambda t: t["beam"][1].update(name="a"), 'beam[2].name = "a"'),
        (lambda t: t["beam"][1].update(analyser=180.0), "beam[2].analyser = 180.0"),
        (lambda t: t["beam"][1].update(offset=[0, 0]), "beam[2].offset = [0.0, 0.0]"),
        (lambda t: t["beam"][0].update(offset=[1, 0]), "beam[1].offset = [1.0, 0.0]"),
        (lambda t: t["beam"][0].update(throughput=0), "beam[1].throughput = 0"),
        (lambda t: t.update(orientation={"altitude": 2}), "orientation.altitude = 2"),
        (lambda t: t.update(orientation={"frame": "both"}), 'orientation.frame = "both": expected a table [site]'),
        (
            lambda t: t.update(orientation={"position_angle": "parallactic"}),
            'orientation.position_angle = "parallactic": expected a table [site]',
        ),
        (
            lambda t: t.update(orientation={"position_angle": "paralactic"}),
            'orientation.position_angle = "paralactic": expected a number (deg) or "parallactic"; did you mean',
        ),
        (lambda t: t.update(site={"longitude": 0, "latitude": 91}), "site.latitude = 91"),
    ],
)
def test_an_impossible_value_is_refused_with_its_place(change: Callable[[dict[str, Any]], Any], start: str) -> None:
    (line,) = problems_of(small(change))
    assert line.startswith(start)


def test_problems_of_all_sections_come_at_once(tmp_path: Path) -> None:
    path = tmp_path / "instrument.toml"
    (tmp_path / "bad.fits").touch()
    text = FULL.replace("gain = 1.5", "gian = 1.5").replace('"altaz"', '"altas"').replace("-29.3", '"-29.3"')
    path.write_text(text.replace("analyser = 90.0", "analyser = 180.0"), encoding="utf-8")
    with pytest.raises(ConfigError) as caught:
        read_instrument(path)
    assert str(caught.value).startswith(f"4 problems in {path}:\n")
    assert [line.split(" = ")[0] for line in caught.value.problems] == [
        "detector.gian",
        "orientation.mount",
        "site.latitude",
        "beam[2].analyser",
    ]


def place_of(tree: dict[str, Any], name: str, value: object) -> str:
    """Put `value` at a dotted key of the tree, making tables on the way; return its place in messages."""
    *parents, last = name.replace("*", "free").split(".")
    place = []
    for parent in parents:
        inner = tree.get(parent)
        if parent == "beam":
            tree, parent = tree["beam"][0], "beam[1]"
        else:
            tree[parent] = inner if isinstance(inner, dict) else {}
            if "keyword" not in tree[parent] and place == ["keywords"]:
                tree[parent]["keyword"] = "WORD"
            tree = tree[parent]
        place.append(parent)
    tree[last] = value
    return ".".join([*place, last])


@pytest.mark.parametrize("name", known_keys())
def test_the_wrong_type_is_refused_for_every_key(name: str) -> None:
    tree = small(lambda tree: tree.update(site={"longitude": 0, "latitude": 0}))
    place = place_of(tree, name, datetime.time(12, 0))
    lines = problems_of(tree)
    assert f"{place} = 12:00:00: expected {known_keys()[name].expected}" in lines
    assert all("\n" not in line for line in lines)


OWN_NAMES = ("filters", "wave_plate.retardance", "wave_plate.values")  # tables whose keys the user names


@pytest.mark.parametrize("name", [name for name in known_keys() if name.rpartition(".")[0] not in OWN_NAMES])
def test_a_misspelling_is_refused_for_every_key_and_the_key_named(name: str) -> None:
    tree = small(lambda tree: tree.update(site={"longitude": 0, "latitude": 0}))
    parent, _, last = name.rpartition(".")
    place = place_of(tree, f"{parent}.{last}x" if parent else f"{last}x", 1)
    (line,) = [line for line in problems_of(tree) if line.startswith(f"{place} = 1: unknown key")]
    assert line.endswith(f'did you mean "{last}"?')


def test_every_key_has_a_sentence_of_help() -> None:
    for name, info in known_keys().items():
        assert info.help.endswith("."), name
        assert info.expected, name


VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(max_size=8)
    | st.sampled_from(["[1:2,1:2]", "parallactic", "deg", "(a)", ".", datetime.date(2026, 1, 1), 10**400]),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=4), inner, max_size=3),
    max_leaves=6,
)


@settings(deadline=None, max_examples=300)
@given(st.dictionaries(st.sampled_from(list(known_keys())), VALUES, min_size=1, max_size=4))
def test_arbitrary_values_are_taken_or_refused_but_never_crash(changes: dict[str, Any]) -> None:
    tree = small()
    for name in sorted(changes, key=lambda name: -name.count(".")):
        place_of(tree, name, changes[name])
    try:
        found = [instrument_from_dict(tree).name]
    except ConfigError as error:
        found = error.problems
    assert found
    assert all("\n" not in line for line in found if line != tree["name"])
