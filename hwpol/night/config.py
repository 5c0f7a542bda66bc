"""Reads and checks the night file."""

from __future__ import annotations

import glob
import os
import warnings
from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

from hwpol.errors import ConfigError, HwpolWarning
from hwpol.instrument.description import Instrument
from hwpol.instrument.reading import read_instrument
from hwpol.instrument.toml_check import KeyInfo, Problems, known_keys_of, read_toml, read_tree
from hwpol.night.config_keys import NIGHT
from hwpol.night.config_objects import (
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
)

__all__ = [
    "CorrectionConfig",
    "DemodulationConfig",
    "DetectorConfig",
    "Extent",
    "ForegroundConfig",
    "GroupingConfig",
    "MapConfig",
    "MapSky",
    "NightConfig",
    "PhotometryConfig",
    "ProductsConfig",
    "RegistrationConfig",
    "StatisticsConfig",
    "TargetConfig",
    "frame_paths",
    "known_keys",
    "night_from_dict",
    "read_night",
]


@cache
def known_keys() -> dict[str, KeyInfo]:
    """Return all keys of the night file by dotted name; ``*`` stands for a name of the user's choice."""
    return known_keys_of(NIGHT)


def read_night(path: str | Path) -> NightConfig:
    """Read and check a night file and the instrument file it names.

    Relative paths and patterns in it start at its folder.

    Raises
    ------
    ConfigError
        With a line for each problem of either file; those of the instrument file begin with its name.
    """
    tree = read_toml(path)
    absolute = Path(os.path.abspath(path))
    return replace(night_from_dict(tree, source=str(path), folder=absolute.parent), path=absolute)


def night_from_dict(tree: Mapping[str, Any], source: str = "", folder: Path | None = None) -> NightConfig:
    """Check a tree laid out as a night file and return the configuration.

    Parameters
    ----------
    tree : mapping
        The content of the file; left as it is.
    source : str
        Named in messages.
    folder : Path, optional
        Where relative paths and patterns start; the working folder by default.

    Raises
    ------
    ConfigError
        With a line for each problem of the tree and of the instrument file it names.
    """
    start = Path(os.path.abspath(folder or Path()))
    instruments: list[Instrument] = []

    def rule(values: dict[str, Any], place: str, problems: Problems) -> None:
        if NIGHT.rule is not None:
            NIGHT.rule(values, place, problems)
        if "output" in values:
            _check_output(values["output"], start, tree, problems)
        if "instrument" in values:
            try:
                instruments.append(read_instrument(values["instrument"]))
            except ConfigError as error:
                problems.lines += [f"{tree['instrument']}: {line}" for line in error.problems]
        demodulation = values.get("demodulation")
        if instruments and demodulation and demodulation.method != "least-squares" and len(instruments[0].beams) < 2:
            problems.add("demodulation.method", demodulation.method, '"least-squares", as the instrument has one beam')

    def build(values: dict[str, Any]) -> NightConfig:
        path, targets, maps = (values.pop(name) for name in ("instrument", "target", "map"))
        return NightConfig(
            instrument_path=path, instrument=instruments[0], targets=targets, maps=maps, folder=start, **values
        )

    config: NightConfig = read_tree(replace(NIGHT, rule=rule, build=build), tree, source=source, folder=start)
    return config


def _check_output(output: Path, start: Path, tree: Mapping[str, Any], problems: Problems) -> None:
    if os.path.isfile(output):
        problems.add("output", tree["output"], f"the path of a folder; {output} is a file")
    elif output == start or output in start.parents:
        problems.add(
            "output", tree["output"], 'a folder of its own, below or beside that of the night file, as "reduced"'
        )


def frame_paths(config: NightConfig) -> list[Path]:
    """Return the files that the patterns of `frames` match: absolute, sorted, each once, none from the output folder.

    Files matched by `exclude` are among them: they are to be listed as set aside. A pattern that matches nothing is
    warned of.

    Raises
    ------
    ConfigError
        Where no pattern matches a file.
    """
    found: set[Path] = set()
    empty = []
    for pattern in config.frames:
        where = os.path.join(glob.escape(str(config.folder)), os.path.expanduser(pattern))
        try:
            names = [name for name in glob.iglob(where, recursive=True) if os.path.isfile(name)]
        except ValueError:  # a NUL in the pattern
            names = []
        paths = [Path(os.path.abspath(name)) for name in names]
        matches = [path for path in paths if config.output not in path.parents]
        found.update(matches)
        if not matches:
            empty.append(pattern)
    source = str(config.path or "")
    if not found:
        hidden = [
            path for pattern in config.frames for path in config.folder.glob(pattern) if config.output in path.parents
        ]
        if hidden:
            raise ConfigError(
                f'output = "{config.output.name}": holds the raw frames themselves ({hidden[0].name}, ...); '
                "give a folder of its own",
                source,
            )
        raise ConfigError([f'frames = "{pattern}": matches no file in {config.folder}' for pattern in empty], source)
    for pattern in empty:
        warnings.warn(f'frames = "{pattern}": matches no file in {config.folder}', HwpolWarning, stacklevel=2)
    return sorted(found)
