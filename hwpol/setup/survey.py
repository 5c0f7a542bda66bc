"""All headers of a folder as one table: a keyword's values over the files, side by side."""

from __future__ import annotations

import math
import os
import re
import warnings
from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.frames.headers import FileProblem, image_sides, read_headers

_LAYOUT = re.compile(
    r"(SIMPLE|XTENSION|BITPIX|NAXIS\d*|EXTEND|PCOUNT|GCOUNT|BSCALE|BZERO|BLANK|EXTNAME|EXTVER|CHECKSUM|DATASUM|COMMENT"
    r"|HISTORY|INHERIT|TFIELDS|T(TYPE|FORM|UNIT)\d+|Z(IMAGE|CMPTYPE|BITPIX|NAXIS\d*|TILE\d+|NAME\d+|VAL\d+|SIMPLE|EXTEND)|)"
)
# What earlier runs left behind is no raw frame.
_RESULTS = ("run.json", "results.ecsv", "frames.ecsv")
_PLAIN_TEXT = (".toml", ".txt", ".md", ".log", ".csv", ".ecsv", ".json", ".html", ".py")


@dataclass(frozen=True)
class Image:
    """One image of a file: HDU number, name, lengths (x first), BITPIX, BZERO, and its own header."""

    hdu: int
    name: str
    sides: tuple[int, ...]
    bits: int
    zero: float
    header: fits.Header = field(compare=False, repr=False)


@dataclass(frozen=True)
class Survey:
    """Headers of the FITS files of a folder.

    Attributes
    ----------
    folder : Path
    files : tuple of Path
        In order of name; `order` gives the order in time once that is known.
    cards : dict
        Keyword to a list with its value in each file; None where a file lacks it or leaves it blank.
    comments : dict
        Keyword to the comment of its first card.
    images : tuple
        For each file a tuple of `Image`.
    ignored : tuple of (Path, str)
        Files left out, and why.
    kinds : tuple of str
        "bias", "dark", "flat", "science" or "" for each file.
    order : tuple of int
        File numbers in order of time.
    """

    folder: Path
    files: tuple[Path, ...]
    cards: dict[str, list[Any]]
    comments: dict[str, str]
    images: tuple[tuple[Image, ...], ...]
    ignored: tuple[tuple[Path, str], ...]
    kinds: tuple[str, ...] = ()
    order: tuple[int, ...] = ()

    def of(self, *kinds: str) -> list[int]:
        """File numbers of some kinds, in order of time."""
        return [i for i in self.order if self.kinds[i] in kinds]

    @property
    def science(self) -> list[int]:
        """File numbers of the science frames, in order of time; all where no kinds are known."""
        return self.of("science") or list(self.order)

    def values(self, key: str, where: Iterable[int]) -> list[Any]:
        """Values of a keyword that are there, in some files."""
        column = self.cards[key]
        return [column[i] for i in where if column[i] is not None]

    def distinct(self, key: str, where: Iterable[int]) -> list[str]:
        """Distinct values as texts, most frequent first."""
        counts: dict[str, int] = {}
        for value in self.values(key, where):
            counts[plain(value)] = counts.get(plain(value), 0) + 1
        return sorted(counts, key=lambda text: -counts[text])

    def share(self, key: str, where: list[int]) -> float:
        """Share of some files that hold the keyword."""
        return len(self.values(key, where)) / len(where) if where else 0.0

    def numbers(self, key: str, where: list[int]) -> NDArray[np.float64]:
        """Values as numbers, NaN where missing or no number; shape (len(where),)."""
        return np.array([as_number(self.cards[key][i]) for i in where], dtype=np.float64)

    def comment(self, key: str) -> str:
        """Comment of a keyword, lower case."""
        return self.comments.get(key, "").lower()

    def with_kinds(self, kinds: Iterable[str]) -> Survey:
        """The same with the kind of every file."""
        return replace(self, kinds=tuple(kinds))

    def in_order(self, times: NDArray[np.float64]) -> Survey:
        """The same with files ordered by time (any unit; NaN last), then by name."""
        return replace(self, order=tuple(int(i) for i in np.argsort(times, kind="stable")))


def plain(value: Any) -> str:
    """A header value as text, blanks squeezed."""
    return ("T" if value else "F") if isinstance(value, bool) else " ".join(str(value).split())


def as_number(value: Any) -> float:
    """A header value as number; NaN where it is none or infinite."""
    if isinstance(value, bool) or value is None:
        return math.nan
    try:
        number = float(value)
    except (TypeError, ValueError, OverflowError):
        return math.nan
    return number if math.isfinite(number) else math.nan


def survey(folder: str | Path) -> Survey:
    """Read the headers of all FITS files in a folder and its sub-folders; pixels are not read.

    Raises
    ------
    InputError
        The folder does not exist, or holds no FITS file with an image.
    """
    top = Path(folder)
    if not top.is_dir():
        raise InputError(f"{folder}: is no folder; give the folder that holds the raw frames")
    files: list[Path] = []
    ignored: list[tuple[Path, str]] = []
    cards: dict[str, list[Any]] = {}
    comments: dict[str, str] = {}
    images: list[tuple[Image, ...]] = []
    for path in _paths(top, ignored):
        if path.suffix.lower() in _PLAIN_TEXT:
            ignored.append((path, "not a FITS file"))
            continue
        with warnings.catch_warnings():
            # What astropy finds odd in a header does not keep the rest of it from being read.
            warnings.simplefilter("ignore")
            try:
                headers = read_headers(path).headers
            except FileProblem as problem:
                ignored.append((path, str(problem)))
                continue
            found = tuple(_images(headers))
            if not found:
                ignored.append((path, "holds no image"))
                continue
            row = _row(headers, found[0].hdu, comments)
        for key, value in row.items():
            cards.setdefault(key, [None] * len(files)).append(value)
        files.append(path)
        images.append(found)
        for column in cards.values():
            if len(column) < len(files):
                column.append(None)
    if not files:
        raise InputError(
            f"{folder}: holds no FITS file with an image ({len(ignored)} other files); give another folder"
        )
    ordered = tuple(range(len(files)))
    return Survey(top, tuple(files), cards, comments, tuple(images), tuple(ignored), ("",) * len(files), ordered)


def _paths(top: Path, ignored: list[tuple[Path, str]]) -> list[Path]:
    found: list[Path] = []
    for place, folders, names in os.walk(top):
        here = Path(place)
        if here != top and any(name in names for name in _RESULTS):
            ignored.append((here, "results of a reduction"))
            folders.clear()
            continue
        folders[:] = sorted(name for name in folders if not name.startswith("."))
        found += [here / name for name in sorted(names) if not name.startswith(".") and (here / name).is_file()]
    return found


def _images(headers: tuple[fits.Header, ...]) -> Iterable[Image]:
    packed = len(headers) > 1 and "ZSIMPLE" in headers[1] and not image_sides(headers[0])
    for number, header in enumerate(headers):
        sides = image_sides(header)
        if len(sides) >= 2 and min(sides) > 0:
            bits = int(header.get("ZBITPIX", header["BITPIX"]))
            name = str(header.get("EXTNAME", "")).strip()
            yield Image(number - packed, name, sides, bits, float(header.get("BZERO", 0.0)), header)


def _row(headers: tuple[fits.Header, ...], first: int, comments: dict[str, str]) -> dict[str, Any]:
    """Values of one file, the HDU of the image first, then the others: as frames are read later."""
    first = min(first, len(headers) - 1)
    row: dict[str, Any] = {}
    for number in dict.fromkeys([first, *range(len(headers))]):
        for card in headers[number].cards:
            key, value, comment = _parsed(card.image)
            if value is not None and not _LAYOUT.fullmatch(key):
                row.setdefault(key, value)
                comments.setdefault(key, comment)
    return row


@lru_cache(maxsize=100_000)
def _parsed(image: str) -> tuple[str, Any, str]:
    """Keyword, value and comment of a card; most cards of a night are alike, and parsing is what takes the time."""
    card = fits.Card.fromstring(image)
    try:
        key, value, comment = card.keyword, card.value, card.comment
    except (fits.VerifyError, ValueError):
        # A card that breaks the standard still often holds readable text.
        key, _, rest = image.partition("=")
        value, _, comment = rest.partition(" /")
        key, value = key.strip(), value.strip(" '")
    if isinstance(value, str):
        value = value.strip()
    if isinstance(value, fits.card.Undefined) or value == "":
        value = None
    return str(key), value, str(comment)
