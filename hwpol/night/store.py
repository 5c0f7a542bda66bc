"""Finished visits kept between runs, so that a run that was stopped resumes where it was."""

from __future__ import annotations

import hashlib
import pickle
from dataclasses import fields, is_dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

from hwpol.night.visit import VisitResult, VisitTask
from hwpol.products import whole

#: Raised when a visit is reduced differently, so that stored ones are not taken for new ones.
RECIPE = 4


def fingerprint(task: VisitTask) -> str:
    """Digest of everything that a visit's result depends on: files (name, size, time), options, instrument."""
    digest = hashlib.blake2b(digest_size=16)
    files = [str(name) for name in task.frames.table["file"]]
    calibrations = task.calibrator.frames.table
    files += [
        str(row["file"]) for row in calibrations if row["kind"] in {"bias", "dark", "flat"} and row["status"] == "used"
    ]
    for name in sorted(files):
        stat = Path(name).stat()
        digest.update(f"{name} {stat.st_size} {stat.st_mtime_ns}\n".encode())
    parts = [RECIPE, version("hwpol"), task.number, task.targets, task.photometry, task.registration, task.hits,
             task.method, task.gain, task.calibrator.flat, task.calibrator.cosmic_rays]  # fmt: skip
    digest.update(repr(parts).encode())
    digest.update(repr(task.frames.instrument).encode())
    for column in ("psi", "chi", "eta", "cycle", "mjd", "exposure"):
        digest.update(task.frames.column(column).tobytes())
    return digest.hexdigest()


def load(folder: Path, key: str) -> VisitResult | None:
    """A stored visit; None where there is none or it cannot be read."""
    path = folder / f"{key}.visit"
    try:
        with path.open("rb") as stream:
            result = pickle.load(stream)
    except (OSError, pickle.UnpicklingError, EOFError, AttributeError, ImportError, IndexError):
        return None
    return result if isinstance(result, VisitResult) else None


def save(folder: Path, key: str, result: VisitResult) -> None:
    """Keep a visit."""
    with whole(folder / f"{key}.visit") as temporary, temporary.open("wb") as stream:
        pickle.dump(result, stream, protocol=pickle.HIGHEST_PROTOCOL)


def plain_tree(value: Any) -> Any:
    """Configuration objects as plain lists, dicts and text, for run.json."""
    if is_dataclass(value) and not isinstance(value, type):
        return {f.name: plain_tree(getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, dict):
        return {str(key): plain_tree(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain_tree(item) for item in value]
    if isinstance(value, Path):
        return value.as_posix()
    return value if isinstance(value, str | int | float | bool | type(None)) else str(value)
