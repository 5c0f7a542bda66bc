"""Numbers as the page shows them: sensible digits, and the exact table cell beside each."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from markupsafe import Markup

#: What stands for a number that is not known.
UNKNOWN = "–"


def places_for(error: float, most: int) -> int:
    """Decimals that show two digits of an error."""
    if not math.isfinite(error) or error <= 0:
        return most
    return int(min(max(1 - math.floor(math.log10(error)), 0), most))


def percent(value: float, error: float = math.nan, *, sign: bool = False) -> str:
    """A fraction in percent with two digits of its error; three decimals where there is none."""
    if not math.isfinite(value):
        return UNKNOWN
    places = places_for(100 * error, 5) if math.isfinite(error) and error > 0 else 3
    return _signed(f"{100 * value:{'+' if sign else ''}.{places}f}", sign)


def degrees(value: float, error: float = math.nan) -> str:
    """An angle in degrees with two digits of its error; one decimal where there is none."""
    if not math.isfinite(value):
        return UNKNOWN
    places = places_for(error, 3) if math.isfinite(error) and error > 0 else 1
    return _signed(f"{value:.{places}f}")


def plain(value: float, places: int = 2) -> str:
    """A number with given decimals."""
    return _signed(f"{value:.{places}f}") if math.isfinite(value) else UNKNOWN


def significant(value: float, digits: int = 3) -> str:
    """A number without decimals, rounded to so many digits (all of them where it has fewer decimals than that)."""
    if not math.isfinite(value):
        return UNKNOWN
    size = digits - 1 - (math.floor(math.log10(abs(value))) if value else 0)
    return f"{float(f'{value:.{digits}g}'):.{max(size, 0)}f}"


def _signed(text: str, sign: bool = False) -> str:
    """No minus before what is rounded to zero."""
    return text if text.strip("+-0.") else ("+" if sign else "") + text.lstrip("+-")


@dataclass(frozen=True)
class Cell:
    """One number on the page: where it is stored, its exact value, how it is shown."""

    place: str
    value: float
    text: str

    def __html__(self) -> str:
        return Markup('<span class="n" data-cell="{}" data-value="{!r}">{}</span>').format(
            self.place, self.value, self.text
        )

    def __str__(self) -> str:
        return self.text


@dataclass(frozen=True)
class Sheet:
    """A stored table whose cells are shown: cells are named NAME/row/column, rows from 0 in the file's order."""

    name: str
    table: Any

    def number(self, row: Any, column: str) -> float:
        """The stored value."""
        return float(self.table[column][row])

    def text(self, row: int, column: str) -> str:
        """A stored text; empty where masked."""
        value = self.table[column][row]
        return "" if np.ma.is_masked(value) else str(value)

    def percent(self, row: Any, column: str, error: float = math.nan, *, sign: bool = False) -> Cell:
        """A fraction in percent."""
        value = self.number(row, column)
        return self._cell(row, column, value, percent(value, error, sign=sign))

    def degrees(self, row: Any, column: str, error: float = math.nan) -> Cell:
        """An angle."""
        value = self.number(row, column)
        return self._cell(row, column, value, degrees(value, error))

    def plain(self, row: Any, column: str, places: int = 2) -> Cell:
        """Any other number."""
        value = self.number(row, column)
        return self._cell(row, column, value, plain(value, places))

    def significant(self, row: Any, column: str) -> Cell:
        """Any other number, three digits."""
        value = self.number(row, column)
        return self._cell(row, column, value, significant(value))

    def _cell(self, row: Any, column: str, value: float, text: str) -> Cell:
        return Cell(f"{self.name}/{row}/{column}", value, text)
