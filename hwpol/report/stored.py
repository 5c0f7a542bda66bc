"""The products of a night as read back from its output folder."""

from __future__ import annotations

import json
import tomllib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table

from hwpol.errors import InputError
from hwpol.products import VisitFile, read_table, read_visit
from hwpol.report.numbers import Sheet

TABLES = ("results", "cycles", "frames", "standards")


@dataclass(frozen=True)
class Stored:
    """A reduced night: its tables as sheets, calibration.toml and run.json as trees, its visit files by number."""

    folder: Path
    results: Sheet
    cycles: Sheet
    frames: Sheet
    standards: Sheet
    calibration: dict[str, Any] | None
    run: dict[str, Any]
    visit_paths: dict[int, Path] = field(default_factory=dict)

    def visit(self, number: int) -> VisitFile | None:
        """The file of a visit; None where there is none."""
        path = self.visit_paths.get(number)
        return None if path is None else read_visit(path)

    def visit_numbers(self) -> list[int]:
        """Visits that have a result, in order."""
        return [int(n) for n in np.unique(np.asarray(self.results.table["visit"]))]

    def target_row(self, visit: int) -> int:
        """Row of results of a visit's first target."""
        rows = np.flatnonzero(np.asarray(self.results.table["visit"]) == visit)
        return int(rows[np.argmin(np.asarray(self.results.table["source"])[rows])])


def read_stored(folder: str | Path) -> Stored:
    """Read the products in an output folder.

    Raises
    ------
    InputError
        When a table is missing or cannot be read.
    """
    home = Path(folder)
    if not (home / "results.ecsv").is_file():
        raise InputError(f"{home}: holds no results.ecsv; expected the output folder of a reduced night (hwpol reduce)")
    tables = {name: Sheet(name, _filled(read_table(home / f"{name}.ecsv"))) for name in TABLES}
    paths = {}
    for path in sorted(home.glob("visits/visit_*.fits")):
        number = path.stem.removeprefix("visit_")
        if number.isdigit():
            paths[int(number)] = path
    return Stored(home, **tables, calibration=_calibration(home), run=_run(home), visit_paths=paths)


def _filled(table: Table) -> Table:
    """Without masks: empty text, NaN and -1 stand for what is missing."""
    for name in table.colnames:
        column = table[name]
        if np.ma.isMaskedArray(column):
            filler: Any = {"U": "", "S": "", "O": "", "f": np.nan, "b": False}.get(column.dtype.kind, -1)
            table[name] = column.filled(filler)
    return table


def _calibration(home: Path) -> dict[str, Any] | None:
    path = home / "calibration.toml"
    if not path.is_file():
        return None
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as problem:
        raise InputError(f"{path}: cannot be read ({problem}); reduce the night again") from None


def _run(home: Path) -> dict[str, Any]:
    path = home / "run.json"
    if not path.is_file():
        return {}
    try:
        tree = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as problem:
        raise InputError(f"{path}: cannot be read ({problem}); reduce the night again") from None
    return tree if isinstance(tree, dict) else {}
