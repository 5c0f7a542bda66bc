"""The products of a night, written whole or not at all."""

from __future__ import annotations

import hashlib
import json
import platform
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path, PurePath
from typing import Any

import numpy as np

from hwpol.night.config_objects import NightConfig
from hwpol.night.diagnosis import visit_file
from hwpol.night.results import Answer
from hwpol.night.store import plain_tree
from hwpol.products import FORMATS, write_table, write_text, write_visit

LIBRARIES = ("hwpol", "numpy", "scipy", "astropy", "photutils", "scikit-image")


def write_products(config: NightConfig, answer: Answer) -> list[Path]:
    """Write tables, visits, calibration and provenance into the output folder; return what was written."""
    folder = config.output
    written = []
    for name in ("results", "cycles", "frames", "standards", "checks"):
        for form in dict.fromkeys(("ecsv", *config.products.formats)):
            written.append(write_table(getattr(answer, name), folder / f"{name}{FORMATS[form]}"))
    if answer.calibration is not None:
        answer.calibration.write(folder / "calibration.toml")
        written.append(folder / "calibration.toml")
    written += _write_visits(config, answer)
    write_text(folder / "run.json", json.dumps(_provenance(config, answer), indent=1, sort_keys=True) + "\n")
    return [*written, folder / "run.json"]


def _write_visits(config: NightConfig, answer: Answer) -> list[Path]:
    """A file for each visit, and none for visits of an earlier run that are no more."""
    folder = config.output / "visits"
    numbers, names = np.asarray(answer.frames["visit"]), np.asarray(answer.frames["file"])
    written = []
    for visit in answer.visits:
        calibration = answer.calibration
        known = calibration is not None and visit.filter in calibration.filters
        files = {PurePath(name).name: str(name) for name in names[numbers == visit.task_number]}
        listed = tuple(files.get(PurePath(name).name, name) for name in visit.fluxes.frames)
        path = folder / f"visit_{visit.task_number:03d}.fits"
        written.append(write_visit(visit_file(config, visit, listed, calibration if known else None), path))
    for old in set(folder.glob("visit_*.fits")) - set(written):
        old.unlink()
    return written


def _provenance(config: NightConfig, answer: Answer) -> dict[str, Any]:
    versions = {"python": platform.python_version()}
    for name in LIBRARIES:
        try:
            versions[name] = version(name)
        except PackageNotFoundError:
            versions[name] = "unknown"
    inputs = {}
    for file in answer.frames["file"]:
        path = Path(file) if Path(file).is_absolute() else config.folder / str(file)
        inputs[str(file)] = _checksum(path)
    return {
        "versions": versions,
        "configuration": plain_tree(config),
        "inputs": inputs,
        "notes": list(answer.notes),
        "seconds": round(answer.seconds, 3),
    }


def _checksum(path: Path) -> str:
    digest = hashlib.sha256()
    try:
        with path.open("rb") as stream:
            while block := stream.read(1 << 20):
                digest.update(block)
    except OSError:
        return "unreadable"
    return digest.hexdigest()
