"""Result tables: rows to typed columns with units, UCD words and descriptions, and back from disk."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any
from unicodedata import combining, normalize

import numpy as np
from astropy.io import fits
from astropy.io.votable import from_table
from astropy.table import Column as TableColumn
from astropy.table import QTable, Table

from hwpol.errors import InputError
from hwpol.flags import FLAG_TEXT, Flag
from hwpol.products.writing import whole, write_fits
from hwpol.schema import TABLES, Column

FORMATS = {"ecsv": ".ecsv", "fits": ".fits", "votable": ".vot"}

_EMPTY: dict[str, Any] = {"text": "", "integer": -1, "number": float("nan"), "truth": False}
_TYPES: dict[str, Any] = {"text": str, "integer": np.int64, "number": np.float64, "truth": bool}


def make_table(rows: Iterable[Mapping[str, Any]], name: str, meta: Mapping[str, Any] | None = None) -> Table:
    """Build one of the tables of `hwpol.schema` from rows.

    Parameters
    ----------
    rows : iterable of mapping
        Column name to value; a column that a row lacks is NaN, -1, empty or False there.
    name : {"results", "cycles", "frames", "standards"}
    meta : mapping, optional

    Raises
    ------
    KeyError
        When a row has a column the schema does not know.
    """
    columns = TABLES[name]
    known = {column.name for column in columns}
    items = list(rows)
    for row in items:
        unknown = set(row) - known
        if unknown:
            raise KeyError(f"{name}: no column {sorted(unknown)[0]!r}")
    table = Table(meta=dict(meta or {}))
    for column in columns:
        values = [_value(column, row) for row in items]
        table[column.name] = TableColumn(
            np.asarray(values, dtype=_TYPES[column.kind]),
            unit=column.unit or None,
            description=column.text,
            meta={"ucd": column.ucd},
        )
    table.meta["table"] = name
    if "flags" in known:
        table.meta["flags"] = {flag.name.lower(): int(flag) for flag in Flag if flag.name}
        table.meta["flag_texts"] = {flag.name.lower(): FLAG_TEXT[flag] for flag in Flag if flag.name}
    return table


def _value(column: Column, row: Mapping[str, Any]) -> Any:
    value = row.get(column.name)
    return _EMPTY[column.kind] if value is None else value


def write_table(table: Table, path: str | Path) -> Path:
    """Write a table whole or not at all; the suffix (.ecsv, .fits, .vot) chooses the form."""
    target = Path(path)
    with whole(target) as temporary:
        if target.suffix == ".ecsv":
            table.write(temporary, format="ascii.ecsv", overwrite=True)
            _keep_rows(temporary)
        elif target.suffix == ".fits":
            write_fits(fits.HDUList([fits.PrimaryHDU(), _to_hdu(table)]), temporary)
        elif target.suffix == ".vot":
            _to_votable(table).to_xml(str(temporary))
        else:
            raise InputError(f"{target}: suffix {target.suffix!r}, expected one of {', '.join(FORMATS.values())}")
    return target


def _keep_rows(path: Path) -> None:
    """Quote first cells that begin with "#": the reader would take their rows for comments."""
    lines = path.read_text(encoding="utf-8").split("\n")
    start = next((n for n, line in enumerate(lines) if not line.startswith("#")), len(lines)) + 1
    if not any(line.startswith("#") for line in lines[start:]):
        return
    for n in range(start, len(lines)):
        if lines[n].startswith("#"):
            cell, blank, rest = lines[n].partition(" ")
            lines[n] = f'"{cell}"{blank}{rest}'
    path.write_text("\n".join(lines), encoding="utf-8")


def _standard(table: Table) -> tuple[Table, dict[str, str]]:
    """Return a copy without metadata in units that FITS and VOTable know, and the text of each column."""
    simple = table.copy()
    simple.meta = {}
    texts = {}
    for name in simple.colnames:
        texts[name] = simple[name].description or ""
        if simple[name].unit is not None and "electron" in str(simple[name].unit):
            # Neither standard knows the electron.
            simple[name].unit = str(simple[name].unit).replace("electron", "ct")
            texts[name] += " (counts are electrons)"
    return simple, texts


def _ascii(text: str) -> str:
    plain = "".join(letter for letter in normalize("NFKD", text) if not combining(letter))
    return plain.encode("ascii", "replace").decode()


def _to_hdu(table: Table) -> fits.BinTableHDU:
    simple, texts = _standard(table)
    for name in simple.colnames:
        if simple[name].dtype.kind == "U":
            # FITS holds ASCII only: accents go, other letters become "?".
            simple[name] = [_ascii(text) for text in simple[name].tolist()]
    hdu = fits.table_to_hdu(simple)
    for number, name in enumerate(table.colnames, start=1):
        ucd = table[name].meta.get("ucd", "")
        if ucd:
            hdu.header[f"TUCD{number}"] = ucd
        if texts[name]:
            hdu.header[f"TCOMM{number}"] = texts[name]
    hdu.header["EXTNAME"] = str(table.meta.get("table", "RESULTS")).upper()
    for name, bit in table.meta.get("flags", {}).items():
        hdu.header.add_comment(f"flag {bit}: {name}: {table.meta['flag_texts'][name]}")
    return hdu


def _to_votable(table: Table) -> Any:
    simple, texts = _standard(table)
    document = from_table(simple)
    resource = document.resources[0]
    sheet = resource.tables[0]
    sheet.ID = sheet.name = str(table.meta.get("table", "results"))
    for field in sheet.fields:
        field.ucd = table[field.name].meta.get("ucd") or None
        field.description = texts[field.name] or None
    notes = [f"{bit}: {name}: {table.meta['flag_texts'][name]}" for name, bit in table.meta.get("flags", {}).items()]
    sheet.description = "flags\n" + "\n".join(notes) if notes else str(table.meta.get("table", ""))
    return document


def read_table(path: str | Path) -> Table:
    """Read a table written by `write_table` (plain columns with units; ``QTable(table)`` makes quantities).

    Raises
    ------
    InputError
        When the file is missing or is no such table.
    """
    source = Path(path)
    if not source.is_file():
        raise InputError(f"{source}: no such file; expected a table written by a reduction")
    try:
        if source.suffix == ".vot":
            return Table.read(source, format="votable")
        if source.suffix == ".fits":
            table = Table.read(source)
            for name in table.colnames:
                if table[name].dtype.kind == "S":
                    table[name] = table[name].astype(str)
            return table
        return Table.read(source, format="ascii.ecsv")
    except Exception as problem:
        first = str(problem).splitlines()[0] if str(problem) else type(problem).__name__
        raise InputError(f"{source}: cannot be read as a table ({first})") from None


def read_results(path: str | Path) -> QTable:
    """Read a result table as a QTable, with quantities where columns have units."""
    return QTable(read_table(path))
