"""Master bias and darks, overscan, linearity, and masters kept on disk."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from hwpol.frames.masters import (
    Master,
    Readout,
    Reducer,
    clipped_sigma,
    combine_master,
    digest,
    linearise,
    overscan_level,
    stored,
)
from hwpol.frames.opening import layout_of
from hwpol.frames.recipes import Recipes
from hwpol.instrument.description import Beam, Detector, Instrument, Section
from hwpol.pixels import Box

SHAPE = (64, 100)


def _write(path: Path, image: np.ndarray) -> str:
    fits.writeto(path, image.astype(np.float32))
    return str(path)


def _recipes(rows: list[tuple[str, str, float]], detector: Detector | None = None) -> Recipes:
    table = Table(
        [
            {"file": f, "kind": k, "filter": "", "exposure": t, "psi": 0.0, "gain": np.nan, "status": "used"}
            for f, k, t in rows
        ]
    )
    return Recipes(table, Instrument("test", detector or Detector(1.0, 2.0), {}, (Beam("only", 0.0),)), "off", None)


def test_bias_mean_variance_and_read_noise(tmp_path: Path) -> None:
    rng = np.random.default_rng(1)
    pattern = 1000.0 + 5.0 * np.sin(np.arange(SHAPE[1]) / 7.0)
    files = [_write(tmp_path / f"{i}.fits", rng.normal(pattern, 4.0, SHAPE)) for i in range(20)]
    master = combine_master(files, Reducer(Readout()), "bias")
    pull = (master.mean - pattern) / np.sqrt(16.0 / 20)
    # 6400 values: 1 +- 0.018, five sigma.
    assert np.mean(pull**2) == pytest.approx(1.0, abs=0.09)
    assert np.mean(master.variance) == pytest.approx(0.8, rel=0.05)
    # Ten pairs of 6400 pixels: the median's error is 4 x 1.25 / sqrt(2 x 64000) = 0.014.
    assert master.facts["read_noise"] == pytest.approx(4.0, abs=0.07)


@pytest.mark.parametrize("quantised", [False, True])
def test_clipped_sigma_ignores_hits(quantised: bool) -> None:
    values = np.random.default_rng(2).normal(0.0, 2.0, 100_000)
    if quantised:
        values = np.round(values)
    values[::200] += 5000.0
    # Rounding adds 1/12 to a variance of 4; the error of the estimate is 2 / sqrt(2e5) = 0.0045.
    assert clipped_sigma(values) == pytest.approx(np.sqrt(4.0 + quantised / 12.0), abs=0.025)
    assert np.isnan(clipped_sigma(np.full(5, np.nan)))


def test_darks_scale_with_exposure_and_prefer_their_own(tmp_path: Path) -> None:
    glow = np.linspace(0.0, 3.0, SHAPE[0] * SHAPE[1]).reshape(SHAPE)
    rows = [(_write(tmp_path / "bias.fits", np.full(SHAPE, 500.0)), "bias", 0.0)]
    for t, extra in ((10.0, 0.0), (40.0, 0.0), (100.0, 7.0)):
        rows += [
            (_write(tmp_path / f"d{t}{i}.fits", 500.0 + glow * t + extra), "dark", t * (1 + 1e-5 * i)) for i in (0, 1)
        ]
    recipes = _recipes(rows[:5])
    form = layout_of(rows[0][0]).form
    scaled = recipes.dark(Readout(), form, 25.0)
    assert scaled is not None
    whole = (slice(None), slice(None))
    # Levels of 500 adu and more round to 3e-5; the largest exposure counts most in the rate.
    np.testing.assert_allclose(scaled.of(whole), glow * 25.0, rtol=1e-6, atol=1e-4)
    own = _recipes(rows).dark(Readout(), form, 100.0)
    assert own is not None
    np.testing.assert_allclose(own.of(whole), glow * 100.0 + 7.0, atol=1e-3)


def test_a_dark_of_the_same_exposure_stands_in_for_the_bias(tmp_path: Path) -> None:
    rows = [(_write(tmp_path / f"{i}.fits", np.full(SHAPE, 530.0)), "dark", 10.0) for i in range(2)]
    recipes = _recipes(rows)
    form = layout_of(rows[0][0]).form
    dark = recipes.dark(Readout(), form, 10.0)
    assert dark is not None
    assert np.all(dark.of((slice(None), slice(None))) == 530.0)
    assert recipes.has_pedestal(Readout(), form, 10.0)
    assert not recipes.has_pedestal(Readout(), form, 20.0)
    assert any("cannot be scaled without bias" in sentence for sentence in recipes.found)


@pytest.mark.parametrize("along", ["rows", "columns"])
@pytest.mark.parametrize("stripes", [0.0, 20.0])
def test_overscan_follows_rows_or_columns(tmp_path: Path, along: str, stripes: float) -> None:
    rng = np.random.default_rng(4)
    shape = (200, 130)
    slope = 800.0 + 0.1 * np.arange(200) + stripes * rng.normal(size=200)
    image = rng.normal(slope[:, None], 3.0, shape)
    image[::9, 101] += 3000.0
    section = Section(100, 130, 0, 200)
    if along == "columns":
        image, section = image.T, Section(0, 200, 100, 130)
    readout = Readout(overscan=section)
    file = _write(tmp_path / "a.fits", image)
    level = overscan_level(file, readout)
    assert level is not None
    assert level.sigma == pytest.approx(3.0, rel=0.06)
    error = level.level - slope
    # Mean of the middle 60 percent of 30 pixels: 3 / sqrt(30) x 1.1 = 0.6; smoothing over 31 rows leaves 0.11, and its
    # reflected ends bend a slope of 0.1 a row by up to 0.8 there. A hit moves the trimmed mean by a fraction of sigma.
    inner = error[16:-16]
    assert np.std(inner) < (0.75 if stripes else 0.25)
    assert abs(np.mean(inner)) < 0.15
    rest = Reducer(readout)(file, Box(0, 0, 20, 20))
    assert rest.shape == (20, 20)
    assert abs(rest.mean()) < 1.5


def test_linearity_polynomial() -> None:
    raw = np.array([[0.0, 100.0, 20000.0, -5.0]], np.float32)
    expected = raw.astype(float) * (0.99 + 2e-6 * raw.astype(float) - 1e-11 * raw.astype(float) ** 2)
    np.testing.assert_allclose(linearise(raw, (0.99, 2e-6, -1e-11)), expected, rtol=5e-7)
    assert linearise(raw, (1.0,)) is raw


def test_quadratic_nonlinearity_is_undone() -> None:
    # 1 percent at 40000 adu: true = raw (1 + 2.5e-7 raw); the residue counts against 0.05 percent of p.
    true = np.linspace(100.0, 45000.0, 50)
    raw = (-1.0 + np.sqrt(1.0 + 4 * 2.5e-7 * true)) / (2 * 2.5e-7)
    np.testing.assert_allclose(linearise(raw.astype(np.float32), (1.0, 2.5e-7)), true, rtol=1e-6)


def test_masters_are_stored_whole_and_taken_from_there(tmp_path: Path) -> None:
    file = _write(tmp_path / "a.fits", np.zeros(SHAPE))
    key = digest("bias", [file], Readout())
    assert key != digest("bias", [file], Readout(overscan=Section(0, 1, 0, 1)))
    made = []

    def build() -> Master:
        made.append(1)
        return Master(np.ones((3, 4, 5), np.float32), key, {"read_noise": 2.5})

    for _ in range(2):
        master = stored(tmp_path / "cache", key, build)
        assert master.facts == {"read_noise": 2.5}
        np.testing.assert_array_equal(master.layers, 1.0)
    assert made == [1]
    assert isinstance(master.layers, np.memmap)
    assert sorted(path.name for path in (tmp_path / "cache").iterdir()) == [f"{key}.json", f"{key}.npy"]
    (tmp_path / "file").write_text("")
    assert stored(tmp_path / "file", key, build).facts == {"read_noise": 2.5}
