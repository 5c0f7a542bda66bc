"""Light added to raw frames: the calibrator takes out what was put in, files keep all else."""

from __future__ import annotations

import gzip
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import InputError
from hwpol.frames.adding import added_adu, copy_with
from hwpol.frames.calibrator import Calibrator
from hwpol.instrument.description import Beam, Detector, Instrument

SHAPE = (20, 30)
DETECTOR = Detector(gain=2.0, read_noise=3.0, saturation=60000.0)
INSTRUMENT = Instrument("test", DETECTOR, {}, (Beam("o", 0.0), Beam("e", 90.0)))
FLOAT32 = 6e-8
"""Relative rounding of one float32 number."""


class Mean:
    """A generator whose Poisson law is its mean: expectation in, expectation out."""

    def poisson(self, expected: Any) -> Any:
        return expected

    def random(self, shape: Any) -> Any:
        return np.zeros(shape)


def night(folder: Path, images: dict[str, Any], instrument: Instrument) -> tuple[Calibrator, dict[str, Path]]:
    rows, paths = [], {}
    for kind, image in images.items():
        for copy in range(1 if kind == "science" else 2):
            path = folder / f"{kind}{copy}.fits"
            fits.writeto(path, np.broadcast_to(image, SHAPE).astype(np.float32))
            rows.append(
                {"file": str(path), "kind": kind, "filter": "V", "exposure": 5.0 if kind != "bias" else 0.0,
                 "psi": 0.0, "gain": np.nan, "status": "used"}
            )  # fmt: skip
            paths[kind] = path
    return Calibrator(SimpleNamespace(table=Table(rows), instrument=instrument)), paths


@settings(deadline=None, max_examples=12)
@given(
    curve=st.floats(-3e-6, 3e-6), level=st.floats(1100.0, 20000.0), light=st.floats(1.0, 30000.0),
    response=st.floats(0.6, 1.4),
)  # fmt: skip
def test_calibrator_takes_out_what_was_put_in(
    tmp_path_factory: pytest.TempPathFactory, curve: float, level: float, light: float, response: float
) -> None:
    folder = tmp_path_factory.mktemp("adding")
    instrument = replace(INSTRUMENT, detector=replace(DETECTOR, linearity=(1.0, curve)))
    flat = np.ones(SHAPE)
    flat[:, :9] = response
    calibrator, paths = night(
        folder, {"bias": 1000.0, "dark": 1030.0, "flat": 1000.0 + 8000.0 * flat, "science": level}, instrument
    )
    wanted = np.zeros(SHAPE)
    wanted[5:15, 4:20] = light
    options: dict[str, Any] = {"filter": "V", "exposure": 5.0}
    adu = added_adu(calibrator, paths["science"], 0, wanted, Mean(), **options)  # type: ignore[arg-type]
    copy_with(paths["science"], folder / "copy.fits", {0: adu}, Mean(), "light")  # type: ignore[arg-type]
    before, after = (calibrator.pixels(f, 0, **options).data for f in (paths["science"], folder / "copy.fits"))
    # Raw values of up to 60000 adu, twice in electrons, a few float32 steps each, over a response down to 0.6.
    np.testing.assert_allclose(after - before, wanted, atol=60000 * 2 * 10 * FLOAT32 / 0.6)


def test_electrons_are_drawn_before_the_flat_is_taken_off(tmp_path: Path) -> None:
    flat = np.ones(SHAPE)
    flat[:, :15] = 0.5
    calibrator, paths = night(tmp_path, {"bias": 1000.0, "flat": 1000.0 + 8000.0 * flat, "science": 2000.0}, INSTRUMENT)
    rng = np.random.default_rng(1)
    drawn = np.stack(
        [
            added_adu(calibrator, paths["science"], 0, np.full(SHAPE, 400.0), rng, filter="V", exposure=5.0)
            for _ in range(50)
        ]
    )
    mean = 400.0 * response_of(calibrator, paths["science"])
    for half in (slice(0, 15), slice(15, 30)):
        # 15000 Poisson numbers of one mean: it is known to sqrt(mean / 15000), their variance to sqrt(2 / 15000).
        electrons, wanted = 2.0 * drawn[:, :, half], float(mean[:, half].mean())
        assert np.var(electrons) == pytest.approx(wanted, rel=5 * np.sqrt(2 / 15000))
        assert np.mean(electrons) == pytest.approx(wanted, abs=5 * np.sqrt(wanted / 15000))


def response_of(calibrator: Calibrator, file: Path) -> Any:
    """Relative response as the flats tell it: 1000 adu are 2000 electrons over the response."""
    return 2000.0 / calibrator.pixels(file, 0, filter="V", exposure=5.0).data


def test_light_of_another_shape_is_refused(tmp_path: Path) -> None:
    calibrator, paths = night(tmp_path, {"bias": 1000.0, "science": 2000.0}, INSTRUMENT)
    with pytest.raises(InputError, match="shape"):
        added_adu(
            calibrator, paths["science"], 0, np.ones((3, 3)), np.random.default_rng(), filter="V", exposure=5.0
        )  # fmt: skip


def raw(form: str, folder: Path) -> Path:
    """A file of two HDUs, 1000 adu everywhere, in one of the forms that archives use."""
    image = np.full(SHAPE, 1000, np.float32 if form == "float" else np.uint16)
    primary = fits.PrimaryHDU(None if form == "tiles" else image)
    primary.header["OBJECT"] = ("Fern", "the target")
    second = fits.CompImageHDU(image, name="SECOND") if form == "tiles" else fits.ImageHDU(image, name="SECOND")
    path = folder / ("frame.fits.gz" if form == "gzip" else "frame.fits")
    fits.HDUList([primary, second]).writeto(folder / "plain.fits", checksum=True)
    content = (folder / "plain.fits").read_bytes()
    path.write_bytes(gzip.compress(content) if form == "gzip" else content)
    return path


@pytest.mark.parametrize("form", ["uint16", "float", "gzip", "tiles"])
def test_copy_of_every_form(tmp_path: Path, form: str) -> None:
    file = raw(form, tmp_path)
    before = file.read_bytes()
    more = np.zeros(SHAPE)
    more[3, 4], more[5, 6] = 250.0, 90000.0
    copy_with(file, tmp_path / "copy.fits", {"SECOND": more}, np.random.default_rng(0), "stars added")
    assert file.read_bytes() == before
    with fits.open(tmp_path / "copy.fits", checksum=True) as hdus:
        data = hdus["SECOND"].data.astype(float)
        assert data[3, 4] == 1250.0
        assert data[5, 6] == (91000.0 if form == "float" else 65535.0)
        assert np.sum(data != 1000.0) == 2
        assert "stars added" in str(hdus["SECOND"].header["HISTORY"])
        assert hdus[0].header["OBJECT"] == "Fern"
        assert hdus[0].header.comments["OBJECT"] == "the target"
        if form != "tiles":
            assert np.all(hdus[0].data == 1000)


def test_digits_keep_the_mean(tmp_path: Path) -> None:
    file = raw("uint16", tmp_path)
    copy_with(file, tmp_path / "copy.fits", {0: np.full(SHAPE, 0.3)}, np.random.default_rng(2), "light")
    added = fits.getdata(tmp_path / "copy.fits").astype(float) - 1000.0
    assert set(np.unique(added)) == {0.0, 1.0}
    # A share of 0.3 of 600 pixels: error sqrt(0.3 x 0.7 / 600), five of them.
    assert np.mean(added) == pytest.approx(0.3, abs=5 * np.sqrt(0.21 / added.size))


def test_pixels_without_a_value_stay_without(tmp_path: Path) -> None:
    image = np.full(SHAPE, 7, np.int16)
    image[0, 0] = -99
    hdu = fits.PrimaryHDU(image)
    hdu.header["BLANK"] = -99
    hdu.writeto(tmp_path / "frame.fits")
    copy_with(tmp_path / "frame.fits", tmp_path / "copy.fits", {0: np.full(SHAPE, 5.0)}, np.random.default_rng(0), "x")
    with fits.open(tmp_path / "copy.fits", do_not_scale_image_data=True) as hdus:
        assert hdus[0].data[0, 0] == -99
        assert np.all(hdus[0].data[1:] == 12)


def test_nothing_is_written_over(tmp_path: Path) -> None:
    file = raw("uint16", tmp_path)
    before = file.read_bytes()
    with pytest.raises(InputError, match="exists already"):
        copy_with(file, file, {0: np.ones(SHAPE)}, np.random.default_rng(0), "x")
    assert file.read_bytes() == before
