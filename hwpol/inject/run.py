"""A night proved on its own frames: artificial stars put in, reduced as the night was, compared."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Iterator, Sequence
from concurrent.futures import Executor, as_completed
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from hwpol.correction import Calibration
from hwpol.errors import HwpolError, InputError, MissingError
from hwpol.fluxes import Fluxes
from hwpol.frames.adding import added_adu, copy_with
from hwpol.frames.masters import gain_of, saturation_of, strip_of
from hwpol.frames.opening import layout_of
from hwpol.inject.compare import Step, star_name, star_rows, summarise, verdict
from hwpol.inject.folders import InjectedNight, check_folder, check_new, night_text
from hwpol.inject.light import HIGHEST, FrameLight, StarProfile, expected_electrons, ladder, measured_profile, truths
from hwpol.inject.places import free_places
from hwpol.instrument.description import Section
from hwpol.instrument.names import normal_name
from hwpol.night import Night
from hwpol.night.config import read_night
from hwpol.night.config_objects import NightConfig, TargetConfig
from hwpol.night.images import VisitImages
from hwpol.night.results import Answer
from hwpol.night.run import CACHE, Progress
from hwpol.night.visit import UNKNOWN_FWHM, VisitResult, VisitTask, place
from hwpol.products import make_table, write_table, write_text

Array = NDArray[np.float64]

HISTORY = "hwpol inject: artificial stars added to this copy, not an observation"


@dataclass(frozen=True)
class Injection:
    """What came of it: a row for each star, each step of brightness, all together, and the verdict in words."""

    table: Table
    steps: tuple[Step, ...]
    together: Step
    sound: bool
    words: tuple[str, ...]
    notes: tuple[str, ...]
    path: Path
    kept: tuple[Path, ...]


@dataclass(frozen=True)
class _Job:
    """One visit and repeat; pickles."""

    config: NightConfig
    task: VisitTask
    visit: VisitResult
    calibration: Calibration | None
    calibrations: tuple[str, ...]
    stars: int
    repeat: int
    seed: int
    folder: Path
    keep: bool

    @property
    def home(self) -> Path:
        """Where kept frames go."""
        return self.folder / f"visit_{self.task.number:03d}_{self.repeat + 1}"


def inject(
    night: Night,
    *,
    stars: int = 8,
    repeats: int = 1,
    seed: int = 0,
    target: str = "",
    folder: str | Path | None = None,
    keep: bool = False,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> Injection:
    """Put artificial stars into copies of a night's frames, reduce them as the night was, and compare.

    Their profile is a round Moffat disc with the width measured in each frame and beam and the wings of the target's
    curve of growth; their light goes through the calibration that the night gave (so that errors of the calibration
    itself are not tested), the plate's and analysers' angles, the target's transparency and gain, the flat and the
    detector, with photon noise of its own. They are placed by the registration of the night, so that its errors common
    to the whole field are not tested. Repeats share the sky noise of the frames where their places overlap.

    Parameters
    ----------
    night : Night
        Its finished visits are taken up; its products stay as they are.
    stars, repeats : int
        Wanted in each visit; realisations with new places, polarisation and noise.
    seed : int
        Of everything drawn.
    target : str
        This target alone. Default: of each filter the science visit with most frames.
    folder : path, optional
        Where ``inject.ecsv`` (and kept frames) go; default ``inject`` in the output folder.
    keep : bool
        Keep the altered copies, in ``visit_NNN_REPEAT`` with a night file of their own.
    executor : concurrent.futures.Executor, optional
    progress : callable, optional

    Returns
    -------
    Injection

    Raises
    ------
    ConfigError
        A folder among raw frames.
    MissingError
        An unknown target.
    InputError
        When nothing could be injected.
    """
    if stars < 1 or repeats < 1 or seed < 0:
        raise InputError(f"stars = {stars}, repeats = {repeats}, seed = {seed}: expected at least 1, 1 and 0")
    home = Path(folder).absolute() if folder is not None else night.config.output / "inject"
    check_folder(home, night.config)
    answer = night.reduce(executor=executor, write=False, progress=progress)
    jobs = _jobs(night, answer, target, stars, repeats, seed, home, keep)
    if keep:
        check_new(job.home for job in jobs)
    rows: dict[tuple[int, int], list[dict[str, Any]]] = {}
    notes: list[str] = []
    done: list[_Job] = []

    def finished(job: _Job, outcome: list[dict[str, Any]] | HwpolError) -> None:
        label = f"{job.visit.names[0]} in {job.visit.filter}"
        if isinstance(outcome, HwpolError):
            notes.append(f"{label}: {outcome}")
        else:
            rows[job.task.number, job.repeat] = outcome
            if len(outcome) < stars:
                notes.append(f"{label}: room for {len(outcome)} of {stars} artificial stars only")
        done.append(job)
        if progress is not None:
            progress(len(done), len(jobs), f"{label}, artificial stars")

    if executor is None:
        for job in jobs:
            finished(job, _attempt(job))
    else:
        futures = {executor.submit(_attempt, job): job for job in jobs}
        for future in as_completed(futures):
            finished(futures[future], future.result())
    ordered = [row for key in sorted(rows) for row in rows[key]]
    if not ordered:
        raise InputError("; ".join(dict.fromkeys(notes)) or "no artificial star found room")
    meta = {"instrument": night.config.instrument.name, "seed": seed, "notes": list(dict.fromkeys(notes))}
    table = make_table(ordered, "inject", meta)
    steps, together = summarise(table)
    sound, words = verdict(steps, together)
    table.meta["verdict"] = words
    path = write_table(table, home / "inject.ecsv")
    kept = tuple(job.home for job in jobs if keep and (job.task.number, job.repeat) in rows)
    return Injection(table, tuple(steps), together, sound, tuple(words), tuple(dict.fromkeys(notes)), path, kept)


def _jobs(
    night: Night, answer: Answer, target: str, stars: int, repeats: int, seed: int, folder: Path, keep: bool
) -> list[_Job]:
    frames = night.inventory()
    visits = {int(v.table["visit"][0]): v for v in frames.science().visits()}
    roles = {int(r["visit"]): str(r["role"]) for r in reversed(answer.results) if r["source"] == 0}
    wanted = [v for v in answer.visits if roles.get(v.task_number) == "science"] or list(answer.visits)
    if target:
        names = {v.task_number: {*v.names, str(visits[v.task_number].table["object"][0])} for v in answer.visits}
        wanted = [
            v for v in answer.visits if normal_name(target) in {normal_name(name) for name in names[v.task_number]}
        ]
        if not wanted:
            listed = ", ".join(sorted({v.names[0] for v in answer.visits}))
            raise MissingError(f"--target {target}: no such target was measured in this night; it has {listed}")
    best: dict[str, VisitResult] = {}
    for visit in wanted:
        first = best.setdefault(visit.filter, visit)
        if visit.fluxes.shape[1] > first.fluxes.shape[1]:
            best[visit.filter] = visit
    config, calibration = night.config, answer.calibration
    calibrator = night.calibrator(frames)
    jobs = []
    for visit in best.values():
        known = calibration is not None and visit.filter in calibration.filters
        own = visits[visit.task_number]
        first_target = next((t for t in config.targets if t.name == visit.names[0]), None)
        task = VisitTask(
            number=visit.task_number,
            frames=own,
            calibrator=calibrator,
            targets=(
                TargetConfig(
                    name=visit.names[0],
                    object=str(own.table["object"][0]),
                    role="science",
                    xy=(float(visit.fluxes.x[0]), float(visit.fluxes.y[0])),
                    moving=first_target is not None and first_target.moving,
                ),
            ),
            photometry=config.photometry,
            registration=config.registration.method,
        )
        for repeat in range(repeats):
            jobs.append(
                _Job(
                    config=config,
                    task=task,
                    visit=visit,
                    calibration=calibration if known else None,
                    calibrations=tuple(str(f) for f in frames.calibrations().table["file"]),
                    stars=stars,
                    repeat=repeat,
                    seed=seed,
                    folder=folder,
                    keep=keep,
                )
            )
    return jobs


def _attempt(job: _Job) -> list[dict[str, Any]] | HwpolError:
    try:
        return _run(job)
    except HwpolError as problem:
        return problem


def _run(job: _Job) -> list[dict[str, Any]]:
    """Put stars into one visit, reduce it, compare."""
    task, visit = job.task, job.visit
    if not normal_name(str(task.targets[0].object)):
        raise InputError("its frames name no object, so that a night file cannot tell them from others")
    random = np.random.default_rng([job.seed, task.number, job.repeat])
    images = VisitImages(task.frames, task.calibrator)
    strips = [strip_of(task.frames.instrument, b) for b in range(len(task.frames.instrument.beams))]
    placement = place(task, images, [task.targets[0].xy], strips)
    fwhm = float(np.nanmedian(placement.fwhm)) if np.isfinite(placement.fwhm).any() else UNKNOWN_FWHM
    profile = measured_profile(placement, visit.radii, visit.growth, fwhm)
    sections = _sections(task)
    targets = visit.fluxes.x[: len(visit.names)], visit.fluxes.y[: len(visit.names)]
    x, y, noise = free_places(
        placement, images, sections, targets, job.stars, fwhm, visit.radius, visit.annulus, random
    )  # fmt: skip
    if not len(x):
        raise InputError("no free place for an artificial star: the field is too small or too crowded")
    mine = visit.fluxes.take_sources([0])
    light = FrameLight.of(mine, job.calibration)
    fraction = profile.fraction(visit.radius)
    rungs = ladder(mine, noise, fraction, light.highest(profile, _room(task, mine)))
    step, z = truths(len(x), job.repeat, random)
    rates = rungs[step]
    electrons = expected_electrons(light, rates, z, x, y, mine, job.calibration)
    px, py = placement.positions(x, y)
    with _workplace(job) as folder:
        _write_frames(task, folder / "raw", profile, sections, px, py, electrons, random)
        artificial = [
            TargetConfig(name=star_name(s), object=task.targets[0].object, xy=(float(x[s]), float(y[s])))
            for s in range(len(x))
        ]
        name = "off"
        if job.calibration is not None:
            name = "calibration.toml"
            job.calibration.write(folder / name)
        text = night_text(job.config, job.calibrations, [*task.targets, *artificial], name)
        write_text(folder / "night.toml", text)
        masters = job.config.output / CACHE / "masters"
        answer = InjectedNight(read_night(folder / "night.toml"), masters).reduce(write=job.keep)
    common = {"target": visit.names[0], "filter": visit.filter, "visit": task.number, "repeat": job.repeat + 1}
    return star_rows(
        answer.results, common=common, steps=step, rates=rates, z=z, x=x, y=y, fraction=fraction
    )  # fmt: skip


@contextmanager
def _workplace(job: _Job) -> Iterator[Path]:
    """A folder that becomes `job.home` when all went well and it is to be kept, and vanishes otherwise."""
    try:
        job.folder.mkdir(parents=True, exist_ok=True)
        temporary = Path(tempfile.mkdtemp(prefix=".inject-", dir=job.folder))
        (temporary / "raw").mkdir()
    except OSError as problem:
        raise InputError(f"{job.folder}: cannot be written ({problem.strerror}); expected a writable folder") from None
    try:
        yield temporary
        if job.keep:
            temporary.chmod(job.folder.stat().st_mode)
            temporary.rename(job.home)
    finally:
        shutil.rmtree(temporary, ignore_errors=True)


def _sections(task: VisitTask) -> list[Section]:
    """The strip of every beam; the whole array where none is described."""
    instrument = task.frames.instrument
    found = []
    for b in range(len(instrument.beams)):
        ny, nx = layout_of(task.frames.table["file"][0], instrument.extension_of(b)).shape
        strip = strip_of(instrument, b) or Section(0, nx, 0, ny)
        found.append(Section(max(strip.x0, 0), min(strip.x1, nx), max(strip.y0, 0), min(strip.y1, ny)))
    return found


def _room(task: VisitTask, fluxes: Fluxes) -> Array:
    """Electrons that a pixel can still take above the sky before it saturates, with a margin, shape (K, B)."""
    instrument = task.frames.instrument
    room = np.full(fluxes.shape[1:], np.inf)
    for k, row in enumerate(task.frames.table):
        for b in range(fluxes.shape[2]):
            scale = layout_of(row["file"], instrument.extension_of(b)).full_scale
            level = min(saturation_of(instrument, b) or np.inf, scale)
            sky = 0.0 if fluxes.sky is None else float(np.nan_to_num(fluxes.sky[0, k, b]))
            room[k, b] = HIGHEST * level * gain_of(instrument, b, float(row["gain"])) - sky
    return room


def _write_frames(
    task: VisitTask,
    folder: Path,
    profile: StarProfile,
    sections: Sequence[Section],
    x: Array,
    y: Array,
    electrons: Array,
    random: np.random.Generator,
) -> None:
    """Write the altered copies of all frames of a visit."""
    instrument = task.frames.instrument
    for k, (row, rng) in enumerate(zip(task.frames.table, random.spawn(len(task.frames)), strict=True)):
        more: dict[int | str, Array] = {}
        gain = float(row["gain"])
        for b in range(len(instrument.beams)):
            extension = instrument.extension_of(b)
            image = np.zeros(layout_of(row["file"], extension).shape)
            for s in range(len(x)):
                profile.draw(image, float(x[s, k, b]), float(y[s, k, b]), float(electrons[s, k, b]), k, b, sections[b])
            adu = added_adu(
                task.calibrator, row["file"], b, image, rng, filter=str(row["filter"]),
                exposure=float(row["exposure"]), gain=gain if np.isfinite(gain) else None, psi=float(row["psi"]),
            )  # fmt: skip
            more[extension] = more[extension] + adu if extension in more else adu
        copy_with(row["file"], folder / f"{k:04d}_{_stem(str(row['name']))}.fits", more, rng, HISTORY)


def _stem(name: str) -> str:
    return name.split(".")[0] or "frame"
