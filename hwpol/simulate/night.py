"""`simulate`: a scenario becomes a folder of raw frames, ready to be reduced, with the truth beside them."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import partial
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.simulate.detector import Chip, chips, cosmic_rays, read_out
from hwpol.simulate.files import hdus_of, toml_text, whole, write_mask, write_table, write_text
from hwpol.simulate.headers import header_of
from hwpol.simulate.images import Layout, Stars, lamplight, place_of, starlight, stars_of
from hwpol.simulate.plan import EXPOSURES, Exposure, child, plan
from hwpol.simulate.scenario import Scenario
from hwpol.simulate.truth import Measured, catalogue_tables, frame_table, source_table

_NEAR = 2.0  # fwhm about the target in which electrons of hits are noted
_CHUNK = 8  # frames handed to a process at a time


@dataclass(frozen=True)
class SimulatedNight:
    """What `simulate` made: raw files in time order, truth by source, files to start a reduction from."""

    paths: tuple[Path, ...]
    truth: Table
    frames: Table
    instrument_path: Path
    night_path: Path
    truth_path: Path


@dataclass(frozen=True)
class Stage:
    """All that an exposure needs; one goes to every process."""

    scenario: Scenario
    layout: Layout
    chips: tuple[Chip, ...]
    stars: Mapping[str, Stars]
    first: Mapping[str, float]

    @staticmethod
    def of(scenario: Scenario, exposures: tuple[Exposure, ...]) -> Stage:
        """Set the stage of a planned night."""
        first = {one.target: one for one in reversed(exposures) if one.target}
        layout = Layout.of(scenario)
        return Stage(
            scenario,
            layout,
            chips(scenario, layout),
            {name: stars_of(scenario, scenario.target(name), one.chi) for name, one in first.items()},
            {name: one.middle for name, one in first.items()},
        )

    def expose(self, one: Exposure) -> tuple[list[NDArray[np.uint16]], Measured]:
        """Take one frame: the digits of every array, and what was truly measured."""
        scenario, array = self.scenario, self.scenario.array
        rng = child(scenario.seed, EXPOSURES, one.number)
        nx, ny = array.shape
        electrons = x = y = np.zeros((0, len(self.layout.hdu)))
        if one.kind == "science":
            elapsed = (one.middle - self.first[one.target]) * 24
            light, electrons, x, y = starlight(scenario, self.layout, one, self.stars[one.target], elapsed)
        elif one.kind == "flat":
            light = lamplight(scenario, self.layout, one, scenario.blocks[one.block])
        else:
            light = [np.zeros((ny, nx)) for _ in self.chips]
        images, hits, near = [], 0, np.zeros(len(self.layout.hdu))
        for hdu, chip in enumerate(self.chips):
            rays, count = cosmic_rays((ny, nx), array.cosmic_rays * one.seconds / 60 * nx * ny / 1e6, rng)
            count += self._forced(one, hdu, rays, x, y, rng)
            hits += count
            for b in range(len(near)):
                if len(x) and self.layout.hdu[b] == hdu and count:
                    rows, columns = np.nonzero(rays)
                    close = np.hypot(columns - x[0, b], rows - y[0, b]) < _NEAR * one.fwhm
                    near[b] = rays[rows[close], columns[close]].sum()
            images.append(read_out(chip, light[hdu], one, array, rays, rng))
        return images, Measured(electrons, x, y, hits, near)

    def _forced(
        self, one: Exposure, hdu: int, rays: NDArray[np.float64], x: NDArray[np.float64], y: NDArray[np.float64],
        rng: np.random.Generator,
    ) -> int:  # fmt: skip
        """Put asked-for hits within one fwhm of the target; return how many."""
        count = 0
        for kind, amount, beam in one.faults:
            if kind == "hit" and len(x) and self.layout.hdu[beam] == hdu:
                radius, turn = one.fwhm * np.sqrt(rng.uniform()), rng.uniform(0, 2 * np.pi)
                column = int(np.rint(x[0, beam] + radius * np.cos(turn)))
                row = int(np.rint(y[0, beam] + radius * np.sin(turn)))
                rays[row, column] += amount
                count += 1
        return count

    def write(self, one: Exposure, folder: Path) -> tuple[list[Path], Measured]:
        """Take one frame and write its file, whole, or spoilt as its faults ask."""
        images, measured = self.expose(one)
        if one.has("missing"):
            return [], measured
        if one.has("shape"):
            images = [image[:-8, :] for image in images]
        header = header_of(self.scenario, one, self.chips[0].gain)
        path = folder / one.file
        with whole(path) as temporary:
            hdus_of(self.layout.extensions, images, header).writeto(temporary, overwrite=True)
            if one.has("truncated"):
                os.truncate(temporary, int(0.6 * temporary.stat().st_size))
            if one.has("empty"):
                os.truncate(temporary, 0)
            if one.has("not-fits"):
                temporary.write_text("this is no image\n", encoding="utf-8")
        if not one.has("copy"):
            return [path], measured
        double = path.with_name(f"{path.stem}_copy.fits")
        with whole(double) as temporary:
            temporary.write_bytes(path.read_bytes())
        return [path, double], measured


def simulate(
    scenario: Scenario, folder: str | Path, *, jobs: int = 1, progress: Callable[[int, int], None] | None = None
) -> SimulatedNight:
    """Make the night of a scenario in a folder.

    Writes raw/\\*.fits, instrument.toml, night.toml (ready to reduce),
    standards/polarised.ecsv and zero_polarised.ecsv (the invented standards),
    truth.ecsv (a row per source, filter and visit), truth_frames.ecsv and,
    with bad pixels, bad_pixels.fits. Every file is written whole.

    Parameters
    ----------
    scenario : Scenario
        The night; its seed fixes every digit, whatever `jobs` is.
    folder : path
        Made where absent. Raw frames of an earlier run must not be in it.
    jobs : int
        Processes.
    progress : callable, optional
        Called with (frames done, frames in all).

    Raises
    ------
    InputError
        Where the folder already holds raw frames.
    ConfigError
        Where the night cannot be: a target below the horizon, a fault beyond the last frame.
    """
    folder = Path(folder)
    raw = folder / "raw"
    if raw.exists() and any(raw.iterdir()):
        raise InputError(f"{raw}: holds files already, expected an empty or new folder; choose another or remove it")
    exposures = plan(scenario)
    stage = Stage.of(scenario, exposures)
    raw.mkdir(parents=True, exist_ok=True)
    paths: list[Path] = []
    measured: list[Measured] = []
    for done, (written, values) in enumerate(_frames(stage, exposures, raw, jobs), 1):
        paths += written
        measured.append(values)
        if progress is not None:
            progress(done, len(exposures))
    truth = source_table(scenario, stage.layout, exposures, stage.stars, measured)
    frames = frame_table(scenario, exposures, measured)
    catalogues = []
    for name, table in catalogue_tables(scenario, exposures).items():
        catalogues.append(f"standards/{name}")
        (folder / "standards").mkdir(exist_ok=True)
        write_table(folder / "standards" / name, table)
    write_table(folder / "truth.ecsv", truth)
    write_table(folder / "truth_frames.ecsv", frames)
    write_text(folder / "instrument.toml", toml_text(_instrument_tree(stage, folder)))
    write_text(folder / "night.toml", toml_text(_night_tree(scenario, exposures, catalogues)))
    return SimulatedNight(
        tuple(paths), truth, frames, folder / "instrument.toml", folder / "night.toml", folder / "truth.ecsv"
    )


_stage: Stage | None = None


def _enter(stage: Stage) -> None:
    global _stage
    _stage = stage


def _write_staged(one: Exposure, folder: Path) -> tuple[list[Path], Measured]:
    assert _stage is not None
    return _stage.write(one, folder)


def _frames(stage: Stage, exposures: tuple[Exposure, ...], folder: Path, jobs: int) -> Any:
    if jobs <= 1:
        yield from (stage.write(one, folder) for one in exposures)
        return
    # Processes started afresh: a fork of a program with threads may hang.
    with ProcessPoolExecutor(jobs, mp_context=get_context("spawn"), initializer=_enter, initargs=(stage,)) as pool:
        yield from pool.map(partial(_write_staged, folder=folder), exposures, chunksize=_CHUNK)


def _instrument_tree(stage: Stage, folder: Path) -> dict[str, Any]:
    """The instrument file, with the mask of this night's bad pixels where there are any."""
    tree = dict(stage.scenario.instrument_tree)
    masks = [chip.mask for chip in stage.chips]
    detector = dict(tree.get("detector", {}))
    if any(mask.any() for mask in masks):
        write_mask(folder / "bad_pixels.fits", masks)
        detector["bad_pixels"] = "bad_pixels.fits"
    elif stage.scenario.instrument.detector.bad_pixels is not None:
        detector["bad_pixels"] = str(stage.scenario.instrument.detector.bad_pixels)
    return {**tree, "detector": detector} if detector else tree


def _night_tree(scenario: Scenario, exposures: tuple[Exposure, ...], catalogues: list[str]) -> dict[str, Any]:
    """A night file that reduces everything; what the scenario's [night] says goes before."""
    own = {key: value for key, value in scenario.night.items() if key != "correction"}
    correction = {"catalogues": catalogues, **scenario.night.get("correction", {})}
    targets = []
    seen = {one.target for one in exposures}
    for target in scenario.targets:
        if target.name in seen:
            entry: dict[str, Any] = {"name": target.name}
            if not scenario.headers.wcs:
                entry["xy"] = [float(value) for value in place_of(scenario, target)]
            if any(target.motion):
                entry["moving"] = True
            targets.append(entry)
    head = {"instrument": "instrument.toml", "frames": ["raw/*.fits"], "output": "reduced"}
    return {**head, "correction": correction, "target": targets, **own}
