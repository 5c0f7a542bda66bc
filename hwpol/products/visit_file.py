"""The file of one visit: what its figures need and no table holds."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.table import Table
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.products.writing import whole, write_fits

Array = NDArray[np.float64]

#: Columns of the table FRAMES that hold a number a frame, with unit and meaning.
FRAME_COLUMNS: dict[str, tuple[str, str]] = {
    "cycle": ("", "cycle in the visit, from 1"),
    "mjd": ("d", "middle of the exposure, UTC"),
    "psi": ("deg", "angle of the plate's fast axis, instrument frame"),
    "exposure": ("s", "exposure time"),
    "airmass": ("", "airmass"),
    "shift_x": ("pix", "pointing against the first frame"),
    "shift_y": ("pix", "pointing against the first frame"),
    "transparency": ("", "light of the visit's sources against its median over the visit"),
}
#: Columns with a number a frame and beam.
BEAM_COLUMNS: dict[str, tuple[str, str]] = {
    "fwhm": ("pix", "full width at half maximum of the stars"),
    "ellipticity": ("", "of the stars' images"),
    "sky": ("electron / pix", "sky at the first target"),
}
#: Columns with a number a frame and curve: see `VisitFile.modulation`.
CURVE_COLUMNS: dict[str, tuple[str, str]] = {
    "value": ("", "modulation of the first target"),
    "error": ("", "its error from the counts"),
    "model": ("", "what the fit says"),
}


@dataclass(frozen=True)
class VisitFile:
    """One visit in plain arrays: K frames, B beams, R radii, M modulation curves.

    Attributes
    ----------
    number : int
    target, filter : str
        Name of the first target, which stamps, radius curve and modulation are of; filter as in the header.
    radius : float
        Aperture, pixels.
    annulus : tuple of float
        Inner and outer radius of the sky, pixels.
    pixel_scale : float
        Seconds of arc a pixel; NaN where unknown.
    beams : tuple of str
    stamps : ndarray, shape (B, n, n)
        Picture in every beam of the first frame, electrons.
    stamp_corner, stamp_place : ndarray, shape (B, 2)
        Raw pixel (x, y) of each picture's first element, and of the target.
    radii, growth, curve_q, curve_u, curve_q_err, curve_u_err : ndarray, shape (R,)
        Light inside each radius relative to the largest; q and u (instrument frame) at each radius.
    files : tuple of str, length K
    frames : dict of str to ndarray
        The columns of `FRAME_COLUMNS`, shape (K,), and of `BEAM_COLUMNS`, shape (K, B).
    curves : tuple of str, length M
        What is modulated: "difference" of two perpendicular beams over their sum, or else each beam relative to its
        mean.
    modulation : dict of str to ndarray, shape (K, M)
        The columns of `CURVE_COLUMNS`.
    curve_psi : ndarray, shape (P,)
    curve_model : ndarray, shape (P, M)
        The fit at angles in between; empty where the field turned within the visit.
    picture : ndarray, shape (ny, nx), or None
        The field in the first beam and frame, electrons a detector pixel.
    picture_corner : tuple of float
        Raw pixel (x, y) of the centre of its first element.
    picture_step : int
        Detector pixels along a side of its elements.
    """

    number: int
    target: str
    filter: str
    radius: float
    annulus: tuple[float, float]
    pixel_scale: float
    beams: tuple[str, ...]
    stamps: Array
    stamp_corner: Array
    stamp_place: Array
    radii: Array
    growth: Array
    curve_q: Array
    curve_u: Array
    curve_q_err: Array
    curve_u_err: Array
    files: tuple[str, ...]
    frames: dict[str, Array]
    curves: tuple[str, ...]
    modulation: dict[str, Array]
    curve_psi: Array
    curve_model: Array
    picture: Array | None = None
    picture_corner: tuple[float, float] = (0.0, 0.0)
    picture_step: int = 1


_CURVE = ("radii", "growth", "curve_q", "curve_u", "curve_q_err", "curve_u_err")


def write_visit(visit: VisitFile, path: str | Path) -> Path:
    """Write a visit as FITS: image STAMPS, tables BEAMS, RADII, FRAMES, MODEL, image FIELD where there is one."""
    primary = fits.PrimaryHDU()
    header = primary.header
    header["VISIT"] = visit.number, "number of the visit in the night"
    header["TARGET"] = _ascii(visit.target), "first target"
    header["BAND"] = _ascii(visit.filter), "filter as in the header"
    header["RADIUS"] = _number(visit.radius), "[pix] aperture"
    header["SKYIN"] = _number(visit.annulus[0]), "[pix] inner radius of the sky"
    header["SKYOUT"] = _number(visit.annulus[1]), "[pix] outer radius of the sky"
    header["PIXSCALE"] = _number(visit.pixel_scale), "[arcsec/pix]"
    stamps = fits.ImageHDU(np.asarray(visit.stamps, dtype=np.float32), name="STAMPS")
    stamps.header["BUNIT"] = "electron"
    beams = Table({"name": [_ascii(name) for name in visit.beams]})
    for place, points in (("corner", visit.stamp_corner), ("place", visit.stamp_place)):
        for axis, letter in enumerate("xy"):
            beams[f"{place}_{letter}"] = np.asarray(points, dtype=float)[:, axis]
    frames = Table({"file": [_ascii(name) for name in visit.files]})
    columns = {**visit.frames, **visit.modulation}
    for name in (*FRAME_COLUMNS, *BEAM_COLUMNS, *CURVE_COLUMNS):
        frames[name] = np.asarray(columns[name], dtype=float)
    hdus: list[Any] = [
        primary,
        stamps,
        _table(beams, "BEAMS"),
        _table(Table({name: np.asarray(getattr(visit, name), dtype=float) for name in _CURVE}), "RADII"),
        _table(frames, "FRAMES", {**FRAME_COLUMNS, **BEAM_COLUMNS, **CURVE_COLUMNS}),
        _table(Table({"psi": visit.curve_psi, "model": visit.curve_model}), "MODEL"),
    ]
    hdus[-1].header["CURVES"] = ",".join(_ascii(name).replace(",", ";") for name in visit.curves), "one a column"
    if visit.picture is not None:
        field = fits.ImageHDU(np.asarray(visit.picture, dtype=np.float32), name="FIELD")
        field.header["BUNIT"] = "electron / pix"
        field.header["CORNERX"] = visit.picture_corner[0], "[pix] raw x of the first element's centre"
        field.header["CORNERY"] = visit.picture_corner[1], "[pix] raw y of the first element's centre"
        field.header["STEP"] = visit.picture_step, "[pix] side of an element"
        hdus.append(field)
    with whole(path) as temporary:
        write_fits(fits.HDUList(hdus), temporary)
    return Path(path)


def read_visit(path: str | Path) -> VisitFile:
    """Read a file of `write_visit`.

    Raises
    ------
    InputError
        When the file is missing or is no such file.
    """
    source = Path(path)
    try:
        with warnings.catch_warnings(), source.open("rb") as stream:
            # What is wrong with the file is told by what it lacks.
            warnings.simplefilter("ignore")
            with fits.open(stream, memmap=False) as hdus:
                return _from_hdus(hdus)
    except (OSError, KeyError, ValueError, TypeError, IndexError) as problem:
        first = str(problem).splitlines()[0] if str(problem) else type(problem).__name__
        raise InputError(f"{source}: cannot be read as the file of a visit ({first}); reduce the night again") from None


def _from_hdus(hdus: Any) -> VisitFile:
    header = hdus[0].header
    beams, radii, frames, model = (hdus[name].data for name in ("BEAMS", "RADII", "FRAMES", "MODEL"))
    images = {hdu.name: hdu for hdu in hdus}
    field = images.get("FIELD")
    curves = tuple(str(hdus["MODEL"].header["CURVES"]).split(","))
    number, many = len(beams), len(curves)
    return VisitFile(
        number=int(header["VISIT"]),
        target=str(header["TARGET"]),
        filter=str(header["BAND"]),
        radius=_float(header["RADIUS"]),
        annulus=(_float(header["SKYIN"]), _float(header["SKYOUT"])),
        pixel_scale=_float(header["PIXSCALE"]),
        beams=tuple(str(name) for name in beams["name"]),
        stamps=np.asarray(hdus["STAMPS"].data, dtype=float),
        stamp_corner=_pairs(beams, "corner"),
        stamp_place=_pairs(beams, "place"),
        **{name: _plain(radii[name]) for name in _CURVE},
        files=tuple(str(name) for name in frames["file"]),
        frames={name: _plain(frames[name]) for name in FRAME_COLUMNS}
        | {name: _plain(frames[name]).reshape(-1, number) for name in BEAM_COLUMNS},
        curves=curves,
        modulation={name: _plain(frames[name]).reshape(-1, many) for name in CURVE_COLUMNS},
        curve_psi=_plain(model["psi"]),
        curve_model=_plain(model["model"]).reshape(-1, many),
        picture=None if field is None else np.asarray(field.data, dtype=float),
        picture_corner=(0.0, 0.0)
        if field is None
        else (float(field.header["CORNERX"]), float(field.header["CORNERY"])),
        picture_step=1 if field is None else int(field.header["STEP"]),
    )


def _table(table: Table, name: str, meanings: dict[str, tuple[str, str]] | None = None) -> fits.BinTableHDU:
    hdu = fits.table_to_hdu(table)
    hdu.header["EXTNAME"] = name
    for number, column in enumerate(table.colnames, start=1):
        unit, text = (meanings or {}).get(column, ("", ""))
        if unit:
            # FITS does not know the electron.
            hdu.header[f"TUNIT{number}"] = unit.replace("electron", "ct").replace(" / ", "/")
        if text:
            hdu.header[f"TCOMM{number}"] = text
    return hdu


def _plain(values: Any) -> Array:
    return np.asarray(values, dtype=np.float64)


def _pairs(table: Any, name: str) -> Array:
    return np.stack([_plain(table[f"{name}_x"]), _plain(table[f"{name}_y"])], axis=-1)


def _ascii(text: str) -> str:
    """Text that a FITS card or cell can hold."""
    return "".join(c if " " <= c <= "~" else "?" for c in str(text))


def _number(value: float) -> float | str:
    return float(value) if np.isfinite(value) else "unknown"


def _float(value: Any) -> float:
    return float(value) if isinstance(value, int | float) else float("nan")
