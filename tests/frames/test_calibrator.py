"""Calibrated pixels: values worked out by hand, error bars against simulated counts, stamps, what is missing."""

from __future__ import annotations

import gzip
import pickle
from dataclasses import dataclass, field, replace
from functools import cached_property
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
from hwpol.frames.calibrator import Calibrator
from hwpol.instrument.description import Beam, Detector, Instrument, Section
from hwpol.pixels import Box, PixelMask, Pixels

SHAPE = (60, 80)
DETECTOR = Detector(gain=2.0, read_noise=3.0, saturation=50000.0)
BEAMS = (Beam("o", 0.0, section=Section(0, 80, 0, 30)), Beam("e", 90.0, section=Section(0, 80, 30, 60)))
ROUNDING = 1e-6
"""float32: a few steps of 6e-8 each, relative to raw values up to ten times the result."""


@dataclass
class Night:
    """A folder of frames with the table a set of frames would have."""

    folder: Path
    instrument: Instrument = field(default_factory=lambda: Instrument("test", DETECTOR, {}, BEAMS))
    rows: list[dict[str, Any]] = field(default_factory=list)

    @cached_property
    def made(self) -> Calibrator:
        return self.calibrator()

    def add(
        self, kind: str, image: Any, exposure: float = 0.0, psi: float = 0.0, filter: str = "V", **more: Any
    ) -> Path:
        path = self.folder / f"{kind}{len(self.rows):03d}.fits"
        array = np.broadcast_to(np.asarray(image), SHAPE) if np.ndim(image) == 0 else np.asarray(image)
        fits.writeto(path, array.astype(more.pop("dtype", np.float32)))
        row = {"file": str(path), "kind": kind, "filter": filter, "exposure": exposure, "psi": psi, "gain": np.nan}
        self.rows.append({**row, "status": "used", **more})
        return path

    def calibrator(self, **options: Any) -> Calibrator:
        return Calibrator(SimpleNamespace(table=Table(self.rows), instrument=self.instrument), **options)


@pytest.fixture
def night(tmp_path: Path) -> Night:
    return Night(tmp_path)


def _noisy(
    rng: np.random.Generator, electrons: Any, gain: float = 2.0, noise: float = 3.0, bias: float = 1000.0
) -> Any:
    electrons = np.broadcast_to(electrons, SHAPE)
    return np.clip(np.round((rng.poisson(electrons) + rng.normal(0, noise, SHAPE)) / gain + bias), 0, 65535)


def _fill(night: Night, rng: np.random.Generator, response: Any = 1.0) -> None:
    for _ in range(12):
        night.add("bias", _noisy(rng, 0.0), dtype=np.uint16)
    for _ in range(12):
        night.add("dark", _noisy(rng, 20.0), 10.0, dtype=np.uint16)
    for k in range(12):
        night.add("flat", _noisy(rng, 30000.0 * np.asarray(response)), 1.0, 22.5 * k, dtype=np.uint16)


def test_pixel_worked_by_hand(night: Night) -> None:
    night.instrument = replace(night.instrument, detector=replace(DETECTOR, linearity=(1.0, 1e-6)))
    for _ in range(2):
        night.add("bias", 1000.0)
        night.add("dark", 1020.0, 10.0)
    file = night.add("science", 3000.0, 30.0)
    got = night.calibrator(flat="off").pixels(file, 0, filter="V", exposure=30.0)
    # 3000 - 1000 = 2000; x (1 + 0.002) = 2004; dark 2 adu/s x 30 s: 20 (1 + 2e-5) x 3 = 60.0 ; x 2 electron/adu.
    np.testing.assert_allclose(got.data, (2004.0 - 60.0) * 2.0, rtol=ROUNDING)
    # Photons 3888, dark electrons 120, read noise 9.
    np.testing.assert_allclose(got.variance, 3888.0 + 120.0 + 9.0, rtol=ROUNDING)
    assert (got.x0, got.y0, got.data.shape) == (0, 0, SHAPE)
    assert np.all(got.mask[:30] == 0)
    assert np.all(got.mask[30:] == PixelMask.OUTSIDE)


def test_flat_worked_by_hand(night: Night) -> None:
    response = np.ones(SHAPE)
    response[10, 20] = 0.5
    response[40, 50] = 1.25
    response[20, 30] = 0.1
    response[24:30, 60:66] = 0.0
    for _ in range(2):
        night.add("bias", 1000.0)
        night.add("flat", 1000.0 + 20000.0 * response, 1.0)
    file = night.add("science", 1500.0, 5.0)
    calibrator = night.calibrator()
    first, second = (calibrator.pixels(file, beam, filter="V", exposure=5.0) for beam in (0, 1))
    for got, (y, x), flat in ((first, (10, 20), 0.5), (second, (40, 50), 1.25), (first, (0, 0), 1.0)):
        assert got.data[y, x] == pytest.approx(1000.0 / flat, rel=ROUNDING)
        # The two flats are equal, so their scatter adds no variance.
        assert got.variance[y, x] == pytest.approx((1000.0 + 9.0) / flat**2, rel=ROUNDING)
        assert got.mask[y, x] == 0
    assert first.mask[20, 30] == PixelMask.BAD
    assert np.all(first.mask[24:30, 60:66] == PixelMask.OUTSIDE)
    assert first.data[26, 62] == pytest.approx(1000.0)


@pytest.mark.parametrize("signal", [0.0, 30.0, 20000.0])
def test_variance_passes_a_pull_test(night: Night, signal: float) -> None:
    rng = np.random.default_rng(int(signal) + 4)
    response = rng.normal(1.0, 0.03, SHAPE)
    _fill(night, rng, response)
    files = [night.add("science", _noisy(rng, signal * response + 20.0), 10.0, dtype=np.uint16) for _ in range(3)]
    calibrator = night.calibrator()
    pulls = []
    for file in files:
        for beam, rows in ((0, slice(0, 30)), (1, slice(30, 60))):
            got = calibrator.pixels(file, beam, filter="V", exposure=10.0)
            # The strip's flat has median 1: the truth is scaled by the median response.
            truth = signal * np.median(response[rows])
            good = got.mask == 0
            # The flat's own error, the same in every frame, is told apart.
            flat = calibrator.flat_noise(file, beam, filter="V", exposure=10.0)
            assert 0 < flat < 1e-4
            pulls.append(((got.data - truth) / np.sqrt(got.variance + flat * truth**2))[good])
    pull = np.concatenate(pulls)
    # Counts estimate their own variance, max(electrons, 0) instead of the mean: where they are few, the pull is
    # narrower by what a drawn sample of this estimate tells. Dark electrons 20, read noise 3, twelve frames a master.
    fixed = 29.0 + 9.0 / 12 + 29.0 / 12
    drawn = signal + rng.normal(0.0, np.sqrt(fixed + signal), 200_000)
    expected = np.mean((drawn - signal) ** 2 / (fixed + np.maximum(drawn, 0.0)))
    # 14400 pulls sharing masters: standard error of the mean square below 0.02; 5 sigma, false alarm 6e-7.
    assert np.mean(pull**2) == pytest.approx(expected, abs=0.06)
    assert calibrator.noise_doubtful is False


def test_polarised_lamp_leaves_the_ratio_of_beams_alone(night: Night) -> None:
    rng = np.random.default_rng(8)
    response = rng.normal(1.0, 0.05, SHAPE)
    for _ in range(2):
        night.add("bias", 1000.0)
    angles = 22.5 * np.arange(4)
    sign = np.where(np.arange(SHAPE[0]) < 30, 1.0, -1.0)[:, None]
    for psi in angles:
        modulation = 0.2 * np.cos(np.deg2rad(4 * psi)) + 0.1 * np.sin(np.deg2rad(4 * psi))
        night.add("flat", 1000.0 + 20000.0 * response * (1 + sign * modulation), 1.0, psi)
    y, x = np.mgrid[:60, :80]
    ratios, truths = [], []
    calibrator = night.calibrator()
    for number, psi in enumerate(angles):
        # The star wanders, so that it meets other pixels at each angle.
        share = 0.5 * (1 + 0.03 * np.cos(np.deg2rad(4 * psi)))
        star = sum(
            part * 5e4 * np.exp(-((x - 30 - 5 * number) ** 2 + (y - centre) ** 2) / 8.0)
            for part, centre in ((share, 15), (1 - share, 45))
        )
        file = night.add("science", 1000.0 + star * response, 5.0, psi)
        sums = [
            calibrator.pixels(file, b, Box(0, 30 * b, 80, 30 * b + 30), filter="V", exposure=5.0).data.sum(dtype=float)
            for b in (0, 1)
        ]
        ratios.append(sums[0] / sums[1])
        truths.append(share / (1 - share))
    relative = np.array(ratios) / np.array(truths)
    np.testing.assert_allclose(relative / relative[0], 1.0, rtol=1e-6)


@pytest.fixture(scope="module")
def kept_night(tmp_path_factory: pytest.TempPathFactory) -> tuple[Night, Path, Pixels]:
    night = Night(tmp_path_factory.mktemp("night"))
    rng = np.random.default_rng(21)
    detector = replace(DETECTOR, trim=Section(3, 70, 2, 60), overscan=Section(72, 80, 0, 60))
    night.instrument = replace(night.instrument, detector=detector)
    _fill(night, rng)
    file = night.add("science", _noisy(rng, 400.0), 10.0, dtype=np.uint16)
    return night, file, night.calibrator().pixels(file, 0, filter="V", exposure=10.0)


@given(x0=st.integers(-9, 85), y0=st.integers(-9, 65), width=st.integers(0, 90), height=st.integers(0, 70))
@settings(deadline=None, max_examples=40)
def test_stamps_are_cuts_of_the_whole(
    kept_night: tuple[Night, Path, Pixels], x0: int, y0: int, width: int, height: int
) -> None:
    night, file, whole = kept_night
    box = Box(x0, y0, x0 + width, y0 + height)
    stamp = night.made.pixels(file, 0, box, filter="V", exposure=10.0).cut(whole.box)
    expected = whole.cut(box)
    assert whole.box == Box(3, 2, 70, 60)
    for name in ("data", "variance", "mask"):
        np.testing.assert_array_equal(getattr(stamp, name), getattr(expected, name))
    if expected.data.size:
        assert stamp.box == expected.box


@pytest.mark.parametrize("form", ["gz", "tiles"])
def test_compressed_frames_give_equal_pixels(kept_night: tuple[Night, Path, Pixels], tmp_path: Path, form: str) -> None:
    night, file, whole = kept_night
    path = tmp_path / "packed.fits"
    if form == "gz":
        path.write_bytes(gzip.compress(file.read_bytes()))
    else:
        fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(fits.getdata(file))]).writeto(path)
    got = night.calibrator().pixels(path, 0, filter="V", exposure=10.0)
    for name in ("data", "variance", "mask"):
        np.testing.assert_array_equal(getattr(got, name), getattr(whole, name))


def test_pickles_small_and_uses_the_cache(
    kept_night: tuple[Night, Path, Pixels], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    night, file, whole = kept_night
    calibrator = night.calibrator(cache=tmp_path / "masters")
    calibrator.prepare()
    assert not [path for path in (tmp_path / "masters").iterdir() if path.suffix not in (".npy", ".json")]
    content = pickle.dumps(calibrator)
    assert len(content) < 20000

    def never(*arguments: object) -> None:
        raise AssertionError("a master was made again")

    monkeypatch.setattr("hwpol.frames.masters.combine_frames", never)
    monkeypatch.setattr("hwpol.frames.flats.combine_frames", never)
    got = pickle.loads(content).pixels(file, 0, filter="V", exposure=10.0)
    np.testing.assert_array_equal(got.data, whole.data)
    np.testing.assert_array_equal(got.variance, whole.variance)
    # A bias frame of another content has another name in the cache.
    bias = Path(night.rows[0]["file"])
    original = bias.read_bytes()
    try:
        bias.write_bytes(original + b"\0" * 2880)
        with pytest.raises(AssertionError, match="made again"):
            pickle.loads(content).pixels(file, 0, filter="V", exposure=10.0)
    finally:
        bias.write_bytes(original)


def test_saturated_blank_and_bad_pixels(night: Night) -> None:
    bad = np.zeros(SHAPE, np.uint8)
    bad[3, 4] = 7
    fits.writeto(night.folder / "bad.fits", bad)
    beams = (BEAMS[0], replace(BEAMS[1], saturation=40000.0))
    detector = replace(DETECTOR, bad_pixels=night.folder / "bad.fits")
    night.instrument = replace(night.instrument, detector=detector, beams=beams)
    night.add("bias", 1000.0)
    image = np.full(SHAPE, 2000.0)
    image[5, 5], image[6, 6], image[7, 7] = 50000.0, 49999.0, np.nan
    image[40, 5], image[41, 6] = 40000.0, 39999.0
    file = night.add("science", image, 1.0)
    first, second = (night.calibrator(flat="off").pixels(file, b, filter="V", exposure=1.0) for b in (0, 1))
    marked = {(int(y), int(x)): int(first.mask[y, x]) for y, x in np.argwhere(first.mask[:30])}
    assert marked == {(3, 4): PixelMask.BAD, (5, 5): PixelMask.SATURATED, (7, 7): PixelMask.BAD}
    assert np.argwhere(second.mask[30:] != 0).tolist() == [[10, 5]]
    assert np.isfinite(first.data).all()
    assert np.isfinite(first.variance).all()
    full = night.add("science", np.full(SHAPE, 65535), 1.0, dtype=np.uint16)
    night.instrument = replace(night.instrument, detector=replace(DETECTOR, saturation=None), beams=BEAMS)
    got = night.calibrator(flat="off").pixels(full, 0, filter="V", exposure=1.0)
    assert np.all(got.mask[:30] == PixelMask.SATURATED)


def test_gain_of_beam_header_and_detector(night: Night) -> None:
    night.instrument = replace(night.instrument, beams=(BEAMS[0], replace(BEAMS[1], gain=5.0, read_noise=7.0)))
    for _ in range(2):
        night.add("bias", 1000.0)
    file = night.add("science", 1100.0, 1.0)
    calibrator = night.calibrator(flat="off")
    for beam, gain, expected, noise in ((0, None, 200.0, 3.0), (0, 3.0, 300.0, 3.0), (1, 3.0, 500.0, 7.0)):
        got = calibrator.pixels(file, beam, filter="V", exposure=1.0, gain=gain)
        np.testing.assert_allclose(got.data, expected, rtol=ROUNDING)
        np.testing.assert_allclose(got.variance, expected + noise**2, rtol=ROUNDING)


def test_beams_on_their_own_hdus(night: Night, tmp_path: Path) -> None:
    beams = (Beam("o", 0.0, extension="A"), Beam("e", 90.0, extension="B", gain=3.0))
    night.instrument = replace(night.instrument, beams=beams)

    def write(kind: str, a: float, b: float, exposure: float) -> Path:
        path = night.add(kind, 0.0, exposure)
        hdus = [
            fits.PrimaryHDU(),
            *(fits.ImageHDU(np.full(s, v, np.float32), name=n) for s, v, n in (((20, 30), a, "A"), ((25, 30), b, "B"))),
        ]
        fits.HDUList(hdus).writeto(path, overwrite=True)
        return path

    for _ in range(2):
        write("bias", 100.0, 200.0, 0.0)
        write("flat", 10100.0, 20200.0, 1.0)
    file = write("science", 150.0, 300.0, 1.0)
    calibrator = night.calibrator()
    first, second = (calibrator.pixels(file, b, filter="V", exposure=1.0) for b in (0, 1))
    assert (first.data.shape, second.data.shape) == ((20, 30), (25, 30))
    np.testing.assert_allclose(first.data, 100.0, rtol=ROUNDING)
    np.testing.assert_allclose(second.data, 300.0, rtol=ROUNDING)


@pytest.mark.parametrize(
    ("change", "kinds", "words", "doubtful"),
    [
        ({}, (), "zero level is unknown", True),
        ({}, ("bias", "dark"), "filter V: no flats", False),
        ({}, ("bias", "flat"), "no dark frames", False),
        ({"gain": None}, ("bias",), "gain unknown", True),
        ({"read_noise": None}, ("bias",), "pairs of bias frames", False),
        ({"saturation": None}, ("bias",), "saturation level not given", False),
        ({"bad_pixels": Path("absent.fits")}, ("bias",), "bad-pixel image absent.fits not used", False),
    ],
)
def test_what_is_missing_is_said(
    night: Night, change: dict[str, Any], kinds: tuple[str, ...], words: str, doubtful: bool
) -> None:
    rng = np.random.default_rng(1)
    night.instrument = replace(night.instrument, detector=replace(DETECTOR, **change))
    levels = {"bias": (0.0, 0.0), "dark": (5.0, 10.0), "flat": (20000.0, 1.0)}
    for kind in kinds:
        for _ in range(3):
            night.add(kind, _noisy(rng, levels[kind][0]), levels[kind][1], dtype=np.uint16)
    night.add("science", _noisy(rng, 100.0), 10.0, dtype=np.uint16)
    calibrator = night.calibrator()
    calibrator.prepare()
    assert any(words in sentence for sentence in calibrator.warnings), calibrator.warnings
    assert calibrator.noise_doubtful is doubtful


@pytest.mark.parametrize("source", ["bias", "overscan", "dark", "sky", "nothing"])
def test_noise_is_measured_where_it_is_not_given(night: Night, source: str) -> None:
    rng = np.random.default_rng(6)
    overscan = Section(60, 80, 0, 60) if source == "overscan" else None
    night.instrument = replace(night.instrument, detector=replace(DETECTOR, read_noise=None, overscan=overscan))
    for _ in range({"bias": 6, "sky": 1}.get(source, 0)):
        night.add("bias", _noisy(rng, 0.0, noise=12.0), dtype=np.uint16)
    for _ in range(4 if source == "dark" else 0):
        night.add("dark", _noisy(rng, 0.0, noise=12.0), 10.0, dtype=np.uint16)
    sky = np.full(SHAPE, 200.0)
    sky[:, 60:] = 0.0 if overscan else 200.0
    file = night.add("science", _noisy(rng, sky, noise=12.0), 10.0, dtype=np.uint16)
    calibrator = night.calibrator()
    variance = calibrator.pixels(file, 0, filter="V", exposure=10.0).variance[:30, :60].mean()
    masters = {"bias": 144 / 6, "sky": 144.0, "dark": 144 / 4}.get(source, 0.0)
    # Noise from 1000 pixels or more: 5 percent of the read noise's part is 2 sigma of its variance, 15 percent is 5.
    assert variance == pytest.approx(344.0 + masters, rel=0.15)
    assert calibrator.noise_doubtful is (source in ("sky", "nothing"))


def test_masters_of_another_shape_are_named_and_not_used(night: Night) -> None:
    night.add("bias", np.full((30, 40), 900.0))
    night.add("bias", 1000.0)
    file = night.add("science", 1100.0, 1.0)
    calibrator = night.calibrator(flat="off")
    np.testing.assert_allclose(calibrator.pixels(file, 0, filter="V", exposure=1.0).data, 200.0)
    assert any("bias000.fits" in sentence and "binning" in sentence for sentence in calibrator.warnings)


def test_hits_are_marked_alike_in_stamps_and_whole_frames(night: Night) -> None:
    rng = np.random.default_rng(9)
    image = _noisy(rng, 200.0)
    image[12, 33] += 700
    image[20:22, 50] += 700
    image[30:] = 1000
    night.add("bias", 1000.0)
    file = night.add("science", image, 1.0)
    calibrator = night.calibrator(flat="off", cosmic_rays="frames")
    whole = calibrator.pixels(file, 0, filter="V", exposure=1.0)
    assert np.all(whole.mask[[12, 20, 21], [33, 50, 50]] == PixelMask.COSMIC_RAY)
    assert np.count_nonzero(whole.mask & PixelMask.COSMIC_RAY) <= 6
    box = Box(30, 10, 52, 22)
    stamp = calibrator.pixels(file, 0, box, filter="V", exposure=1.0)
    assert stamp.box == box
    np.testing.assert_array_equal(stamp.mask, whole.cut(box).mask)


def test_wrong_choices_are_refused(night: Night) -> None:
    night.add("science", 0.0)
    with pytest.raises(InputError, match="flat = 'sky': expected one of pooled"):
        night.calibrator(flat="sky")
    with pytest.raises(InputError, match="cosmic_rays"):
        night.calibrator(cosmic_rays="yes")
    with pytest.raises(InputError, match="nowhere"):
        night.calibrator().pixels("nowhere.fits", 0, filter="V", exposure=1.0)


def test_inputs_stay_as_they_were(night: Night) -> None:
    rng = np.random.default_rng(2)
    _fill(night, rng)
    file = night.add("science", _noisy(rng, 100.0), 10.0)
    calibrator = night.calibrator()
    before = file.read_bytes()
    first = calibrator.pixels(file, 0, filter="V", exposure=10.0)
    first.data[...] = -1.0
    first.mask[...] = 255
    second = calibrator.pixels(file, 0, filter="V", exposure=10.0)
    assert second.data.min() > -1.0 - 100.0
    assert second.mask.max() < 255
    assert file.read_bytes() == before
