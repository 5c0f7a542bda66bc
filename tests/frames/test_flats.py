"""Flats: which serve, how they are normalised, and the lamp's polarisation."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from hwpol.frames.flats import FlatFrame, Lamp, combine_flats, lamp_polarisation, strip_level, usable_flats
from hwpol.frames.recipes import Recipes
from hwpol.instrument.description import Beam, Detector, Instrument, Section
from hwpol.pixels import Box, PixelMask

SHAPE = (60, 90)
STRIPS = (Section(0, 90, 0, 28), Section(0, 90, 32, 60))


class _Lamp:
    """Flats in memory; `image` as the reduction gives it."""

    def __init__(self, images: dict[str, np.ndarray]) -> None:
        self.images = images

    def __call__(self, flat: FlatFrame, box: Box | None) -> np.ndarray:
        image = self.images[flat.file].astype(np.float32)
        return image if box is None else image[box.y0 : box.y1, box.x0 : box.x1]


def _frames(names: list[str]) -> list[FlatFrame]:
    return [FlatFrame(name, 1.0, 22.5 * i, 1.0) for i, name in enumerate(names)]


def test_level_ignores_gaps_and_hits_and_scales_exactly() -> None:
    image = np.random.default_rng(1).normal(1.0, 0.02, SHAPE)
    image[:, 50:] = 0.01
    image[3, 3] = 500.0
    level, number, lost = strip_level(image.astype(np.float32))
    assert level == pytest.approx(1.0, abs=0.002)
    assert lost == 0.0
    assert number == pytest.approx(0.9 * 3000, abs=3)
    assert strip_level((image * 2**14).astype(np.float32))[0] == level * 2**14


def test_saturated_and_underexposed_flats_are_left_out_with_a_reason() -> None:
    images = {name: np.full(SHAPE, level) for name, level in (("a", 2e4), ("b", 2.2e4), ("dim", 3e3), ("dark", 500.0))}
    images["full"] = np.full(SHAPE, 2e4)
    images["full"][:10] = np.nan
    images["touched"] = np.full(SHAPE, 2e4)
    images["touched"][5, 5] = np.nan
    flats = _frames(list(images))
    kept, levels, reasons = usable_flats(flats, _Lamp(images), STRIPS)
    assert [flat.file for flat in kept] == ["a", "b", "touched"]
    assert set(levels) == {"a", "b", "touched"}
    text = " ".join(reasons)
    assert "flat dim left out: underexposed: 15 percent" in text
    assert "flat dark left out: underexposed: 500 electrons" in text
    assert "flat full left out: saturated" in text


@pytest.mark.parametrize("count", [1, 3, 16])
def test_master_has_median_one_in_each_strip_and_a_true_variance(count: int) -> None:
    rng = np.random.default_rng(count)
    response = rng.normal(1.0, 0.02, SHAPE)
    response[32:] *= 1.4
    response[28:32] = 0.0
    response[10, 10] = 0.0
    names = [f"f{i}" for i in range(count)]
    images = {name: rng.poisson(response * rng.uniform(2e4, 4e4)).astype(float) for name in names}
    flats = _frames(names)
    kept, levels, _ = usable_flats(flats, _Lamp(images), STRIPS)
    master = combine_flats(kept, _Lamp(images), STRIPS, levels, SHAPE, "key")
    for strip in STRIPS:
        cut = (slice(strip.y0, strip.y1), slice(strip.x0, strip.x1))
        good = master.mask[cut] == 0
        assert np.median(master.mean[cut][good]) == pytest.approx(1.0, abs=1e-6)
        truth = response[cut] / np.median(response[cut])
        pull = (master.mean[cut] - truth)[good] / np.sqrt(master.variance[cut][good])
        # 2520 pixels: 1 +- 0.028 (with 16 sample variances of 15 degrees of freedom: 15/13 and wider); the level of the
        # strip adds a common error of a fiftieth of a pixel's.
        assert np.mean(pull**2) == pytest.approx(15 / 13 if count == 16 else 1.0, abs=0.16)
    assert master.mean[10, 10] == 1.0
    assert master.mask[10, 10] == PixelMask.BAD
    assert np.all(master.mean[28:32] == 1.0)


def test_gaps_inside_a_whole_frame_are_outside() -> None:
    image = np.full(SHAPE, 2e4)
    image[25:35] = 100.0
    flats = _frames(["a", "b"])
    lamp = _Lamp({"a": image, "b": image})
    strips = [Section(0, 90, 0, 60)]
    kept, levels, _ = usable_flats(flats, lamp, strips)
    master = combine_flats(kept, lamp, strips, levels, SHAPE, "key")
    assert np.all(master.mask[25:35] == PixelMask.OUTSIDE)
    assert np.count_nonzero(master.mask) == 900


@pytest.mark.parametrize("retardance", [180.0, 165.0])
def test_lamp_without_noise_comes_back(retardance: float) -> None:
    q, u, gain = 0.2, -0.15, 1.3
    psi = np.array([0.0, 22.5, 45.0, 67.5, 100.0])
    analysers = (30.0, 120.0)
    d = np.deg2rad(retardance)
    levels = []
    for angle in psi:
        row = []
        for beam, alpha in enumerate(analysers):
            # First row of analyser and retarder, written with the retarder's axes (methods of the trade: Mueller).
            c2, s2 = np.cos(2 * np.deg2rad(angle)), np.sin(2 * np.deg2rad(angle))
            retarder = np.array(
                [
                    [c2**2 + s2**2 * np.cos(d), c2 * s2 * (1 - np.cos(d))],
                    [c2 * s2 * (1 - np.cos(d)), s2**2 + c2**2 * np.cos(d)],
                ]
            )
            a, b = np.array([np.cos(2 * np.deg2rad(alpha)), np.sin(2 * np.deg2rad(alpha))]) @ retarder
            row.append((gain if beam else 1.0) * (1 + a * q + b * u))
        levels.append(row)
    lamp = lamp_polarisation(np.array(levels), np.full((5, 2), 1e-12), psi, analysers, retardance)
    # Twenty rounds, each smaller by s**2 = 0.06 or more.
    assert lamp.q == pytest.approx(q, abs=1e-9)
    assert lamp.u == pytest.approx(u, abs=1e-9)
    assert lamp.p == pytest.approx(0.25, abs=1e-9)


def test_lamp_of_a_fifth_of_a_percent_is_found_and_errors_hold() -> None:
    rng = np.random.default_rng(3)
    psi = np.tile(22.5 * np.arange(4), 3)
    pulls, found, false = [], 0, 0
    for number in range(300):
        p = 0.002 if number % 2 else 0.0
        signal = p * np.cos(np.deg2rad(4 * psi) - 0.7)
        scatter = 2e-4
        level = np.stack([1 + signal, 1.1 * (1 - signal)], axis=1) * (1 + rng.normal(0, scatter, (12, 2)))
        lamp = lamp_polarisation(level, np.full((12, 2), 1e-10), psi, (0.0, 90.0))
        pulls += [(lamp.q - p * np.cos(0.7)) / lamp.q_err, (lamp.u - p * np.sin(0.7)) / lamp.u_err]
        found += lamp.significance > 5.0 and p > 0.0
        false += lamp.significance > 5.0 and p == 0.0
    assert found == 150
    assert false <= 1
    # The scatter is measured with 9 degrees of freedom: Student's t has variance 9/7; 600 values, 5 sigma 0.5.
    assert np.mean(np.square(pulls)) == pytest.approx(9 / 7, abs=0.5)


@pytest.mark.parametrize(
    ("psi", "analysers"), [((0.0, 45.0, 90.0), (0.0, 90.0)), ((0.0, 22.5), (0.0, 90.0)), ((0, 22.5, 45, 60), (0, 45))]
)
def test_lamp_is_unknown_where_the_angles_do_not_tell(psi: tuple[float, ...], analysers: tuple[float, ...]) -> None:
    lamp = lamp_polarisation(np.ones((len(psi), 2)), np.full((len(psi), 2), 1e-8), np.array(psi), analysers)
    assert isinstance(lamp, Lamp)
    assert np.isnan([lamp.q, lamp.u, lamp.q_err, lamp.u_err, lamp.significance]).all()


def _night(folder: Path, choice: str, lamp_q: float) -> tuple[Recipes, list[str]]:
    rng = np.random.default_rng(17)
    response = rng.normal(1.0, 0.02, SHAPE)
    sign = np.where(np.arange(SHAPE[0]) < 30, 1.0, -1.0)[:, None]
    rows = []
    for i in range(12):
        psi = 22.5 * (i % 4)
        image = rng.poisson(3e4 * response * (1 + sign * lamp_q * np.cos(np.deg2rad(4 * psi))))
        fits.writeto(folder / f"flat{i}.fits", (image + 1000).astype(np.uint16))
        rows.append({"file": str(folder / f"flat{i}.fits"), "kind": "flat", "exposure": 1.0, "psi": psi + 0.2})
    for i in range(2):
        fits.writeto(folder / f"bias{i}.fits", np.full(SHAPE, 1000, np.uint16))
        rows.append({"file": str(folder / f"bias{i}.fits"), "kind": "bias", "exposure": 0.0, "psi": 0.0})
    for row in rows:
        row.update(filter="V", gain=np.nan, status="used")
    beams = tuple(Beam(str(i), 90.0 * i, section=strip) for i, strip in enumerate(STRIPS))
    instrument = Instrument("test", Detector(1.0, 3.0, 60000.0), {}, beams)
    return Recipes(Table(rows), instrument, choice, None), [row["file"] for row in rows[:12]]


def test_lamp_is_measured_from_files(tmp_path: Path) -> None:
    recipes, _ = _night(tmp_path, "pooled", 0.01)
    lamp = recipes.lamp("V")
    assert lamp is not None
    # 2520 pixels of 3e4 electrons in 12 flats and two beams: photon error of q 0.5 x sqrt(2 / 24) / 8700 x 2 ~ 5e-5.
    assert lamp.q == pytest.approx(0.01, abs=4e-4)
    assert abs(lamp.u) < 4e-4
    assert lamp.q_err < 2e-4
    assert lamp.significance > 5.0
    assert recipes.lamp("R") is None


def test_flats_per_angle_are_of_that_angle(tmp_path: Path) -> None:
    from hwpol.frames.masters import Readout
    from hwpol.frames.opening import layout_of

    recipes, files = _night(tmp_path, "per-angle", 0.0)
    readout = Readout(saturation=60000.0)
    form = layout_of(files[0]).form
    keys = [recipes.flat(readout, form, "V", psi).key for psi in (0.0, 359.9, 22.5)]
    assert keys[0] == keys[1] != keys[2]
    assert recipes.found == []
    pooled = recipes.flat(readout, form, "V", 11.0)
    assert pooled is not None
    assert "no flat at wave-plate angle 11 deg" in recipes.found[0]
    # Twelve flats instead of three: a quarter of the variance.
    few = recipes.flat(readout, form, "V", 0.0)
    assert np.median(pooled.variance[:28]) == pytest.approx(np.median(few.variance[:28]) / 4, rel=0.2)
