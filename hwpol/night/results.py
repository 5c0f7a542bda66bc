"""From measured visits and a calibration to the tables of a night."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from hwpol.correction import Calibration
from hwpol.correction.catalogue import Catalogue
from hwpol.errors import HwpolError
from hwpol.flags import Flag, flag_names
from hwpol.fluxes import Fluxes
from hwpol.frames import FrameSet
from hwpol.night.config_objects import NightConfig
from hwpol.night.excess import night_excess, with_excess
from hwpol.night.foreground import find_foreground, remove_foreground
from hwpol.night.health import failed_checks, health_checks
from hwpol.night.roles import Role
from hwpol.night.rows import cycle_rows, result_rows
from hwpol.night.solve import VisitSolution, solve_visit
from hwpol.night.visit import VisitResult
from hwpol.products import make_table
from hwpol.stokes import Stokes, angle_difference, carry, real_slopes, sky_slopes

Array = NDArray[np.float64]


#: How a note on a guessed place begins.
GUESS = "place guessed from the brightest source"


@dataclass(frozen=True)
class Answer:
    """What a night gave: its tables, the calibration, and what is to be said of it.

    `visits` and `solutions` hold the measured and the solved visits in the order of the night.
    """

    results: Table
    cycles: Table
    frames: Table
    standards: Table
    checks: Table
    calibration: Calibration | None
    notes: tuple[str, ...]
    visits: tuple[VisitResult, ...]
    solutions: tuple[VisitSolution, ...]
    seconds: float

    @property
    def clean(self) -> bool:
        """Whether nothing was set aside and no check failed."""
        aside = np.any(np.asarray(self.frames["status"]) != "used")
        failed = np.any(
            np.asarray(self.results["flags"]) & int(Flag.NULL_FAILED | Flag.PLATE_SUSPECT | Flag.UNDETERMINED)
        )
        doubted = any(str(text) for text in self.standards["doubt"])
        return not (aside or failed or doubted)


def assemble(
    config: NightConfig,
    frames: FrameSet,
    visits: Sequence[VisitResult],
    roles: dict[int, list[Role]],
    calibration: Calibration | None,
    failed: dict[int, str],
    notes: Sequence[str],
    seconds: float,
) -> Answer:
    """Solve every visit with the calibration and make the tables."""
    words = [*notes]
    guessed: list[str] = []
    rows: list[dict[str, Any]] = []
    cycles: list[dict[str, Any]] = []
    solutions = []
    usable = {visit.filter: calibration for visit in visits if calibration and visit.filter in calibration.filters}
    raw = [_solve(config, visit, usable.get(visit.filter)) for visit in visits]
    excess = night_excess(raw)
    if excess.factor > 1:
        words.append(
            f"repeats scatter {np.sqrt(excess.factor):.2f} times as much as their counts allow over the whole night "
            f"(chance {excess.chance:.0e}): all errors are at least that much larger than the counts' own"
        )
    for visit, measured in zip(visits, raw, strict=True):
        known = visit.filter in usable
        solution = with_drift(with_excess(measured, excess), visit.drift, usable.get(visit.filter))
        foreground, why = find_foreground(
            config.correction.foreground,
            solution,
            len(visit.names),
            calibration if known else None,
            _wavelength(config, visit.filter) if config.correction.foreground.wavelength is not None else None,
        )
        if foreground is not None:
            listed = roles[visit.task_number]
            science = np.asarray([s < len(listed) and listed[s].role == "science" for s in range(solution.flags.size)])
            solution = remove_foreground(solution, foreground, science, calibration)
        if why:
            words.append(f"visit {visit.task_number} ({visit.names[0]}, {visit.filter}): {why}")
        solutions.append(solution)
        if calibration is not None and not known:
            words.append(
                f"filter {visit.filter!r}: the calibration does not have it; q and u of visit {visit.task_number} stay "
                "in the instrument frame"
            )
        words += [
            f"visit {visit.task_number} ({visit.names[0]}, {visit.filter}): {visit.fluxes.frames[k]} {reason}"
            for (_, k), reason in _suspect_frames([visit], [solution]).items()
        ]
        own, each = _rows(config, visit, solution, roles[visit.task_number], calibration if known else None)
        rows += own
        cycles += each
        place = f"visit {visit.task_number} ({visit.names[0]}, {visit.filter or 'no filter'})"
        words += [f"{place}: {note}" for note in visit.notes if GUESS not in note]
        if any(GUESS in note for note in visit.notes):
            guessed.append(f"{visit.names[0]} in {visit.filter or 'no filter'}")
    if guessed:
        words.append(
            f"{GUESS} that has its partner in every beam for {len(guessed)} visits ({', '.join(guessed[:4])}"
            f"{', ...' if len(guessed) > 4 else ''}): look at the pictures in the report; "
            "[[target]] xy = [x, y] fixes it"
        )
    words += [f"visit {number} could not be measured: {reason}" for number, reason in sorted(failed.items())]
    standards = _standards(visits, solutions, roles, calibration)
    words += [f"standard {row['name']} in {row['filter']}: {row['doubt']}" for row in standards if row.get("doubt")]
    words += _lone_standards(calibration)
    checks = health_checks(visits, solutions)
    words += failed_checks(checks)
    meta = {
        "instrument": config.instrument.name,
        "calibration": _calibration_name(config, calibration),
        "estimator": config.statistics.estimator,
        "level": config.statistics.level,
        "angles": "north through east (ICRS), IAU 1973; q, u of frame 'instrument' from the instrument's +Q axis",
    }
    return Answer(
        results=make_table(rows, "results", meta),
        cycles=make_table(cycles, "cycles", meta),
        frames=make_table(
            _frame_rows(config, frames, visits, solutions, failed), "frames", {"instrument": config.instrument.name}
        ),
        standards=make_table(standards, "standards", meta),
        checks=make_table(checks, "checks", {"instrument": config.instrument.name}),
        calibration=calibration,
        notes=tuple(dict.fromkeys(words)),
        visits=tuple(visits),
        solutions=tuple(solutions),
        seconds=seconds,
    )


def _wavelength(config: NightConfig, name: str) -> float | None:
    """Wavelength (micron) of a filter, from the instrument file or its band; None where neither tells."""
    known = config.instrument.filters.get(name)
    if known is not None and known.wavelength is not None:
        return known.wavelength
    try:
        band = known.band if known is not None and known.band else name
        return Catalogue.read(config.correction.catalogues).wavelength_of(band)
    except HwpolError:
        return None


def _calibration_name(config: NightConfig, calibration: Calibration | None) -> str:
    if calibration is None:
        return "none"
    return config.correction.calibration.name if isinstance(config.correction.calibration, Path) else "fit"


def _solve(config: NightConfig, visit: VisitResult, calibration: Calibration | None) -> VisitSolution:
    options = config.demodulation
    return solve_visit(
        visit.fluxes,
        method=options.method,
        gain="fixed" if options.gain == "night" else options.gain,
        circular=options.circular,
        calibration=calibration,
    )


def with_drift(solution: VisitSolution, drift: Array, calibration: Calibration | None) -> VisitSolution:
    """Add the systematic errors of the measurement, shape (S, 2), to the random ones."""
    if not np.any(drift > 0):
        return solution
    extra = np.einsum("si,ij->sij", np.asarray(drift) ** 2, np.eye(2))
    stokes = solution.stokes
    if calibration is not None:
        model = calibration.model(stokes.filter)
        slopes = real_slopes(*sky_slopes(stokes.position_angle, stokes.sense))
        extra = carry(extra, slopes.reshape(-1, 2, 2)[0]) / model.efficiency**2
    covariance = stokes.covariance.copy()
    covariance[:, :2, :2] += extra
    return replace(solution, stokes=replace(stokes, covariance=covariance))


def _rows(
    config: NightConfig,
    visit: VisitResult,
    solution: VisitSolution,
    roles: Sequence[Role],
    calibration: Calibration | None,
) -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
    fluxes = visit.fluxes
    sources, targets = fluxes.shape[0], len(visit.names)
    added = visit.flags.copy()
    if calibration is None:
        added |= int(Flag.UNCALIBRATED)
    chi, eta = solution.stokes.position_angle, solution.stokes.parallactic
    common = {
        "filter": visit.filter,
        "visit": visit.task_number,
        "chi": float(chi),
        "eta": np.nan if eta is None else float(eta),
        "radius": visit.radius,
        "fwhm": float(np.nanmedian(visit.fwhm)) if np.isfinite(visit.fwhm).any() else np.nan,
    }
    options = {"estimator": config.statistics.estimator, "level": config.statistics.level}
    rows = result_rows(
        solution,
        fluxes,
        common,
        {"ra": visit.ra, "dec": visit.dec, "flags": added},
        calibration=_calibration_name(config, calibration),
        photon_err=_photon_error(solution, calibration),
        **options,  # type: ignore[arg-type]
    )
    for s, row in enumerate(rows):
        row["target"] = visit.names[s] if s < targets else visit.names[0]
        row["source"] = 0 if s < targets else s - targets + 1
        row["role"] = roles[s].role if s < targets else "science"
    assert len(rows) == sources
    return rows, cycle_rows(solution, fluxes, rows, **options)  # type: ignore[arg-type]


def _photon_error(solution: VisitSolution, calibration: Calibration | None) -> Array:
    """Error of q, in the frame of the result, that source photons alone would allow."""
    observed = replace(solution.observed, covariance=solution.photon_covariance, v=None)
    if calibration is not None:
        observed = calibration.apply(observed)
    return np.asarray(observed.q_err)


def _standards(
    visits: Sequence[VisitResult],
    solutions: Sequence[VisitSolution],
    roles: dict[int, list[Role]],
    calibration: Calibration | None,
) -> list[dict[str, Any]]:
    """Rows of standards.ecsv: those of the fit, and the standards that took no part in one."""
    rows = [] if calibration is None else calibration.standards_table()
    told = {(row["name"], row["filter"], row["visit"]) for row in rows}
    for visit, solution in zip(visits, solutions, strict=True):
        for s, name in enumerate(visit.names):
            role = roles[visit.task_number][s]
            if role.entry is not None and (name, visit.filter, visit.task_number) not in told:
                rows.append(_standard_row(name, visit, solution.stokes[s : s + 1], role))
    return rows


def _lone_standards(calibration: Calibration | None) -> list[str]:
    """Filters whose instrumental polarisation rests on one star, which then agrees with it by construction."""
    if calibration is None:
        return []
    rows = calibration.standards_table()
    words = []
    for name in calibration.filters:
        zero = {str(row["name"]) for row in rows if row["filter"] == name and row["role"] == "zero-polarised"}
        if len(zero) == 1:
            words.append(
                f"filter {name!r}: one zero-polarised standard ({zero.pop()}) defines the instrumental polarisation, "
                "so that its own q and u come out as zero and test nothing; observe two or more"
            )
    return words


def _standard_row(name: str, visit: VisitResult, stokes: Stokes, role: Role) -> dict[str, Any]:
    entry = role.entry
    assert entry is not None
    cat = 0j if role.role == "zero-polarised" else entry.p * np.exp(2j * np.radians(entry.theta))
    on_sky = stokes.frame == "sky"
    dz = stokes.z[0] - cat if on_sky else complex(np.nan, np.nan)
    row = {
        "name": name, "filter": visit.filter, "visit": visit.task_number, "role": role.role,
        "cat_p": entry.p, "cat_p_err": entry.p_err, "cat_theta": entry.theta, "cat_theta_err": entry.theta_err,
        "cat_q": cat.real, "cat_u": cat.imag, "provenance": entry.provenance, "reference": entry.reference,
        "used": False,
    }  # fmt: skip
    if not on_sky:
        return row
    spread = (entry.p**2 + entry.p_err**2) / 2 if role.role == "zero-polarised" else entry.p_err**2
    across = spread if role.role == "zero-polarised" else (2 * entry.p * np.radians(entry.theta_err)) ** 2
    turn = np.exp(2j * np.radians(entry.theta)) if role.role == "polarised" else 1.0 + 0j
    axes = np.array([[turn.real, -turn.imag], [turn.imag, turn.real]])
    total = stokes.total_covariance[0] + axes @ np.diag([spread, across]) @ axes.T
    vector = np.array([dz.real, dz.imag])
    row |= {
        "q": stokes.q[0], "u": stokes.u[0], "q_err": stokes.q_err[0], "u_err": stokes.u_err[0],
        "p": stokes.p[0], "p_err": stokes.p_err[0], "theta": stokes.theta[0], "theta_err": stokes.theta_err[0],
        "dq": dz.real, "du": dz.imag, "dp": stokes.p[0] - abs(cat),
        "dtheta": float(angle_difference(stokes.theta[0], entry.theta)) if role.role == "polarised" else np.nan,
        "sigma": float(np.sqrt(vector @ np.linalg.solve(total, vector))) if np.isfinite(total).all() else np.nan,
    }  # fmt: skip
    return row


def _frame_rows(
    config: NightConfig,
    frames: FrameSet,
    visits: Sequence[VisitResult],
    solutions: Sequence[VisitSolution],
    failed: dict[int, str],
) -> list[dict[str, Any]]:
    lost = _lost_frames(visits) | _suspect_frames(visits, solutions)
    rows = []
    counts: dict[int, int] = {}
    for row in frames.table:
        status, reason = str(row["status"]), str(row["reason"])
        visit = int(row["visit"])
        # A visit's frames stand in the same order here and in its fluxes.
        place = visit, counts.get(visit, 0)
        counts[visit] = place[1] + 1
        if status == "used" and visit in failed:
            status, reason = "set aside", failed[visit]
        elif status == "used" and place in lost:
            status, reason = "set aside", lost[place]
        rows.append(
            {name: row[name] for name in ("kind", "object", "filter", "exposure", "mjd", "wave_plate", "psi")}
            | {"visit": row["visit"], "cycle": row["cycle"], "status": status, "reason": reason}
            | {"file": _relative(str(row["file"]), config.folder)}
        )
    return rows


def _lost_frames(visits: Sequence[VisitResult]) -> dict[tuple[int, int], str]:
    """Frames (visit, place in it) of which no source could be used, with the reason."""
    lost = {}
    for visit in visits:
        fluxes: Fluxes = visit.fluxes
        dead = ~np.isfinite(fluxes.flux).any(axis=(0, 2))
        for k in np.flatnonzero(dead):
            bits = int(np.bitwise_or.reduce(fluxes.flags[:, k], axis=(0, 1)))
            why = ", ".join(name.replace("_", " ") for name in flag_names(bits)) or "not measured"
            lost[visit.task_number, int(k)] = f"no source of its visit could be measured in it: {why}"
    return lost


def _suspect_frames(visits: Sequence[VisitResult], solutions: Sequence[VisitSolution]) -> dict[tuple[int, int], str]:
    """Frames (visit, place in it) that contradict their wave-plate angle, with the reason."""
    found = {}
    for visit, solution in zip(visits, solutions, strict=True):
        for suspect in solution.suspects:
            psi = visit.fluxes.wave_plate[suspect.frame]
            instead = f"it fits {suspect.position:g} deg" if np.isfinite(suspect.position) else "it fits no position"
            found[visit.task_number, suspect.frame] = (
                f"does not fit its wave-plate angle {psi:g} deg (chance {suspect.chance:.1g}): {instead}"
            )
    return found


def _relative(file: str, folder: Path) -> str:
    try:
        return Path(file).resolve().relative_to(folder.resolve()).as_posix()
    except ValueError:
        return file
