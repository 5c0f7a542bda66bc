"""The night file: what it means and what is refused."""

from __future__ import annotations

import copy
import datetime
from collections.abc import Callable
from dataclasses import fields
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from hwpol.errors import ConfigError, HwpolWarning
from hwpol.night.config import (
    CorrectionConfig,
    DemodulationConfig,
    DetectorConfig,
    Extent,
    ForegroundConfig,
    GroupingConfig,
    MapConfig,
    MapSky,
    NightConfig,
    PhotometryConfig,
    ProductsConfig,
    RegistrationConfig,
    StatisticsConfig,
    TargetConfig,
    frame_paths,
    known_keys,
    night_from_dict,
    read_night,
)
from hwpol.night.config_keys import NIGHT

INSTRUMENT = """
name = "Small"
detector = {gain = 1.0}
keywords = {object = "OBJECT", exposure = "EXPTIME", time = "DATE-OBS", wave_plate = "PLATE"}
[[beam]]
name = "a"
analyser = 0
"""
SECOND_BEAM = """
[[beam]]
name = "b"
analyser = 90
offset = [0, 62]
"""

FULL = """
instrument = "instrument.toml"
frames = ["raw/*.fits"]
exclude = ["*_test.fits"]
output = "reduced"

[grouping]
gap = 30

[detector]
flat = "per-angle"
cosmic_rays = "frames"

[registration]
method = "correlation"

[photometry]
radius = "2.0 fwhm"
annulus = [15, 25.5]
sources = "field"

[demodulation]
method = "double-ratio"
gain = "cycle"
circular = true

[correction]
calibration = "../other.toml"
catalogues = ["mine.ecsv"]
efficiency = {V = 0.98, R = 1}
field_order = "best"

[correction.foreground]
method = "value"
q = 0.01
u = -0.02
q_err = 0.001
u_err = 0

[statistics]
estimator = "mode"
level = 0.95

[products]
formats = ["ecsv", "fits", "votable"]
report = false

[[target]]
name = "Star A"
object = "field 1"
role = "zero-polarised"
catalogue = "HD 1"
ra = 10
dec = -20.5
xy = [512.3, 498]
moving = true
[[target]]
name = "Star B"

[[map]]
target = "Star A"
size = 100
bin = 2
sky = {object = "blank"}
[[map]]
target = "Star B"
box = [0, 10, 5, 20]
snr = 5
sky = [1.5, 2, 3]
[[map]]
target = "Star B"
"""

SMALL: dict[str, Any] = {"instrument": "instrument.toml", "frames": ["raw/*.fits"], "output": "reduced"}


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder with an instrument file, frames and the other files that the examples name."""
    base = tmp_path_factory.mktemp("base")
    night = base / "night [1]"
    (night / "raw" / "deep").mkdir(parents=True)
    (night / "instrument.toml").write_text(INSTRUMENT + SECOND_BEAM, encoding="utf-8")
    (night / "single.toml").write_text(INSTRUMENT, encoding="utf-8")
    (night / "broken.toml").write_text(INSTRUMENT.replace("gain", "gian"), encoding="utf-8")
    (base / "other.toml").touch()
    (night / "mine.ecsv").touch()
    for name in ("b.fits", "a.fits", "c_test.fits", "notes.txt", "deep/d.fits"):
        (night / "raw" / name).touch()
    return night


def small(change: Callable[[dict[str, Any]], object] = lambda tree: None) -> dict[str, Any]:
    tree = copy.deepcopy(SMALL)
    change(tree)
    return tree


def problems_of(tree: dict[str, Any], folder: Path) -> list[str]:
    with pytest.raises(ConfigError) as caught:
        night_from_dict(tree, folder=folder)
    return caught.value.problems


def test_the_full_file_reads_as_written(folder: Path) -> None:
    path = folder / "night.toml"
    path.write_text(FULL, encoding="utf-8")
    found = read_night(path)
    assert found == NightConfig(
        instrument_path=folder / "instrument.toml",
        instrument=found.instrument,
        frames=("raw/*.fits",),
        output=folder / "reduced",
        exclude=("*_test.fits",),
        grouping=GroupingConfig(30.0),
        detector=DetectorConfig("per-angle", "frames"),
        registration=RegistrationConfig("correlation"),
        photometry=PhotometryConfig(Extent(2.0, "fwhm"), (Extent(15.0), Extent(25.5)), "field"),
        demodulation=DemodulationConfig("double-ratio", "cycle", True),
        correction=CorrectionConfig(
            folder.parent / "other.toml",
            (folder / "mine.ecsv",),
            {"V": 0.98, "R": 1.0},
            "best",
            ForegroundConfig("value", 0.01, -0.02, 0.001, 0.0),
        ),
        statistics=StatisticsConfig("mode", 0.95),
        products=ProductsConfig(("ecsv", "fits", "votable"), False),
        targets=(
            TargetConfig("Star A", "field 1", "zero-polarised", "HD 1", 10.0, -20.5, (512.3, 498.0), True),
            TargetConfig("Star B"),
        ),
        maps=(
            MapConfig("Star A", 100, None, 2, None, MapSky("object", object="blank")),
            MapConfig("Star B", None, (0, 10, 5, 20), None, 5.0, MapSky("circle", circle=(1.5, 2.0, 3.0))),
            MapConfig("Star B"),
        ),
        folder=folder,
        path=path,
    )
    assert found.instrument.path == folder / "instrument.toml"
    assert [beam.name for beam in found.instrument.beams] == ["a", "b"]


def test_the_smallest_file_has_the_defaults_of_the_objects(folder: Path) -> None:
    found = night_from_dict(SMALL, folder=folder)
    bare = NightConfig(found.instrument_path, found.instrument, ("raw/*.fits",), folder / "reduced", folder=folder)
    assert found == bare
    assert found.photometry.radius == Extent(0.0, "best")


def test_every_key_has_its_place_in_the_objects() -> None:
    for key in NIGHT.keys:
        name = {"instrument": "instrument_path", "target": "targets", "map": "maps"}.get(key.name, key.name)
        assert name in {item.name for item in fields(NightConfig)}


def test_extents_turn_into_pixels() -> None:
    assert Extent(2.0, "fwhm").pixels(3.0) == 6.0
    assert Extent(2.0).pixels(3.0) == 2.0
    with pytest.raises(ValueError, match="best"):
        Extent(0.0, "best").pixels(3.0)
    assert [str(extent) for extent in (Extent(2.0, "fwhm"), Extent(2.5), Extent(0.0, "best"))] == [
        "2 fwhm",
        "2.5",
        "best",
    ]


@pytest.mark.parametrize(
    ("change", "start"),
    [
        (lambda t: t.pop("frames"), "frames: missing"),
        (lambda t: t.pop("output"), "output: missing"),
        (lambda t: t.pop("instrument"), "instrument: missing"),
        (lambda t: t.update(instrument="no.toml"), 'instrument = "no.toml": expected an existing instrument file'),
        (lambda t: t.update(frames="raw/*.fits"), 'frames = "raw/*.fits": expected a list'),
        (lambda t: t.update(frames=[]), "frames = []"),
        (lambda t: t.update(output="."), 'output = ".": expected a folder of its own'),
        (lambda t: t.update(output=".."), 'output = "..": expected a folder of its own'),
        (lambda t: t.update(output="mine.ecsv"), 'output = "mine.ecsv": expected the path of a folder'),
        (lambda t: t.update(grouping={"gap": 0}), "grouping.gap = 0"),
        (
            lambda t: t.update(photometry={"radius": -2}),
            'photometry.radius = -2: expected pixels > 0, "best", or a multiple of fwhm such as "2.0 fwhm"',
        ),
        (lambda t: t.update(photometry={"radius": "0 fwhm"}), 'photometry.radius = "0 fwhm"'),
        (lambda t: t.update(photometry={"radius": "6.0"}), 'photometry.radius = "6.0"'),
        (lambda t: t.update(photometry={"annulus": ["best", 5]}), 'photometry.annulus[1] = "best"'),
        (lambda t: t.update(photometry={"annulus": [5]}), "photometry.annulus = [5]"),
        (lambda t: t.update(photometry={"annulus": [5, 5]}), "photometry.annulus = [5.0, 5.0]"),
        (lambda t: t.update(photometry={"radius": 6, "annulus": [5, 9]}), "photometry.annulus = [5.0, 9.0]"),
        (lambda t: t.update(photometry={"radius": "5 fwhm"}), 'photometry.annulus = ["4 fwhm", "6 fwhm"]'),
        (lambda t: t.update(photometry={"anulus": [1, 2]}), "photometry.anulus = [1, 2]: unknown key"),
        (lambda t: t.update(correction={"calibration": "fti"}), 'correction.calibration = "fti"'),
        (lambda t: t.update(correction={"catalogues": ["x.ecsv"]}), 'correction.catalogues[1] = "x.ecsv"'),
        (lambda t: t.update(correction={"efficiency": 98.5}), "correction.efficiency = 98.5"),
        (lambda t: t.update(correction={"efficiency": {"V": 0}}), "correction.efficiency.V = 0"),
        (lambda t: t.update(correction={"field_order": -1}), "correction.field_order = -1"),
        (
            lambda t: t.update(correction={"foreground": {"method": "value", "q": 0, "u": 0, "q_err": 0}}),
            "correction.foreground.u_err: missing",
        ),
        (lambda t: t.update(correction={"foreground": {"q": 0.1}}), "correction.foreground.q = 0.1"),
        (lambda t: t.update(statistics={"level": 1}), "statistics.level = 1"),
        (lambda t: t.update(products={"formats": ["csv"]}), 'products.formats[1] = "csv"'),
        (lambda t: t.update(target=[{}]), "target[1].name: missing"),
        (lambda t: t.update(target=[{"name": "-"}]), 'target[1].name = "-"'),
        (lambda t: t.update(target=[{"name": "a", "role": "polarized"}]), 'target[1].role = "polarized"'),
        (lambda t: t.update(target=[{"name": "a", "ra": 1}]), "target[1].dec: missing"),
        (lambda t: t.update(target=[{"name": "a", "ra": 360, "dec": 0}]), "target[1].ra = 360"),
        (lambda t: t.update(target=[{"name": "a", "xy": [-1, 0]}]), "target[1].xy[1] = -1"),
        (lambda t: t.update(target=[{"name": "HD 1"}, {"name": "hd-1"}]), 'target[2].name = "hd-1"'),
        (lambda t: t.update(map=[{"target": "a", "size": 2, "box": [0, 1, 0, 1]}]), "map[1].box = [0, 1, 0, 1]"),
        (lambda t: t.update(map=[{"target": "a", "box": [1, 1, 0, 1]}]), "map[1].box = [1, 1, 0, 1]"),
        (lambda t: t.update(map=[{"target": "a", "bin": 2, "snr": 5}]), "map[1].snr = 5.0"),
        (lambda t: t.update(map=[{"target": "a", "sky": [1, 2]}]), "map[1].sky = [1, 2]"),
        (
            lambda t: t.update(instrument="single.toml", demodulation={"method": "double-ratio"}),
            'demodulation.method = "double-ratio": expected "least-squares"',
        ),
    ],
)
def test_an_impossible_value_is_refused_with_its_place(
    folder: Path, change: Callable[[dict[str, Any]], Any], start: str
) -> None:
    (line,) = problems_of(small(change), folder)
    assert line.startswith(start)


def test_two_targets_of_one_name_may_lie_in_two_places(folder: Path) -> None:
    targets = [{"name": "a"}, {"name": "A", "object": "b"}, {"name": "a", "xy": [1, 2]}]
    assert len(night_from_dict(small(lambda tree: tree.update(target=targets)), folder=folder).targets) == 3


def test_problems_of_both_files_come_at_once(folder: Path) -> None:
    path = folder / "bad.toml"
    path.write_text(FULL.replace('"instrument.toml"', '"broken.toml"').replace("gap", "gab"), encoding="utf-8")
    with pytest.raises(ConfigError) as caught:
        read_night(path)
    assert str(caught.value).startswith(f"3 problems in {path}:\n")
    assert [line.partition(" = ")[0] for line in caught.value.problems[:2]] == [
        "grouping.gab",
        "broken.toml: detector.gian",
    ]
    assert caught.value.problems[2].startswith("broken.toml: detector.gain: missing")


def test_frames_are_found_sorted_once_and_not_in_the_output(folder: Path) -> None:
    config = night_from_dict(
        small(lambda tree: tree.update(frames=["raw/*.fits", "raw/a.fits", "**/*.fits"], output="raw/deep")),
        folder=folder,
    )
    assert frame_paths(config) == [folder / "raw" / name for name in ("a.fits", "b.fits", "c_test.fits")]
    absolute = small(lambda tree: tree.update(frames=[str(folder.parent / "night*" / "raw" / "a.*")]))
    assert frame_paths(night_from_dict(absolute, folder=folder)) == [folder / "raw" / "a.fits"]


def test_a_pattern_without_match_is_named(folder: Path) -> None:
    with pytest.raises(ConfigError, match=r'frames = "raw/\*.fit": matches no file in '):
        frame_paths(night_from_dict(small(lambda tree: tree.update(frames=["raw/*.fit"])), folder=folder))
    with pytest.raises(ConfigError, match="matches no file"):
        frame_paths(night_from_dict(small(lambda tree: tree.update(frames=["raw\0/*.fits"])), folder=folder))
    config = night_from_dict(small(lambda tree: tree.update(frames=["raw/*.fit", "raw/a.fits"])), folder=folder)
    with pytest.warns(HwpolWarning, match=r'frames = "raw/\*.fit"'):
        assert frame_paths(config) == [folder / "raw" / "a.fits"]


def place_of(tree: dict[str, Any], name: str, value: object) -> str:
    """Put `value` at a dotted key of the tree, making tables on the way; return its place in messages."""
    *parents, last = name.replace("*", "free").split(".")
    place = []
    for parent in parents:
        inner = tree.get(parent)
        if parent in ("target", "map"):
            needed = {"name": "a"} if parent == "target" else {"target": "a"}
            tree[parent] = inner if isinstance(inner, list) and inner and isinstance(inner[0], dict) else [needed]
            tree, parent = tree[parent][0], f"{parent}[1]"
        else:
            tree[parent] = inner if isinstance(inner, dict) else {}
            tree = tree[parent]
        place.append(parent)
    tree[last] = value
    return ".".join([*place, last])


@pytest.mark.parametrize("name", known_keys())
def test_the_wrong_type_is_refused_for_every_key(folder: Path, name: str) -> None:
    tree = small()
    place = place_of(tree, name, datetime.time(12, 0))
    (line,) = problems_of(tree, folder)
    assert line == f"{place} = 12:00:00: expected {known_keys()[name].expected}"


@pytest.mark.parametrize("name", [name for name in known_keys() if not name.startswith("correction.efficiency.")])
def test_a_misspelling_is_refused_for_every_key_and_the_key_named(folder: Path, name: str) -> None:
    tree = small()
    parent, _, last = name.rpartition(".")
    place = place_of(tree, f"{parent}.{last}x" if parent else f"{last}x", 1)
    (line,) = [line for line in problems_of(tree, folder) if line.startswith(f"{place} = 1: unknown key")]
    assert line.endswith(f'did you mean "{last}"?')


def test_all_wrong_keys_are_listed_at_once(folder: Path) -> None:
    leaves = [name for name in known_keys() if not any(other.startswith(f"{name}.") for other in known_keys())]
    tree = small()
    places = [place_of(tree, name, datetime.time(12, 0)) for name in leaves]
    found = [line.partition(" = ")[0] for line in problems_of(tree, folder)]
    assert sorted(found) == sorted(places)


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
    | st.sampled_from(["2 fwhm", "best", "fit", "border", ".", "a\0b", datetime.date(2026, 1, 1), 10**400]),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=4), inner, max_size=3),
    max_leaves=6,
)


@settings(deadline=None, max_examples=300, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(changes=st.dictionaries(st.sampled_from(list(known_keys())), VALUES, min_size=1, max_size=4))
def test_arbitrary_values_are_taken_or_refused_but_never_crash(folder: Path, changes: dict[str, Any]) -> None:
    tree = small()
    for name in sorted(changes, key=lambda name: -name.count(".")):
        place_of(tree, name, changes[name])
    try:
        found = [night_from_dict(tree, folder=folder).instrument.name]
    except ConfigError as error:
        found = error.problems
    assert found
    assert all("\n" not in line for line in found)
