"""Raw pixels: every storage form gives the same adu, boxes equal cuts, failures are plain messages."""

from __future__ import annotations

import bz2
import gzip
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import InputError
from hwpol.frames.opening import layout_of, read_box
from hwpol.pixels import Box

SHAPE = (23, 31)


def _image(kind: str) -> np.ndarray:
    rng = np.random.default_rng(5)
    if kind.startswith("f"):
        return rng.normal(500.0, 30.0, SHAPE).astype(kind)
    information = np.iinfo(kind)
    low, high = max(information.min, -(2**24)), min(information.max, 2**24)
    image = rng.integers(low, high, SHAPE, endpoint=True).astype(kind)
    image[0, :2] = low, high
    return image


@pytest.mark.parametrize("kind", ["u1", "u2", "i2", "i4", "f4"])
@pytest.mark.parametrize("form", ["plain", "gz", "bz2", "tiles"])
def test_every_form_gives_the_stored_values_exactly(tmp_path: Path, kind: str, form: str) -> None:
    image = _image(kind)
    path = tmp_path / "a.fits"
    if form == "tiles":
        lossless = {"compression_type": "GZIP_2", "quantize_level": 0} if kind == "f4" else {}
        fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(image, **lossless)]).writeto(path)
    else:
        fits.writeto(path, image)
        pack = {"plain": bytes, "gz": gzip.compress, "bz2": bz2.compress}[form]
        path.write_bytes(pack(path.read_bytes()))
    raw = read_box(path)
    assert raw.data.dtype == np.float32
    assert raw.data.dtype.isnative
    np.testing.assert_array_equal(raw.data, image.astype(np.float32))
    assert raw.box == Box(0, 0, 31, 23)
    assert raw.layout.full_scale == (np.inf if kind == "f4" else float(np.iinfo(kind).max))
    stamp = read_box(path, 0, Box(4, 5, 9, 17))
    np.testing.assert_array_equal(stamp.data, image[5:17, 4:9].astype(np.float32))


def test_scaled_blank_and_nan_pixels(tmp_path: Path) -> None:
    stored = np.arange(12, dtype=np.int16).reshape(3, 4)
    hdu = fits.PrimaryHDU(stored)
    hdu.header["BLANK"] = 7
    # Set after construction, so that the stored integers stay as they are.
    hdu.header["BSCALE"], hdu.header["BZERO"] = 0.5, 10.0
    hdu.writeto(tmp_path / "scaled.fits")
    with fits.open(tmp_path / "scaled.fits", do_not_scale_image_data=True) as hdus:
        raw_integers = hdus[0].data.astype(float)
        zero, scale, blank = (hdus[0].header.get(k, d) for k, d in (("BZERO", 0.0), ("BSCALE", 1.0), ("BLANK", 7)))
    expected = raw_integers * scale + zero
    expected[raw_integers == blank] = np.nan
    data = read_box(tmp_path / "scaled.fits").data
    np.testing.assert_array_equal(data, expected.astype(np.float32))
    assert np.isnan(data).sum() == 1
    image = np.ones((3, 4))
    image[1, 2] = np.nan
    fits.writeto(tmp_path / "nan.fits", image)
    assert np.argwhere(np.isnan(read_box(tmp_path / "nan.fits").data)).tolist() == [[1, 2]]


@given(x0=st.integers(-5, 40), y0=st.integers(-5, 30), width=st.integers(-3, 40), height=st.integers(-3, 30))
@settings(deadline=None, max_examples=40)
def test_box_is_the_cut_of_the_whole(
    tmp_path_factory: pytest.TempPathFactory, x0: int, y0: int, width: int, height: int
) -> None:
    path = tmp_path_factory.getbasetemp() / "box.fits"
    image = _image("u2")
    if not path.exists():
        fits.writeto(path, image)
    raw = read_box(path, 0, Box(x0, y0, x0 + width, y0 + height))
    y, x = np.mgrid[: SHAPE[0], : SHAPE[1]]
    inside = (x >= x0) & (x < x0 + width) & (y >= y0) & (y < y0 + height)
    assert raw.data.shape == (raw.box.y1 - raw.box.y0, raw.box.x1 - raw.box.x0)
    np.testing.assert_array_equal(raw.data.ravel(), image[inside])
    if raw.data.size:
        assert (raw.box.x0, raw.box.y0) == (x[inside].min(), y[inside].min())


def test_extensions_by_number_and_name_and_third_axis_of_length_one(tmp_path: Path) -> None:
    first, second = _image("u2"), _image("f4")
    path = tmp_path / "many.fits"
    fits.HDUList(
        [fits.PrimaryHDU(), fits.ImageHDU(first, name="ORD"), fits.ImageHDU(second[None], name="EXT")]
    ).writeto(path)
    np.testing.assert_array_equal(read_box(path, "ord").data, first)
    np.testing.assert_array_equal(read_box(path, 2).data, second)
    assert layout_of(path, "EXT").shape == SHAPE


def test_window_cards_separate_frames_of_equal_size(tmp_path: Path) -> None:
    for name, binning in (("a", 1), ("b", 2)):
        fits.writeto(tmp_path / f"{name}.fits", _image("u2"), fits.Header({"XBINNING": binning}))
    assert layout_of(tmp_path / "a.fits").form != layout_of(tmp_path / "b.fits").form


def test_a_changed_file_is_read_anew(tmp_path: Path) -> None:
    path = tmp_path / "a.fits"
    for image in (_image("u2"), _image("f4")[:5]):
        fits.writeto(path, image, overwrite=True)
        np.testing.assert_array_equal(read_box(path).data, image)


@pytest.mark.parametrize("pack", [bytes, gzip.compress])
@pytest.mark.parametrize(
    ("content", "extension", "words"),
    [
        (None, 0, "cannot be read"),
        (b"", 0, "expected a FITS file"),
        (b"not FITS at all" * 400, 0, "expected a FITS file"),
        ("whole", 3, "no HDU 3"),
        ("whole", "NOPE", "no HDU 'NOPE'"),
        ("table", 1, "no two-dimensional image"),
        ("table", 0, "no two-dimensional image"),
    ],
)
def test_failures_name_the_file(
    tmp_path: Path, pack: type, content: bytes | str | None, extension: int | str, words: str
) -> None:
    path = tmp_path / "night_017.fits"
    if content == "whole":
        fits.writeto(path, _image("u2"))
    elif content == "table":
        fits.HDUList(
            [fits.PrimaryHDU(), fits.BinTableHDU.from_columns([fits.Column("a", "J", array=np.arange(3))])]
        ).writeto(path)
    elif content is not None:
        path.write_bytes(content)
    if path.exists():
        path.write_bytes(pack(path.read_bytes()))
    with pytest.raises(InputError, match="night_017") as caught:
        read_box(path, extension)
    assert words in str(caught.value)


@pytest.mark.parametrize("kept", [0.99, 0.5])
@pytest.mark.parametrize("form", ["plain", "gz", "tiles"])
def test_files_cut_short_are_refused(tmp_path: Path, kept: float, form: str) -> None:
    path = tmp_path / "short.fits"
    image = np.random.default_rng(1).integers(0, 60000, (200, 200)).astype(np.uint16)
    if form == "tiles":
        fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(image)]).writeto(path)
    else:
        fits.writeto(path, image)
    content = path.read_bytes()
    if form == "gz":
        content = gzip.compress(content)
    # Cut into the pixels, not only into the padding of the last FITS block.
    path.write_bytes(content[: int(kept * (len(content) - 2880))])
    with pytest.raises(InputError, match=r"short\.fits"):
        read_box(path)
