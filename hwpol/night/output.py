"""The products of a night, written whole or not at all."""

from __future__ import annotations

import hashlib
import json
import platform
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from hwpol.night.config_objects import NightConfig
from hwpol.night.results import Answer
from hwpol.night.store import plain_tree
from hwpol.products import FORMATS, write_table, write_text

LIBRARIES = ("hwpol", "numpy", "scipy", "astropy", "photutils", "scikit-image")


def write_products(config: NightConfig, answer: Answer) -> list[Path]:
    """Write tables, calibration and provenance into the output folder; return what was written."""
    folder = config.output
    written = []
    for name in ("results", "cycles", "frames", "standards"):
        for form in dict.fromkeys(("ecsv", *config.products.formats)):
            written.append(write_table(getattr(answer, name), folder / f"{name}{FORMATS[form]}"))
    if answer.calibration is not None:
        answer.calibration.write(folder / "calibration.toml")
        written.append(folder / "calibration.toml")
    write_text(folder / "run.json", json.dumps(_provenance(config, answer), indent=1, sort_keys=True) + "\n")
    return [*written, folder / "run.json"]


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
