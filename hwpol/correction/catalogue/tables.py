"""Reads and checks the standard-star tables: ours in ``calib_tables/`` and users' own in the same format."""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np

from hwpol.errors import ConfigError
from hwpol.instrument.names import normal_name

ROLES = ("polarised", "zero-polarised")
STAR_COLUMNS = (
    "name", "aliases", "ra", "dec", "vmag", "band", "p", "p_err", "theta", "theta_err", "variable", "reference",
)  # fmt: skip
CURVE_COLUMNS = ("name", "p_max", "p_max_err", "lambda_max", "lambda_max_err", "k", "theta", "reference")
BAND_COLUMNS = ("band", "wavelength", "width", "system", "reference")
_NO = frozenset({"", "false", "no", "n", "0", "none", "nan", "-", "--", "stable"})
_YES = frozenset({"true", "yes", "y", "1"})
_TEXT = frozenset({"name", "aliases", "band", "variable", "reference", "provenance", "note", "system"})
_UNITS = {"ra": "deg", "dec": "deg", "theta": "deg", "theta_err": "deg", "wavelength": "um", "width": "um",
          "lambda_max": "um", "lambda_max_err": "um", "p": "", "p_err": "", "p_max": "", "p_max_err": "",
          "pm": "arcsec / yr", "pos_err": "arcsec"}  # fmt: skip
_RANGES = {"ra": (0.0, 360.0, "deg"), "dec": (-90.0, 90.0, "deg"), "p": (0.0, 1.0, "as a fraction, not percent"),
           "p_max": (0.0, 1.0, "as a fraction, not percent"), "theta": (0.0, 180.0, "deg"),
           "lambda_max": (0.1, 5.0, "micron"), "wavelength": (0.1, 30.0, "micron")}  # fmt: skip
_ERRORS = ("p_err", "theta_err", "p_max_err", "lambda_max_err", "pm", "pos_err")

_ZONE = re.compile(r"^(bd|cd|cod|cpd)\s*([+\-\u2010-\u2015\u2212_ ]*)\s*(\d+)\s*[d:\u00b0_\s]*\s*(\d*)\s*([a-z]?)$")


def star_key(name: str) -> str:
    """Return a star's name in the form in which names are compared.

    Case, blanks, hyphens and underscores are ignored, and so are "No." and "#". A plus sign counts, and so does its
    absence: ``BD-12 5133``, ``BD -12 5133`` and ``bd_12_5133`` are one star, ``BD+12 5133`` is another. Zones of the
    Durchmusterung have two digits: ``BD+5 3993`` is ``BD+05 3993``.
    """
    text = " ".join(str(name).strip().casefold().split())
    zone = _ZONE.match(text)
    if zone:
        prefix, sign, first, second, tail = zone.groups()
        degrees = f"{int(first):02d}" if second else first
        return f"{'cd' if prefix == 'cod' else prefix}{'+' if '+' in sign else ''}{degrees}{second}{tail}"
    return normal_name(re.sub(r"(#|\bno\.?\s*(?=\d)|^v?\*\s*)", "", text.replace("_", " ")))


def tables_root() -> Path:
    """Folder of the tables: beside the package in a source tree (an installed copy may be stale), else inside it."""
    tree = Path(__file__).resolve().parents[3]
    if (tree / "pyproject.toml").is_file() and (tree / "calib_tables").is_dir():
        return tree / "calib_tables"
    inside = Path(str(files("hwpol"))) / "calib_tables"
    if inside.is_dir():
        return inside
    raise ConfigError("the folder calib_tables is missing; install the package again", str(inside))


@dataclass(frozen=True)
class StarTable:
    """One table as plain rows. `kind` is "polarised", "zero-polarised", "curves" or "bands"."""

    path: Path
    kind: str
    rows: tuple[dict[str, Any], ...]


def _kind(path: Path, columns: list[str], meta: dict[str, Any]) -> str:
    if "p_max" in columns:
        return "curves"
    if "wavelength" in columns and "p" not in columns:
        return "bands"
    role = str(meta.get("role", "")).strip().lower().replace("_", "-").replace(" ", "-")
    if role in ROLES:
        return role
    if role:
        raise ConfigError(f"role = {role!r} in the table's metadata: expected one of {', '.join(ROLES)}", str(path))
    return "zero-polarised" if re.search(r"zero|unpol|non.?pol|null", path.stem.lower()) else "polarised"


def _column(table: Any, name: str) -> list[Any]:
    column = table[name]
    mask = np.asarray(getattr(column, "mask", np.zeros(len(column), bool)))
    if name == "variable":
        words = ["" if hidden else str(value).strip() for value, hidden in zip(column, mask, strict=True)]
        return ["" if word.casefold() in _NO else "said to vary" if word.casefold() in _YES else word for word in words]
    if name in _TEXT:
        return ["" if hidden else str(value).strip() for value, hidden in zip(column, mask, strict=True)]
    values: Any = column
    if name in _UNITS and getattr(column, "unit", None) is not None:
        from astropy.units import Quantity

        values = Quantity(np.ma.filled(np.ma.asarray(column, dtype=float), np.nan), column.unit).to_value(_UNITS[name])
    numbers: Any = np.ma.filled(np.ma.asarray(values, dtype=float), np.nan)
    return [float("nan") if hidden else float(value) for value, hidden in zip(numbers, mask, strict=True)]


def _row_problems(place: str, row: dict[str, Any], kind: str) -> list[str]:
    problems = []
    if kind != "bands" and not row["name"]:
        problems.append(f"{place}: name is empty; every row names its star")
    if kind == "bands" and not row["band"]:
        problems.append(f"{place}: band is empty")
    if not row["reference"]:
        problems.append(f"{place}: reference is empty; say where the value was published")
    for key, (low, high, unit) in _RANGES.items():
        value = row.get(key, float("nan"))
        if np.isfinite(value) and not low <= value <= high:
            problems.append(f"{place}: {key} = {value:g}, expected {low:g} to {high:g} {unit}")
    problems += [f"{place}: {key} = {row[key]:g}, expected >= 0" for key in _ERRORS if row.get(key, 0.0) < 0]
    required = {"bands": ("wavelength",), "curves": ("p_max", "lambda_max")}.get(kind, ("ra", "dec"))
    problems += [f"{place}: {key} is missing" for key in required if not np.isfinite(row[key])]
    if row.get("provenance", "") not in {"", "read", "memory", "derived"}:
        problems.append(f"{place}: provenance = {row['provenance']!r}, expected read, memory or derived")
    return problems


def read_table(path: str | Path) -> StarTable:
    """Read and check one table.

    The kind follows from the columns; star tables are zero-polarised where the metadata say ``role: zero-polarised`` or
    the file name holds "zero", "unpol" or "null".

    Raises
    ------
    ConfigError
        When the file cannot be read or its content is wrong; every problem is listed with its row.
    """
    from astropy.table import Table

    source = Path(path)
    if not source.is_file():
        raise ConfigError("no such file; expected a standard-star table (ECSV)", str(source))
    try:
        table = Table.read(source, format="ascii.ecsv")
    except Exception as error:
        line = str(error).strip().splitlines()
        raise ConfigError(f"not a readable ECSV table ({line[0] if line else error!r})", str(source)) from None
    kind = _kind(source, table.colnames, dict(table.meta))
    wanted = {"curves": CURVE_COLUMNS, "bands": BAND_COLUMNS}.get(kind, STAR_COLUMNS)
    missing = [name for name in wanted if name not in table.colnames]
    if missing:
        raise ConfigError(
            f"missing column{'s' if len(missing) > 1 else ''} {', '.join(missing)}; expected {', '.join(wanted)}",
            str(source),
        )
    columns = {}
    problems: list[str] = []
    for name in table.colnames:
        try:
            columns[name] = _column(table, name)
        except (ValueError, TypeError) as error:
            if name in wanted or name in _UNITS:
                problems.append(f"column {name}: {error}")
    if problems:
        raise ConfigError(problems, str(source))
    rows = tuple(dict(zip(columns, values, strict=True)) for values in zip(*columns.values(), strict=True))
    for number, row in enumerate(rows, start=1):
        label = row.get("name") or row.get("band") or ""
        problems += _row_problems(f"row {number} ({label})", row, kind)
    if problems:
        raise ConfigError(problems, str(source))
    return StarTable(source, kind, rows)


@lru_cache(maxsize=1)
def own_tables() -> tuple[StarTable, ...]:
    """Read our four tables, once."""
    root = tables_root()
    return tuple(read_table(root / f"{name}.ecsv") for name in ("polarised", "zero_polarised", "serkowski", "bands"))
