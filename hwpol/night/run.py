"""A whole night: inventory, visits in any executor, calibration, results, products."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from concurrent.futures import Executor, as_completed
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path

import numpy as np

from hwpol.correction.catalogue import Catalogue
from hwpol.errors import HwpolError, InputError, MissingError
from hwpol.frames import Calibrator, FrameSet
from hwpol.frames.geometry import time_warning
from hwpol.instrument.names import normal_name
from hwpol.night.calibrate import Measured, find_calibration
from hwpol.night.config import NightConfig, frame_paths, read_night
from hwpol.night.results import Answer, assemble
from hwpol.night.roles import Role, role_of, targets_of
from hwpol.night.store import fingerprint, load, save
from hwpol.night.visit import VisitResult, VisitTask, reduce_visit

#: Called with (done, total, words) as visits finish.
Progress = Callable[[int, int, str], None]

CACHE = ".cache"


@dataclass(frozen=True)
class MeasuredNight:
    """A night measured but not calibrated: `items` are its targets one by one, `failed` visits with their reason."""

    frames: FrameSet
    results: list[VisitResult]
    roles: dict[int, list[Role]]
    failed: dict[int, str]
    items: tuple[Measured, ...]
    notes: tuple[str, ...]


@dataclass(frozen=True)
class Night:
    """A validated night file. `Night.read(path).reduce()` does the whole job."""

    config: NightConfig

    @staticmethod
    def read(path: str | Path) -> Night:
        """Read and check a night file and its instrument file; ConfigError lists every problem."""
        return Night(read_night(path))

    def inventory(self) -> FrameSet:
        """Headers to frames, visits and cycles; opens no pixels (but to tell copies).

        Raises
        ------
        ConfigError
            When the patterns match no file.
        """
        config = self.config
        return FrameSet.read(
            frame_paths(config),
            config.instrument,
            gap=config.grouping.gap,
            exclude=config.exclude,
            targets=config.targets,
        )

    def calibrator(self, frames: FrameSet) -> Calibrator:
        """The detector stage for these frames, its masters kept in the output folder."""
        detector = self.config.detector
        return Calibrator(
            frames, flat=detector.flat, cosmic_rays=detector.cosmic_rays, cache=self.config.output / CACHE / "masters"
        )

    def reduce(
        self,
        *,
        executor: Executor | None = None,
        only: Sequence[str] = (),
        fresh: bool = False,
        write: bool = True,
        progress: Progress | None = None,
    ) -> Answer:
        """Reduce the night and write its products.

        Parameters
        ----------
        executor : concurrent.futures.Executor, optional
            Runs the visits; in this process without one.
        only : sequence of str
            Names of targets; standards are reduced all the same, since the calibration needs them, and visits that an
            earlier run finished stay in the tables.
        fresh : bool
            Do not take up finished visits of an earlier run.
        write : bool
            Write the products into the output folder.
        progress : callable, optional

        Returns
        -------
        Answer
            Tables and what is to be said of the night.

        Raises
        ------
        InputError
            When there is nothing to reduce.
        """
        begun = time.time()
        measured = self._measure(executor, only, fresh, progress)
        frames, roles = measured.frames, measured.roles
        notes = [*measured.notes]
        if self.config.maps:
            notes.append("[[map]]: this version makes no Stokes maps yet; the targets are measured in apertures alone")
        late = time_warning(frames.column("mjd")[frames.column("status") == "used"])
        if late and self.config.instrument.site is not None:
            notes.append(late)
        results = measured.results
        calibration, more = find_calibration(
            measured.items,
            self.config.correction,
            self.config.demodulation,
            frame=self.config.instrument.orientation.frame,
            instrument=self.config.instrument.name,
            nights=nights_of(frames),
            field_range=None if self.config.correction.field_order == 0 else _field_range(frames, self.config),
        )
        failed = measured.failed
        answer = assemble(
            self.config, frames, results, roles, calibration, failed, [*notes, *more], time.time() - begun
        )
        if write:
            from hwpol.night.output import write_products

            write_products(self.config, answer)
        return answer

    def standards(
        self, *, executor: Executor | None = None, fresh: bool = False, progress: Progress | None = None
    ) -> MeasuredNight:
        """Measure the night's standard stars alone; visits finished before are taken up."""
        return self._measure(executor, (), fresh, progress, standards_only=True)

    def _measure(
        self,
        executor: Executor | None,
        only: Sequence[str],
        fresh: bool,
        progress: Progress | None,
        standards_only: bool = False,
    ) -> MeasuredNight:
        frames = self.inventory()
        visits = frames.science().visits()
        if not visits:
            raise InputError(_nothing(frames))
        catalogue = Catalogue.read(self.config.correction.catalogues)
        tasks, roles, others = self._tasks(frames, visits, catalogue, only)
        if standards_only:
            tasks = [task for task in tasks if any(role.entry is not None for role in roles[task.number])]
            if not tasks:
                return MeasuredNight(frames, [], roles, {}, (), ())
        calibrator = tasks[0].calibrator
        if progress is not None:
            progress(0, len(tasks), "masters")
        calibrator.prepare()
        results, failed = self._run(tasks, executor, fresh, progress, others)
        results = self._share_gain(results)
        notes = [*_unmatched(self.config, visits), *calibrator.warnings]
        notes += [role.note for listed in roles.values() for role in listed if role.note]
        items = tuple(
            Measured(
                name, result.task_number, result.fluxes.take_sources([s]), roles[result.task_number][s], result.drift[s]
            )
            for result in results
            for s, name in enumerate(result.names)
        )
        return MeasuredNight(frames, results, roles, failed, items, tuple(notes))

    def _tasks(
        self, frames: FrameSet, visits: list[FrameSet], catalogue: Catalogue, only: Sequence[str]
    ) -> tuple[list[VisitTask], dict[int, list[Role]], set[int]]:
        config = self.config
        calibrator = self.calibrator(frames)
        tasks, roles = [], {}
        wanted = {normal_name(name): name for name in only}
        seen: set[str] = set()
        others: set[int] = set()
        for visit in visits:
            number = int(visit.table["visit"][0])
            targets = targets_of(visit, config.targets)
            listed = [role_of(target, visit, catalogue, config.instrument) for target in targets]
            names = {normal_name(t.name) for t in targets} | {normal_name(str(visit.table["object"][0]))}
            seen |= names & wanted.keys()
            if wanted and not names & wanted.keys() and all(role.entry is None for role in listed):
                others.add(number)
            roles[number] = listed
            tasks.append(
                VisitTask(
                    number=number,
                    frames=visit,
                    calibrator=calibrator,
                    targets=targets,
                    photometry=config.photometry,
                    registration=config.registration.method,
                    hits=config.detector.cosmic_rays != "off",
                    method=config.demodulation.method,
                    gain=config.demodulation.gain,
                )
            )
        for name in wanted.keys() - seen:
            known = ", ".join(sorted({str(v.table["object"][0]) for v in visits}))
            raise MissingError(f"--only {wanted[name]}: no such target in this night; it has {known}")
        return tasks, roles, others

    def _run(
        self,
        tasks: list[VisitTask],
        executor: Executor | None,
        fresh: bool,
        progress: Progress | None,
        others: set[int],
    ) -> tuple[list[VisitResult], dict[int, str]]:
        folder = self.config.output / CACHE / "visits"
        keys = {task.number: fingerprint(task) for task in tasks}
        found = {} if fresh else {t.number: r for t in tasks if (r := load(folder, keys[t.number])) is not None}
        failed: dict[int, str] = {}
        total = len(found) + sum(task.number not in found and task.number not in others for task in tasks)
        # Visits that were not asked for stay in the tables where an earlier run finished them.
        waiting = [task for task in tasks if task.number not in found and task.number not in others]
        if found and progress is not None:
            progress(len(found), len(found) + len(waiting), f"{len(found)} visits finished in an earlier run")

        def finished(task: VisitTask, outcome: VisitResult | HwpolError) -> None:
            if isinstance(outcome, VisitResult):
                found[task.number] = outcome
                save(folder, keys[task.number], outcome)
            else:
                failed[task.number] = str(outcome)
            if progress is not None:
                progress(len(found) + len(failed), total, f"{task.targets[0].name} {task.frames.table['filter'][0]}")

        if executor is None:
            for task in waiting:
                finished(task, _attempt(task))
        else:
            # pure=False would matter to one kind of executor only, and the others refuse it: the tasks differ anyway.
            futures = {executor.submit(_attempt, task): task for task in waiting}
            for future in as_completed(futures):
                finished(futures[future], future.result())
        return [found[task.number] for task in tasks if task.number in found], failed

    def _share_gain(self, results: list[VisitResult]) -> list[VisitResult]:
        """With gain = "night", give every visit the gain of its filter's visits together, as a known throughput."""
        if self.config.demodulation.gain != "night":
            return results
        from hwpol.night.gains import share_gain

        return share_gain(results)


def _unmatched(config: NightConfig, visits: Sequence[FrameSet]) -> list[str]:
    """Targets of the night file that no science frame bears."""
    names = {normal_name(str(visit.table["object"][0])): str(visit.table["object"][0]) for visit in visits}
    words = []
    for target in config.targets:
        wanted = normal_name(target.object or target.name)
        if wanted not in names:
            near = get_close_matches(wanted, names, n=1)
            hint = f"; did you mean {names[near[0]]!r}?" if near else ""
            words.append(f"[[target]] {target.object or target.name!r} matches the object of no science frame{hint}")
    return words


def _attempt(task: VisitTask) -> VisitResult | HwpolError:
    """Reduce a visit; what was raised on purpose is a result too, the rest of the night goes on."""
    try:
        return reduce_visit(task)
    except HwpolError as problem:
        return problem


def _nothing(frames: FrameSet) -> str:
    aside = frames.column("status") != "used"
    reasons = [str(reason) for reason in frames.column("reason")[aside]]
    most = max(set(reasons), key=reasons.count) if reasons else ""
    return (
        f"nothing to reduce: {len(frames)} files, {int(aside.sum())} of them set aside or unread"
        + (f" (mostly: {most})" if most else "")
        + ", and no science frame among the rest; check [keywords] and [kinds] of the instrument file"
    )


def nights_of(frames: FrameSet) -> tuple[str, ...]:
    """Evening dates (UTC day of mjd - 0.5) of the science frames."""
    from astropy.time import Time

    mjd = frames.column("mjd")[frames.column("kind") == "science"]
    days = np.unique(np.floor(mjd[np.isfinite(mjd)] - 0.5))
    return tuple(Time(day, format="mjd").strftime("%Y-%m-%d") for day in days)


def _field_range(frames: FrameSet, config: NightConfig) -> list[list[float]] | None:
    """Pixels of the first beam's field that x, y = -1, 1 stand for."""
    beam = config.instrument.beams[0]
    section = beam.section or beam.trim or config.instrument.detector.trim
    if section is not None:
        return [[section.x0, section.x1 - 1], [section.y0, section.y1 - 1]]
    used = frames.column("status") == "used"
    for text in frames.column("shape")[used]:
        sides = [int(part) for part in str(text).replace("x", " ").split() if part.strip().isdigit()]
        if len(sides) >= 2:
            return [[0.0, sides[0] - 1.0], [0.0, sides[1] - 1.0]]
    return None
