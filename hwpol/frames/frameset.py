"""FrameSet: one row for each input file, with the visit and cycle every frame belongs to."""

from __future__ import annotations

import fnmatch
import hashlib
import math
import os
import re
import warnings
from collections import Counter, defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.table import Table
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError, MissingError
from hwpol.frames import geometry, grouping
from hwpol.frames.headers import Frame, read_frame
from hwpol.frames.merging import stored
from hwpol.instrument.description import Instrument
from hwpol.instrument.names import normal_name

_NUMBERS = {
    "exposure": "s",
    "mjd": "d",
    "psi": "deg",
    "chi": "deg",
    "eta": "deg",
    "altitude": "deg",
    "airmass": "",
    "ra": "deg",
    "dec": "deg",
    "gain": "electron/adu",
}
_COUNTERS = ("visit", "cycle", "position")
_COLUMNS = (
    *("file", "name", "kind", "object", "filter", "exposure", "mjd", "wave_plate", "psi", "chi", "eta", "altitude"),
    *("airmass", "ra", "dec", "gain", "visit", "cycle", "position", "shape", "status", "reason", "note"),
)


@dataclass(frozen=True, eq=False)
class FrameSet:
    """Frames of a night, in order of time.

    Attributes
    ----------
    instrument : Instrument
    table : Table
        One row per input file with the columns

        - file, name : path as given, and its last part
        - kind : bias, dark, flat, science, or empty
        - object, filter : as in the header
        - exposure : s
        - mjd : middle of the exposure, UTC
        - wave_plate, psi : the plate's header entry, and its fast axis in the instrument frame, deg in [0, 360)
        - chi : position angle on the sky of the instrument's +Q axis, deg
        - eta : position angle of the zenith at the target, deg; neither jumps by a turn within a visit
        - altitude, airmass : deg without refraction; the header's airmass where it has one
        - ra, dec : ICRS, deg
        - gain : electron/adu from the header
        - visit, cycle, position : from 1; -1 for none; `position` numbers a visit's plate positions by angle
        - shape : sides of the image, x first ("512 x 500"), of one HDU after the other where beams have their own
        - status, reason : used, "set aside" or unread, and why
        - note : a doubt that does not stop the frame from being used

        What is not known is NaN, -1 or empty.
    """

    instrument: Instrument
    table: Table

    @classmethod
    def read(
        cls,
        paths: Iterable[Any],
        instrument: Instrument,
        *,
        gap: float = 60.0,
        exclude: Sequence[str] = (),
        targets: Sequence[Any] = (),
    ) -> FrameSet:
        """Read the headers of files and group the frames; pixels are read only to tell copies.

        Parameters
        ----------
        paths : iterable of paths or CCDData
            FITS files, plain, gzipped or tile-compressed. A file given twice counts once. A CCDData holds raw adu and
            its header.
        instrument : Instrument
        gap : float
            Longest pause within a visit, minutes.
        exclude : sequence of str
            File names, paths or patterns (``*``, ``?``) to set aside.
        targets : sequence of objects
            With `name`, `object`, and `ra`, `dec` (deg) that stand in where the header has no coordinates.

        Returns
        -------
        FrameSet
            A row for every file. A file that cannot be read or used has the status "unread" or "set aside", and
            its reason.

        Raises
        ------
        InputError
            No paths at all, or something that is no path.
        """
        if gap <= 0 or math.isnan(gap):
            raise InputError(f"gap = {gap}: expected minutes > 0")
        frames = [read_frame(path, instrument) for path in _distinct(paths)]
        for frame in frames:
            if any(_excluded(frame, pattern) for pattern in exclude):
                frame.unread, frame.reasons = False, ["excluded by the night file"]
        _check_shapes(frames)
        frames.sort(key=_in_time)
        _find_copies(frames)
        _place(frames, targets)
        return cls(instrument, _tabulate(frames, instrument, gap))

    def __len__(self) -> int:
        return len(self.table)

    def __repr__(self) -> str:
        kinds = Counter(self.column("kind")[self._used()].tolist())
        counts = [f"{kinds[kind]} {kind}" for kind in ("science", "bias", "dark", "flat") if kinds[kind]]
        aside = len(self) - sum(kinds.values())
        counts += [f"{aside} not used"] if aside else []
        visits = len(set(self.column("visit").tolist()) - {-1})
        return f"<FrameSet {self.instrument.name!r}: {', '.join(counts) or 'empty'}; {visits} visits>"

    def column(self, name: str) -> NDArray[Any]:
        """Return one column as an array (a copy); MissingError where there is none."""
        if name not in self.table.colnames:
            raise MissingError(f"no column {name!r} of frames: there are {', '.join(self.table.colnames)}")
        return np.array(self.table[name])

    def select(self, mask: ArrayLike) -> FrameSet:
        """Return the frames where `mask` is true (or with these indices), numbers of visit and cycle unchanged."""
        return FrameSet(self.instrument, self.table[np.asarray(mask)])

    def visits(self) -> list[FrameSet]:
        """Return the visits, in order of their first frames."""
        numbers = self.column("visit")
        return [self.select(numbers == number) for number in sorted(set(numbers.tolist()) - {-1})]

    def science(self) -> FrameSet:
        """Return the science frames in use."""
        return self.select(self._used() & (self.column("kind") == "science"))

    def calibrations(self) -> FrameSet:
        """Return the bias, dark and flat frames in use."""
        return self.select(self._used() & np.isin(self.column("kind"), ("bias", "dark", "flat")))

    def cycles(self) -> list[grouping.Cycle]:
        """Return the cycles of this one visit, with the plate angles each has and lacks."""
        plate = self.instrument.wave_plate
        tolerance = 1.0 if plate is None else plate.tolerance
        psi = grouping.within_turn(self.column("psi"), tolerance)
        return grouping.summarise(self.column("cycle"), self.column("position"), psi, tolerance)

    def _used(self) -> NDArray[np.bool_]:
        return self.column("status") == "used"


def _distinct(paths: Iterable[Any]) -> list[str | Path]:
    if isinstance(paths, str | os.PathLike):
        paths = [Path(paths)]
    kept: dict[str, Any] = {}
    for path in paths:
        if hasattr(path, "to_hdu") and hasattr(path, "unit"):
            path = stored(path, len(kept))
        if not isinstance(path, str | os.PathLike):
            raise InputError(f"frames: expected paths of FITS files, found {type(path).__name__}")
        kept.setdefault(os.path.realpath(path), path)
    if not kept:
        raise InputError("frames: no file given")
    return list(kept.values())


def _in_time(frame: Frame) -> tuple[float, list[tuple[int, str]], str]:
    """Sort key: time, then name with its numbers in order of size; frames without a time last."""
    name = [(int(digits or 0), text) for digits, text in re.findall(r"(\d*)(\D*)", frame.name)]
    return (frame.mjd if math.isfinite(frame.mjd) else math.inf), name, frame.file


def _excluded(frame: Frame, pattern: str) -> bool:
    path = Path(frame.file)
    return fnmatch.fnmatchcase(frame.name, pattern) or frame.file == pattern or path.match(pattern)


def _check_shapes(frames: list[Frame]) -> None:
    """Set aside frames whose image differs in shape from that of most science frames (of most frames without any)."""
    whole = [frame for frame in frames if not frame.reasons]
    votes = Counter(frame.shape for frame in whole if frame.kind == "science") or Counter(f.shape for f in whole)
    if not votes:
        return
    usual = votes.most_common(1)[0][0]
    for frame in whole:
        if frame.shape != usual:
            frame.reasons.append(f"the image has {frame.shape} pixels, most have {usual}")


def _find_copies(frames: list[Frame]) -> None:
    """Set aside all but the first of frames with the same pixels.

    Pixels are compared only where the headers are the same, or tell of the same exposure (as those of a file and
    its compressed twin do).
    """
    alike: dict[tuple[Any, ...], list[Frame]] = defaultdict(list)
    for frame in frames:
        if not frame.reasons:
            alike[("header", frame.digest)].append(frame)
            if math.isfinite(frame.mjd):
                told = (frame.kind, frame.object, frame.filter, frame.mjd, frame.exposure, frame.wave_plate)
                alike[tuple(map(str, told))].append(frame)
    sums: dict[str, bytes | None] = {}
    for group in alike.values():
        first: dict[bytes, Frame] = {}
        for frame in group if len(group) > 1 else ():
            if frame.file not in sums:
                sums[frame.file] = _pixel_sum(frame)
            checksum = sums[frame.file]
            if checksum is None or frame.reasons:
                continue
            original = first.setdefault(checksum, frame)
            if original is not frame:
                frame.reasons.append(f"a copy of {original.name}")


def _pixel_sum(frame: Frame) -> bytes | None:
    """Digest of a frame's pixel values, whatever the compression; None (and a reason) where they cannot be read."""
    digest = hashlib.blake2b()
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with fits.open(frame.file, memmap=False) as hdus:
                for index in frame.hdus:
                    digest.update(np.ascontiguousarray(hdus[index].data, dtype="<f8").tobytes())
    except Exception as problem:
        # Damaged compressed data raise whatever the decompressor likes; the file then is the problem, not the run.
        frame.reasons.append(f"the pixels cannot be read: {problem}")
        return None
    return digest.digest()


def _place(frames: list[Frame], targets: Sequence[Any]) -> None:
    """Bring the coordinates to ICRS; the targets' own stand in where a science frame has none."""
    for equinox in {frame.equinox for frame in frames} - {""}:
        turned = [frame for frame in frames if frame.equinox == equinox]
        ra, dec = geometry.to_icrs([frame.ra for frame in turned], [frame.dec for frame in turned], equinox)
        for frame, new_ra, new_dec in zip(turned, ra.tolist(), dec.tolist(), strict=True):
            frame.ra, frame.dec = new_ra, new_dec
    known = {}
    for target in targets:
        if getattr(target, "ra", None) is not None and getattr(target, "dec", None) is not None:
            known[normal_name(getattr(target, "object", None) or target.name)] = float(target.ra), float(target.dec)
    for frame in frames:
        if frame.kind == "science" and not math.isfinite(frame.ra):
            frame.ra, frame.dec = known.get(normal_name(frame.object), (frame.ra, frame.dec))


def _group(table: dict[str, NDArray[Any]], instrument: Instrument, gap: float) -> None:
    """Fill visit, cycle and position of the science frames in use."""
    chosen = np.flatnonzero((table["kind"] == "science") & (table["status"] == "used"))
    for name in _COUNTERS:
        table[name] = np.full(len(table["kind"]), -1, dtype=np.int64)
    if chosen.size == 0:
        return
    names, filters = table["object"][chosen].tolist(), table["filter"][chosen].tolist()
    table["visit"][chosen] = grouping.visits(names, filters, table["mjd"][chosen], table["exposure"][chosen], gap)
    for number in np.unique(table["visit"][chosen]):
        frames = np.flatnonzero(table["visit"] == number)
        if instrument.wave_plate is None:
            table["position"][frames] = 1
        else:
            table["position"][frames] = grouping.positions(
                grouping.within_turn(table["psi"][frames], instrument.wave_plate.tolerance),
                instrument.wave_plate.tolerance,
            )
        table["cycle"][frames] = grouping.cycles(table["position"][frames], table["mjd"][frames])


def _orient(table: dict[str, NDArray[Any]], instrument: Instrument) -> None:
    """Fill eta, altitude, airmass and chi; angles run on without jumps of a turn within a visit."""
    if instrument.site is None:
        eta = altitude = np.full(len(table["kind"]), math.nan)
    else:
        # Lamp and dome exposures point nowhere on the sky.
        ra = np.where(table["kind"] == "science", table["ra"], math.nan)
        eta, altitude = geometry.zenith_angles(ra, table["dec"], table["mjd"], instrument.site)
    eta = _continuous(eta, table["visit"])
    table["altitude"] = altitude
    table["airmass"] = np.where(np.isfinite(table["airmass"]), table["airmass"], geometry.airmass_of(altitude))
    chi = geometry.position_angles(table["chi"], eta, altitude, instrument.orientation)
    table["eta"], table["chi"] = eta, _continuous(chi, table["visit"])


def _continuous(angle: NDArray[np.float64], visit: NDArray[np.int64]) -> NDArray[np.float64]:
    result = angle.copy()
    for number in np.unique(visit[visit > 0]):
        frames = np.flatnonzero((visit == number) & np.isfinite(angle))
        result[frames] = np.unwrap(result[frames], period=360.0)
    return result


def _tabulate(frames: list[Frame], instrument: Instrument, gap: float) -> Table:
    data: dict[str, NDArray[Any]] = {}
    for frame_name in ("exposure", "mjd", "psi", "chi", "airmass", "ra", "dec", "gain"):
        data[frame_name] = np.array([getattr(frame, frame_name) for frame in frames], dtype=float)
    for frame_name in ("file", "name", "kind", "object", "filter", "wave_plate", "shape"):
        data[frame_name] = np.array([getattr(frame, frame_name) for frame in frames], dtype=str)
    status = ["unread" if frame.unread else "set aside" if frame.reasons else "used" for frame in frames]
    data["status"] = np.array(status, dtype=str)
    data["reason"] = np.array([_sentence(frame.reasons) for frame in frames], dtype=str)
    data["note"] = np.array([_sentence(frame.notes) for frame in frames], dtype=str)
    _group(data, instrument, gap)
    _orient(data, instrument)
    table = Table({name: data[name] for name in _COLUMNS})
    for name, unit in _NUMBERS.items():
        table[name].unit = unit or None
    return table


def _sentence(parts: list[str]) -> str:
    return "; ".join(re.sub(r"\s+", " ", part) for part in dict.fromkeys(parts))
