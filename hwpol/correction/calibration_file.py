"""``calibration.toml``: reading and writing, with the same numbers both ways."""

from __future__ import annotations

import json
import os
import tempfile
import tomllib
from pathlib import Path
from typing import Any

import numpy as np

from hwpol.correction.calibration import Calibration
from hwpol.correction.model import FRAMES, FilterModel, describe
from hwpol.errors import ConfigError
from hwpol.flags import Flag, flag_names

SCHEMA = 1


def _text(value: Any) -> str:
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, bool | int | np.integer):
        return str(value).lower() if isinstance(value, bool) else str(int(value))
    if isinstance(value, float | np.floating):
        return repr(float(value)) if np.isfinite(value) else {np.inf: "inf", -np.inf: "-inf"}.get(float(value), "nan")
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {_text(item)}" for key, item in value.items()) + "}"
    return "[" + ", ".join(_text(item) for item in value) + "]"


def _filter_lines(model: FilterModel) -> list[str]:
    headline = {k: v for k, v in describe(model).items() if not (k.endswith("_err") and np.isnan(v))}
    entries: dict[str, Any] = {
        **headline,
        "parameters": list(model.names),
        "values": model.values.tolist(),
        "covariance": model.covariance.tolist(),
        "held": list(model.held),
        "field_range": model.field_range.tolist(),
        "frame": model.frame,
        "epoch": model.epoch,
        "mjd": list(model.mjd),
        "chi2": model.chi2,
        "dof": model.dof,
        "scatter": list(model.scatter),
        "used": list(model.used),
        "left_out": [{"name": name, "reason": reason} for name, reason in model.left_out],
        "flags": flag_names(model.flags),
    }
    return [f"{key} = {_text(value)}" for key, value in entries.items()]


def write_calibration(calibration: Calibration, path: str | Path) -> None:
    """Write a calibration to `path`; an interrupted write leaves the old file as it was."""
    lines = [
        f"schema = {SCHEMA}",
        f"instrument = {_text(calibration.instrument)}",
        f"nights = {_text(list(calibration.nights))}",
        f"mjd = {_text(list(calibration.mjd))}",
    ]
    for name, model in calibration.filters.items():
        lines += ["", f"[filters.{_text(name)}]", *_filter_lines(model)]
    target = Path(path)
    handle, temporary = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.", suffix=".part")
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as stream:
            stream.write("\n".join(lines) + "\n")
        Path(temporary).chmod(0o644)
        os.replace(temporary, target)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise


def _array(entry: dict[str, Any], key: str, shape: tuple[int, ...], place: str, problems: list[str]) -> Any:
    try:
        array = np.array(entry[key], dtype=float)
    except (KeyError, ValueError, TypeError):
        array = np.zeros(0)
    if array.shape != shape:
        problems.append(f"{place}.{key}: expected numbers of shape {shape}")
        return np.zeros(shape)
    return array


def _read_filter(name: str, entry: Any, problems: list[str]) -> FilterModel | None:
    place = f"filters.{name}"
    if not isinstance(entry, dict):
        problems.append(f"{place}: expected a table")
        return None
    names = entry.get("parameters")
    if not isinstance(names, list) or names[-2:] != ["a_re", "a_im"] or not all(_known(n) for n in names):
        problems.append(f'{place}.parameters: expected names such as ["ip_q", "ip_u", "a_re", "a_im"], A last')
        return None
    frame = entry.get("frame", "instrument")
    if frame not in FRAMES:
        problems.append(f"{place}.frame = {frame!r}: expected one of {', '.join(map(repr, FRAMES))}")
    size = len(names)
    values = _array(entry, "values", (size,), place, problems)
    covariance = _array(entry, "covariance", (size, size), place, problems)
    if not np.all(np.isfinite(values)) or not np.allclose(covariance, covariance.T, rtol=1e-9, atol=0):
        problems.append(f"{place}: values must be finite and the covariance symmetric")
    if values[-2:].any() == 0:
        problems.append(f"{place}.values: a_re and a_im are both 0, expected the efficiency and zero angle")
    entry = {"field_range": [[-1.0, 1.0], [-1.0, 1.0]], "mjd": [np.nan, np.nan], "scatter": [0.0, 0.0], **entry}
    flags = Flag(0)
    for flag in entry.get("flags", []):
        if str(flag).upper() not in Flag.__members__:
            problems.append(f"{place}.flags: {flag!r} is not a flag")
        else:
            flags |= Flag[str(flag).upper()]
    limits, mjd = _array(entry, "field_range", (2, 2), place, problems), _array(entry, "mjd", (2,), place, problems)
    scatter = _array(entry, "scatter", (2,), place, problems)
    return FilterModel(
        names=tuple(names),
        values=values,
        covariance=covariance,
        field_range=limits,
        epoch=float(entry.get("epoch", float("nan"))),
        frame=frame,
        held=tuple(entry.get("held", ())),
        chi2=float(entry.get("chi2", float("nan"))),
        dof=int(entry.get("dof", 0)),
        scatter=(float(scatter[0]), float(scatter[1])),
        used=tuple(entry.get("used", ())),
        left_out=tuple((str(item["name"]), str(item["reason"])) for item in entry.get("left_out", ())),
        mjd=(float(mjd[0]), float(mjd[1])),
        flags=int(flags),
    )


def _known(name: Any) -> bool:
    if name in {"a_re", "a_im"}:
        return True
    home, part, *rest = str(name).split("_")[:3] if str(name).count("_") in {1, 2} else ("", "")
    return home in {"ip", "tel"} and part in {"q", "u"} and (not rest or set(rest[0]) <= set("xy") or rest[0] == "t")


def read_calibration(path: str | Path) -> Calibration:
    """Read and check a calibration file.

    Raises
    ------
    ConfigError
        With every problem of the file.
    """
    source = Path(path)
    try:
        tree = tomllib.loads(source.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise ConfigError("no such file; expected a calibration (calibration.toml)", str(source)) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, OSError) as error:
        raise ConfigError(f"not a readable TOML file ({error})", str(source)) from None
    problems: list[str] = []
    if tree.get("schema") != SCHEMA:
        problems.append(f"schema = {tree.get('schema')!r}: expected {SCHEMA}; fit the calibration again")
    entries = tree.get("filters")
    if not isinstance(entries, dict) or not entries:
        problems.append("filters: expected a table [filters.NAME] for each filter")
        entries = {}
    models = {name: _read_filter(name, entry, problems) for name, entry in entries.items()}
    if problems:
        raise ConfigError(problems, str(source))
    return Calibration(
        {name: model for name, model in models.items() if model is not None},
        str(tree.get("instrument", "")),
        tuple(str(night) for night in tree.get("nights", ())),
        source=str(source),
    )
