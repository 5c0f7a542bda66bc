"""The file of a visit: what is written comes back, whole or not at all."""

from __future__ import annotations

from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits

from hwpol.errors import InputError
from hwpol.products import VisitFile, read_visit, write_visit
from hwpol.products.visit_file import BEAM_COLUMNS, CURVE_COLUMNS, FRAME_COLUMNS


def visit_of(beams: int = 2, curves: int = 1, frames: int = 4, picture: bool = True) -> VisitFile:
    rng = np.random.default_rng(5)

    def numbers(*shape: int) -> Any:
        return rng.normal(size=shape)

    return VisitFile(
        number=7,
        target="Target",
        filter="V",
        radius=5.5,
        annulus=(8.0, 12.5),
        pixel_scale=np.nan,
        beams=tuple(f"b{b}" for b in range(beams)),
        # Single precision is what the pictures are stored in.
        stamps=numbers(beams, 5, 5).astype(np.float32).astype(float),
        stamp_corner=numbers(beams, 2),
        stamp_place=numbers(beams, 2),
        **{name: numbers(6) for name in ("radii", "growth", "curve_q", "curve_u", "curve_q_err", "curve_u_err")},
        files=tuple(f"raw/{k}.fits" for k in range(frames)),
        frames={name: numbers(frames) for name in FRAME_COLUMNS}
        | {name: numbers(frames, beams) for name in BEAM_COLUMNS},
        curves=tuple(f"c{m}" for m in range(curves)),
        modulation={name: numbers(frames, curves) for name in CURVE_COLUMNS},
        curve_psi=numbers(9),
        curve_model=numbers(9, curves),
        picture=numbers(4, 6).astype(np.float32).astype(float) if picture else None,
        picture_corner=(1.5, 2.5) if picture else (0.0, 0.0),
        picture_step=3 if picture else 1,
    )


def same(a: Any, b: Any) -> bool:
    if isinstance(a, dict):
        return a.keys() == b.keys() and all(same(a[key], b[key]) for key in a)
    if isinstance(a, np.ndarray):
        return a.shape == b.shape and np.array_equal(a, b, equal_nan=True)
    return bool(a == b or (a != a and b != b))


@pytest.mark.parametrize(
    ("beams", "curves", "frames", "picture"), [(2, 1, 4, True), (1, 1, 1, False), (4, 4, 8, True), (3, 3, 5, False)]
)
def test_what_is_written_comes_back(tmp_path: Path, beams: int, curves: int, frames: int, picture: bool) -> None:
    visit = visit_of(beams, curves, frames, picture)
    back = read_visit(write_visit(visit, tmp_path / "visits" / "visit_007.fits"))
    for item in fields(VisitFile):
        assert same(getattr(visit, item.name), getattr(back, item.name)), item.name


def test_unknown_numbers_and_no_curve(tmp_path: Path) -> None:
    visit = replace(visit_of(), curve_psi=np.empty(0), curve_model=np.empty((0, 1)), growth=np.full(6, np.nan))
    back = read_visit(write_visit(visit, tmp_path / "v.fits"))
    assert back.curve_psi.shape == (0,)
    assert back.curve_model.shape == (0, 1)
    assert np.isnan(back.growth).all()


def test_file_follows_the_standard(tmp_path: Path) -> None:
    path = write_visit(visit_of(), tmp_path / "v.fits")
    with fits.open(path, checksum=True) as hdus:
        hdus.verify("exception")
        assert hdus["FRAMES"].columns["sky"].unit == "ct/pix"


def test_names_outside_ascii_do_not_break_the_file(tmp_path: Path) -> None:
    back = read_visit(write_visit(replace(visit_of(), target="Véga\n", files=tuple("éàü?")), tmp_path / "v.fits"))
    assert back.target == "V?ga?"


@pytest.mark.parametrize("content", [b"", b"not a FITS file", b"SIMPLE  =                    T"])
def test_other_files_are_refused_in_words(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "v.fits"
    path.write_bytes(content)
    with pytest.raises(InputError, match=r"v\.fits: cannot be read as the file of a visit"):
        read_visit(path)
