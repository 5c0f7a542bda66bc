"""One file's headers, without its pixels: is the file whole, where is its image, and what is the frame."""

from __future__ import annotations

import bz2
import gzip
import hashlib
import math
import os
import warnings
import zlib
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, TypeVar

from astropy.io import fits

from hwpol.frames import values
from hwpol.frames.values import ValueProblem
from hwpol.instrument.description import Instrument, Keyword
from hwpol.instrument.names import normal_name

T = TypeVar("T")
# Bytes of a pixel for every BITPIX of the FITS standard.
_BITPIX = {8: 1, 16: 2, 32: 4, 64: 8, -32: 4, -64: 8}
_BLOCK = 2880
_CARD = 80
_GZIP, _BZIP2 = b"\x1f\x8b", b"BZh"
# Degree signs and accents break the standard; as blanks they do no harm.
_PRINTABLE = bytes(code if 32 <= code < 127 else 32 for code in range(256))
_SHORTEST_AIRMASS = 0.99  # rounding aside, none is below 1


class FileProblem(Exception):
    """A file's headers cannot be read; the message says why in words."""


@dataclass(frozen=True)
class FileHeaders:
    """The headers of a file's HDUs; `digest` is equal for copies, `damage` says why a file is not whole (or "")."""

    headers: tuple[fits.Header, ...]
    digest: bytes
    damage: str = ""


def read_headers(path: str | Path) -> FileHeaders:
    """Read every header of a FITS file (plain, gzip or bzip2); pixels are skipped, never read into memory.

    A file that ends before the data its headers declare is noticed from its size (for a gzipped file from the
    length noted at its end) and reported in `damage`.

    Raises
    ------
    FileProblem
        The file cannot be opened, is empty or is not FITS.
    """
    try:
        with open(path, "rb") as raw:
            size = os.fstat(raw.fileno()).st_size
            if size == 0:
                raise FileProblem("the file is empty")
            magic = raw.read(3)
            raw.seek(0)
            if magic == _BZIP2:
                with bz2.open(raw) as unpacked:
                    return _walk(unpacked, -1, packed=True)
            if magic[:2] != _GZIP:
                return _walk(raw, size)
            # The last four bytes of a gzip file hold its unpacked length modulo 2^32.
            raw.seek(-4, os.SEEK_END)
            size = int.from_bytes(raw.read(4), "little")
            raw.seek(0)
            with gzip.open(raw) as unpacked:
                return _walk(unpacked, size, packed=True)
    except (OSError, EOFError, zlib.error) as problem:
        reason = problem.strerror if isinstance(problem, OSError) and problem.strerror else str(problem)
        raise FileProblem(f"the file cannot be read: {reason}") from None


def _header_bytes(stream: IO[bytes] | gzip.GzipFile | bz2.BZ2File, first: bool) -> bytes | None:
    """Bytes of the header at the stream's place; None at the end of the file or where no header begins."""
    opening = b"SIMPLE  =" if first else b"XTENSION="
    parts: list[bytes] = []
    while True:
        block = stream.read(_BLOCK)
        if not parts and not block.startswith(opening):
            return None
        parts.append(block)
        if any(block[at : at + 8].rstrip() == b"END" for at in range(0, len(block), _CARD)):
            return b"".join(parts)
        if len(block) < _BLOCK:
            raise EOFError("the header has no end, the file is cut off")


def _walk(stream: IO[bytes] | gzip.GzipFile | bz2.BZ2File, size: int, packed: bool = False) -> FileHeaders:
    headers: list[fits.Header] = []
    digest, damage, place = hashlib.blake2b(), "", 0
    while True:
        try:
            raw = _header_bytes(stream, first=not headers)
        except (OSError, EOFError, zlib.error):
            if not headers:
                raise
            damage = "truncated: the file ends inside a header"
            break
        if raw is None:
            break
        digest.update(raw)
        header = fits.Header.fromstring(raw.translate(_PRINTABLE))
        headers.append(header)
        start = place + len(raw)
        end = start + _data_bytes(header)
        place = start + _BLOCK * math.ceil((end - start) / _BLOCK)
        if packed and size in (end % 2**32, place % 2**32):
            break
        if packed:
            damage = _skip(stream, end, place)
        elif end > size:
            damage = f"truncated: the headers declare {end} bytes, the file has {size}"
        else:
            stream.seek(place)
        if damage or (not packed and place >= size):
            break
    if not headers:
        raise FileProblem("not a FITS file")
    return FileHeaders(tuple(headers), digest.digest(), damage)


def _skip(stream: IO[bytes] | gzip.GzipFile | bz2.BZ2File, end: int, place: int) -> str:
    """Move over the data of a gzipped file; return the damage found."""
    try:
        whole = True
        if end > stream.tell():
            stream.seek(end - 1)
            whole = bool(stream.read(1))
        stream.seek(place)
    except (OSError, EOFError, zlib.error):
        whole = False
    return "" if whole else f"truncated: the headers declare {end} bytes, the compressed file ends earlier"


def _data_bytes(header: fits.Header) -> int:
    """Length of an HDU's data without padding (FITS standard 4.0, equation 2)."""
    try:
        sides = _sides(header, "NAXIS")
        if not sides:
            return 0
        bits = _BITPIX[int(header["BITPIX"])]
        return bits * int(header.get("GCOUNT", 1)) * (int(header.get("PCOUNT", 0)) + math.prod(sides))
    except (KeyError, ValueError, TypeError, fits.VerifyError):
        raise FileProblem("not a FITS file: BITPIX and NAXIS make no sense") from None


def _sides(header: fits.Header, stem: str) -> tuple[int, ...]:
    return tuple(int(header[f"{stem}{axis}"]) for axis in range(1, int(header[stem]) + 1))


def image_sides(header: fits.Header) -> tuple[int, ...]:
    """Lengths (x first) of the image an HDU holds, compressed or not; empty where it holds none.

    Axes of length 1 behind the second do not count.
    """
    try:
        if header.get("ZIMAGE", False):
            sides = _sides(header, "ZNAXIS")
        elif str(header.get("XTENSION", "IMAGE")).strip() == "IMAGE":
            sides = _sides(header, "NAXIS")
        else:
            return ()
    except (KeyError, ValueError, TypeError, fits.VerifyError):
        return ()
    while len(sides) > 2 and sides[-1] == 1:
        sides = sides[:-1]
    return sides


def image_index(headers: tuple[fits.Header, ...], extension: int | str) -> int | None:
    """Index of the HDU that holds the image an instrument file calls `extension`; None where there is none.

    Compression moves a primary image to the first extension; 0 still means that image.
    """
    if isinstance(extension, str):
        wanted = extension.strip().casefold()
        for index, header in enumerate(headers):
            if str(header.get("EXTNAME", "")).strip().casefold() == wanted and image_sides(header):
                return index
        return None
    if extension == 0 and len(headers) > 1 and not image_sides(headers[0]) and headers[1].get("ZIMAGE", False):
        extension = 1
    return extension if extension < len(headers) and image_sides(headers[extension]) else None


@dataclass
class Frame:
    """One row of the frame table while it is being filled; names as the columns, see `FrameSet`."""

    file: str
    name: str
    kind: str = ""
    object: str = ""
    filter: str = ""
    exposure: float = math.nan
    mjd: float = math.nan
    wave_plate: str = ""
    psi: float = math.nan
    chi: float = math.nan
    airmass: float = math.nan
    ra: float = math.nan
    dec: float = math.nan
    equinox: str = ""
    gain: float = math.nan
    shape: str = ""
    digest: bytes = b""
    hdus: tuple[int, ...] = ()
    unread: bool = False
    reasons: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)


def read_frame(path: str | Path, instrument: Instrument) -> Frame:
    """Read what one file's headers say of the frame; whatever is wrong becomes a reason, never an exception.

    Parameters
    ----------
    path : path
        FITS file: plain, gzipped or tile-compressed.
    instrument : Instrument

    Returns
    -------
    Frame
        `reasons` empty where the frame can be used; chi (deg) only where a keyword gives it.
    """
    frame = Frame(str(path), Path(path).name)
    with warnings.catch_warnings():
        # What astropy finds odd in a header either shows as a reason below or does not matter.
        warnings.simplefilter("ignore")
        try:
            found = read_headers(path)
        except FileProblem as problem:
            frame.unread = True
            frame.reasons.append(str(problem))
            return frame
        frame.digest = found.digest
        if found.damage:
            frame.reasons.append(found.damage)
        first = _find_images(frame, found, instrument)
        order = dict.fromkeys([first, *range(len(found.headers))])
        _Reader(frame, [found.headers[index] for index in order], instrument).fill()
    return frame


def _find_images(frame: Frame, found: FileHeaders, instrument: Instrument) -> int:
    """Note the image of every beam, its shape and what is wrong with it; return the first image's HDU."""
    extensions = dict.fromkeys(instrument.extension_of(beam) for beam in range(len(instrument.beams)))
    shapes, hdus = [], []
    for extension in extensions or {instrument.detector.extension: None}:
        index = image_index(found.headers, extension)
        if index is None:
            if not found.damage:
                others = [str(at) for at, header in enumerate(found.headers) if image_sides(header)]
                there = f" (but in HDU {', '.join(others)}: set extension)" if others else ""
                frame.reasons.append(f"no image in HDU {extension}{there}")
            continue
        if index in hdus:
            frame.reasons.append(
                f"HDU {extension} is that of another beam: compression changed the numbers of the HDUs"
            )
        sides = image_sides(found.headers[index])
        shapes.append(" x ".join(map(str, sides)))
        hdus.append(index)
        if len(sides) != 2:
            frame.reasons.append(f"the image has {len(sides)} axes ({shapes[-1]}), expected 2")
        elif min(sides) < 1:
            frame.reasons.append(f"the image has no pixels ({shapes[-1]})")
    frame.shape, frame.hdus = " and ".join(dict.fromkeys(shapes)), tuple(hdus)
    return hdus[0] if hdus else 0


class _Reader:
    """Fills a `Frame` from its headers, one quantity after the other."""

    def __init__(self, frame: Frame, headers: list[fits.Header], instrument: Instrument) -> None:
        self.frame, self.headers, self.instrument = frame, headers, instrument

    def fill(self) -> None:
        """Fill in all quantities; science frames need more of them than calibrations do."""
        frame, keywords = self.frame, self.instrument.keywords
        frame.kind = self._kind()
        science = frame.kind == "science"
        need, note = frame.reasons.append, frame.notes.append
        timed = need if science else note
        object_ = self._try("object", lambda k: values.text(self.headers, k), note)
        frame.object = object_ or ""
        clear = self.instrument.clear_filters
        lights = note if frame.kind in ("science", "flat") else None
        frame.filter = self._try("filter", lambda k: values.filter_name(self.headers, k, clear), lights) or ""
        exposed = {"science": need, "dark": need, "bias": None}.get(frame.kind, note)
        frame.exposure = self._number("exposure", "s", "a time in seconds", exposed)
        if (science and frame.exposure <= 0) or (frame.kind == "dark" and frame.exposure < 0):
            need(f"exposure {frame.exposure:g} s: expected more than 0")
        exposure = frame.exposure
        moment = self._try("time", lambda k: values.middle(self.headers, k, exposure), timed)
        frame.mjd = math.nan if moment is None else moment
        self._plate(need if science else None)
        self._pointing(note if science else None)
        frame.airmass = self._number("airmass", "", "a number", None)
        if not frame.airmass >= _SHORTEST_AIRMASS:
            frame.airmass = math.nan
        frame.gain = self._number("gain", "", "electron/adu", note)
        if frame.gain <= 0:
            note(f"gain {frame.gain:g} is not above 0 and was left aside")
            frame.gain = math.nan
        if "position_angle" in keywords:
            frame.chi = self._position_angle(science)

    def _kind(self) -> str:
        keyword = self.instrument.keywords.get("kind")
        if keyword is None:
            return "science"
        try:
            found = values.text(self.headers, keyword)
        except ValueProblem as problem:
            self.frame.reasons.append(f"kind of frame unknown: {problem}")
            return ""
        for kind, names in self.instrument.kinds.items():
            if normal_name(found) in map(normal_name, names):
                return kind
        self.frame.reasons.append(f"kind {found!r} is not listed in [kinds]")
        return ""

    def _try(self, quantity: str, read: Callable[[Keyword], T], tell: Callable[[str], None] | None) -> T | None:
        """Read one quantity; None where it is not configured, missing or nonsense (and `tell` hears why)."""
        keyword = self.instrument.keywords.get(quantity)
        if keyword is None:
            return None
        try:
            return read(keyword)
        except ValueProblem as problem:
            if tell is not None:
                tell(str(problem))
            return None

    def _number(self, quantity: str, unit: str, what: str, tell: Callable[[str], None] | None) -> float:
        value = self._try(quantity, lambda keyword: values.number(self.headers, keyword, unit, what), tell)
        return math.nan if value is None else value

    def _plate(self, tell: Callable[[str], None] | None) -> None:
        plate, keyword = self.instrument.wave_plate, self.instrument.keywords.get("wave_plate")
        if plate is None:
            return
        if keyword is None:
            if tell is not None:
                tell("no keyword for the wave plate: give keywords.wave_plate in the instrument file")
            return
        found = self._try("wave_plate", lambda k: values.plate_angle(self.headers, k, plate), tell)
        if found is not None:
            self.frame.wave_plate, self.frame.psi = found
        else:
            try:
                self.frame.wave_plate = values.text(self.headers, keyword)
            except ValueProblem:
                self.frame.wave_plate = ""

    def _pointing(self, tell: Callable[[str], None] | None) -> None:
        frame, keywords = self.frame, self.instrument.keywords
        if "ra" not in keywords or "dec" not in keywords:
            return
        ra = self._try("ra", lambda k: values.coordinate(self.headers, k, hours=True), tell)
        dec = self._try("dec", lambda k: values.coordinate(self.headers, k, hours=False), tell)
        if ra is None or dec is None:
            return
        turned = keywords["ra"] if keywords["ra"].equinox is not None else keywords["dec"]
        try:
            frame.equinox = values.equinox(self.headers, turned)
        except ValueProblem as problem:
            if tell is not None:
                tell(f"{problem}: taken as ICRS")
        frame.ra, frame.dec = ra, dec

    def _position_angle(self, science: bool) -> float:
        """Chi from its keyword; a value that is there but makes no sense is worse than none."""
        keyword = self.instrument.keywords["position_angle"]
        try:
            return values.number(self.headers, keyword, "deg", "an angle in degrees")
        except ValueProblem as problem:
            if science:
                (self.frame.notes if problem.missing else self.frame.reasons).append(
                    f"{problem}: chi taken from [orientation]" if problem.missing else str(problem)
                )
            return math.nan
