"""What a set of frames holds, what it lacks and what that costs, as text for a terminal."""

from __future__ import annotations

import math
import textwrap
from collections import Counter
from datetime import UTC, datetime, timedelta

import numpy as np
from numpy.typing import NDArray

from hwpol.frames.calibrator import Calibrator
from hwpol.frames.frameset import FrameSet
from hwpol.frames.geometry import airmass_of, time_warning
from hwpol.frames.grouping import position_angle, within_turn
from hwpol.instrument.description import Instrument

_LISTED = 8  # files named before the rest is only counted
_WEAK = 0.05  # share of the full modulation below which q or u counts as not measured
_TURN = 1.0  # deg of field rotation worth a word
_HIGH = 20.0  # deg, above which the secant is the airmass to 1 percent
_OTHER_AIRMASS = 0.05
_MJD_ZERO = datetime(1858, 11, 17, tzinfo=UTC)


def describe(frames: FrameSet, *, flat: str = "pooled") -> str:
    """Describe visits, calibrations and what is missing or doubtful with its consequence; lines of up to 100 columns.

    Parameters
    ----------
    frames : FrameSet
    flat : {"pooled", "per-angle", "off"}
        How flats will be used.

    Returns
    -------
    str
    """
    lines = [_counts(frames), ""]
    lines += [*_visit_lines(frames), "", "Calibrations", *_calibration_lines(frames)]
    problems = doubts(frames, flat=flat)
    lines += ["", "Missing or doubtful" if problems else "Nothing missing or doubtful."]
    for problem in problems:
        lines += _wrapped(problem, "  - ", "    ")
    return "\n".join(lines)


def doubts(frames: FrameSet, *, flat: str = "pooled") -> list[str]:
    """List what is missing or doubtful in a set of frames and in its instrument, each with its consequence.

    Parameters
    ----------
    frames : FrameSet
    flat : {"pooled", "per-angle", "off"}
        How flats will be used.
    """
    found = _file_doubts(frames)
    science = frames.science()
    if len(science) == 0:
        return [*found, "no science frame in use: there is nothing to reduce"]
    found += _calibration_doubts(frames, flat)
    visits = frames.visits()
    alone = sum(len(_angles(visit)) == 1 for visit in visits)
    if alone > 3 and alone > len(visits) / 2:
        found.append(
            f"{alone} of {len(visits)} visits have one plate position only: if the object's name holds the angle, "
            "give keywords.object a pattern that leaves it out"
        )
    for visit in visits:
        found += _visit_doubts(visit)
    return found + _orientation_doubts(science) + _pointing_doubts(science) + _notes(frames)


def determined(instrument: Instrument, filter_name: str, psi: NDArray[np.float64], *, free_gain: bool = True) -> bool:
    """Whether plate angles determine q and u with every frame's transparency free.

    Parameters
    ----------
    instrument : Instrument
    filter_name : str
    psi : ndarray, shape (position,)
        Degrees; ignored where the instrument has no wave plate.
    free_gain : bool
        The beams' throughputs are fitted too.

    Notes
    -----
    To first order in p, log f_kb = log T_k + log g_b + a_kb q + b_kb u, with a and b of the first row of
    analyser times retarder; q and u are determined when their columns are independent of those of T and g.
    A single beam has no partner that gives T, which then counts as constant.
    """
    alpha = 2 * np.radians([beam.analyser for beam in instrument.beams])
    if instrument.wave_plate is None:
        a, b = np.cos(alpha)[None, :], np.sin(alpha)[None, :]
    else:
        half = math.radians(instrument.wave_plate.retardance_of(filter_name)) / 2
        phase = 4 * np.radians(np.asarray(psi, dtype=float))[:, None] - alpha
        a = math.cos(half) ** 2 * np.cos(alpha) + math.sin(half) ** 2 * np.cos(phase)
        b = math.cos(half) ** 2 * np.sin(alpha) + math.sin(half) ** 2 * np.sin(phase)
    positions, beams = a.shape
    frame, beam = (index.ravel() for index in np.indices(a.shape))
    free = [frame == k for k in range(positions)] if beams > 1 else [frame >= 0]
    free += [beam == k for k in range(1, beams)] if free_gain else []
    nuisance = np.array(free, dtype=float).T
    signal = np.array([a.ravel(), b.ravel()]).T
    own = signal - nuisance @ np.linalg.lstsq(nuisance, signal, rcond=None)[0]
    return bool(np.linalg.svd(own, compute_uv=False).min() / math.sqrt(a.size / 2) > _WEAK)


def _counts(frames: FrameSet) -> str:
    status = Counter(frames.column("status").tolist())
    kinds = Counter(frames.column("kind")[frames.column("status") == "used"].tolist())
    shown = ", ".join(f"{kinds[kind]} {kind}" for kind in ("science", "bias", "dark", "flat") if kinds[kind])
    rest = [f"{status[name]} {name}" for name in ("set aside", "unread") if status[name]]
    return f"{len(frames)} files: " + "; ".join([f"{status['used']} used" + (f" ({shown})" if shown else ""), *rest])


def _span(values: NDArray[np.float64], digits: int) -> str:
    known = values[np.isfinite(values)]
    if known.size == 0:
        return "?"
    low, high = f"{known.min():.{digits}f}", f"{known.max():.{digits}f}"
    return low if low == high else f"{low}..{high}"


def _several(values: NDArray[np.float64]) -> str:
    known = sorted(set(np.round(values[np.isfinite(values)], 3).tolist()))
    shown = ", ".join(f"{value:g}" for value in known) if len(known) < 4 else f"{known[0]:g}..{known[-1]:g}"
    return shown or "?"


def _clock(mjd: NDArray[np.float64]) -> str:
    known = mjd[np.isfinite(mjd)]
    if known.size == 0:
        return "?"
    first, last = (_MJD_ZERO + timedelta(days=float(t)) for t in (known.min(), known.max()))
    return f"{first:%Y-%m-%d %H:%M}-{last:%H:%M}"


def _visit_lines(frames: FrameSet) -> list[str]:
    visits = frames.visits()
    if not visits:
        return ["No visits."]
    form = "{:>5}  {:<18.18} {:<14.14} {:>6} {:>5} {:>7}  {:>12}  {:<22}"
    heads = ("visit", "target", "filter", "frames", "plate", "cycles", "exposure (s)", "middle (UT)")
    lines = ["Visits", form.format(*heads).rstrip()]
    for visit in visits:
        cycles = visit.cycles()
        whole = sum(cycle.complete for cycle in cycles)
        plate = "-" if frames.instrument.wave_plate is None else f"{len(_angles(visit))}"
        lines.append(
            form.format(
                *(visit.column("visit")[0], visit.column("object")[0] or "(unnamed)", visit.column("filter")[0] or "?"),
                *(len(visit), plate, f"{whole}" if whole == len(cycles) else f"{whole}/{len(cycles)}"),
                *(_several(visit.column("exposure")), _clock(visit.column("mjd"))),
            ).rstrip()
        )
        lines += _wrapped(_turns(visit), " " * 7, " " * 7)
    return lines


def _turns(visit: FrameSet) -> str:
    """Plate positions, airmass, chi and eta of one visit."""
    angles = _angles(visit)
    parts = []
    if visit.instrument.wave_plate is not None:
        step = set(np.round(np.diff(angles), 1).tolist())
        regular = len(angles) > 4 and len(step) == 1
        shown = f"{angles[0]:g}..{angles[-1]:g} by {step.pop():g}" if regular else ", ".join(f"{a:g}" for a in angles)
        parts.append(f"plate {shown}")
    parts.append(f"airmass {_span(visit.column('airmass'), 2)}")
    parts.append(f"chi {_span(visit.column('chi'), 1)}")
    if np.isfinite(visit.column("eta")).any():
        parts.append(f"eta {_span(visit.column('eta'), 1)}")
    return "; ".join(parts)


def _angles(frames: FrameSet) -> list[float]:
    """Angle of each plate position of one visit, deg."""
    plate, place, psi = frames.instrument.wave_plate, frames.column("position"), frames.column("psi")
    if plate is None:
        return []
    psi = within_turn(psi, plate.tolerance)
    return [round(position_angle(psi[place == p], plate.tolerance), 1) for p in np.unique(place[place > 0])]


def _calibration_lines(frames: FrameSet) -> list[str]:
    set_ = frames.calibrations()
    kind, exposure, filters, psi = (set_.column(name) for name in ("kind", "exposure", "filter", "psi"))
    lines = [f"  bias  {int((kind == 'bias').sum())}"]
    darks = Counter(np.round(exposure[kind == "dark"], 3).tolist())
    lines.append("  dark  " + (", ".join(f"{n} of {t:g} s" for t, n in sorted(darks.items())) or "0"))
    if not (kind == "flat").any():
        return [*lines, "  flat  0"]
    for name in sorted(set(filters[kind == "flat"].tolist())):
        here = (kind == "flat") & (filters == name)
        angles = Counter(round(a, 1) % 360.0 for a in psi[here & np.isfinite(psi)].tolist())
        text = f"{int(here.sum())} in {name or '(no filter)'}"
        if angles:
            text += f", plate at {', '.join(f'{angle:g} ({n})' for angle, n in sorted(angles.items()))}"
        lines += _wrapped(text, "  flat  ", " " * 8)
    return lines


def _wrapped(text: str, head: str, indent: str) -> list[str]:
    return textwrap.wrap(text, 100, initial_indent=head, subsequent_indent=indent)


def _file_doubts(frames: FrameSet) -> list[str]:
    lost = np.flatnonzero(frames.column("status") != "used")
    names, status, reasons = (frames.column(column) for column in ("name", "status", "reason"))
    excluded = sum("excluded by" in reason for reason in reasons[lost])
    shown = [at for at in lost if "excluded by" not in reasons[at]]
    found = [
        f"{names[at]} {'unread' if status[at] == 'unread' else 'set aside'}: {reasons[at]}" for at in shown[:_LISTED]
    ]
    if len(shown) > _LISTED:
        found.append(f"and {len(shown) - _LISTED} more files set aside or unread")
    if excluded:
        found.append(f"{excluded} files excluded by the night file")
    return found


def _calibration_doubts(frames: FrameSet, flat: str) -> list[str]:
    found = list(Calibrator(frames, flat=flat).warnings)
    science, set_ = frames.science(), frames.calibrations()
    kind = set_.column("kind")
    darks = set_.column("exposure")[kind == "dark"]
    longest = np.nanmax(np.append(science.column("exposure"), 0.0))
    if darks.size and longest > 1.01 * np.nanmax(darks):
        found.append(f"the longest dark has {np.nanmax(darks):g} s, science up to {longest:g} s: it is scaled up")
    unused = set(set_.column("filter")[kind == "flat"].tolist()) - set(science.column("filter").tolist())
    return found + [f"flats in filter {name or '(none)'} match no science frame" for name in sorted(unused)]


def _visit_doubts(visit: FrameSet) -> list[str]:
    number, name, band = (visit.column(column)[0] for column in ("visit", "object", "filter"))
    head = f"visit {number} ({name or 'unnamed'}, {band or 'no filter'}): "
    angles, cycles, found = np.array(_angles(visit)), visit.cycles(), []
    if not determined(visit.instrument, band, angles):
        known = determined(visit.instrument, band, angles, free_gain=False) and len(visit.instrument.beams) > 1
        where = "the beams" if angles.size == 0 else f"the plate angles {', '.join(f'{a:g}' for a in angles)}"
        remedy = ' unless the gain is known (demodulation.gain = "night" or "fixed")' if known else ""
        found.append(f"{head}{where} do not determine q and u{remedy}")
    broken = [cycle for cycle in cycles if not cycle.complete]
    for cycle in broken[:3]:
        lacking = ", ".join(f"{angle:.1f}".removesuffix(".0") for angle in cycle.missing)
        found.append(f"{head}cycle {cycle.cycle} lacks {lacking} deg; used as far as its angles go, and flagged")
    if len(broken) > 3:
        found.append(f"{head}{len(broken) - 3} more cycles are incomplete")
    if len(cycles) == 1 and len(visit) > 1:
        found.append(f"{head}a single cycle: no scatter of repeats to test the errors")
    chi = visit.column("chi")
    turn = np.nanmax(chi) - np.nanmin(chi) if np.isfinite(chi).any() else 0.0
    if turn > _TURN:
        found.append(f"{head}the field turns by {turn:.1f} deg; exact only where a calibration enters the demodulation")
    return found


def _orientation_doubts(science: FrameSet) -> list[str]:
    orientation, found = science.instrument.orientation, []
    eta, chi = science.column("eta"), science.column("chi")
    needed = orientation.frame != "instrument" or (orientation.position_angle == "parallactic" and np.isnan(chi).any())
    if np.isnan(eta).any() and needed:
        what = "[site] is not given" if science.instrument.site is None else "ra, dec or time are not known"
        found.append(
            f"parallactic angle unknown for {int(np.isnan(eta).sum())} science frames ({what}): they cannot be turned "
            "to the sky"
        )
    if needed or orientation.position_angle == "parallactic":
        warning = time_warning(science.column("mjd"))
        found += [warning] if warning else []
    return found


def _pointing_doubts(science: FrameSet) -> list[str]:
    """Signs that site, time and coordinates do not belong together."""
    altitude, airmass = science.column("altitude"), science.column("airmass")
    check = "check [site] (longitude east positive), keywords.time (UTC) and the unit of keywords.ra"
    below = int((altitude < 0).sum())
    if below:
        return [f"{below} science frames point below the horizon: {check}"]
    ratio = airmass / airmass_of(altitude)
    ratio = ratio[(altitude > _HIGH) & np.isfinite(ratio)]
    if ratio.size and abs(float(np.median(ratio)) - 1.0) > _OTHER_AIRMASS:
        return [
            f"the airmass in the headers is {np.median(ratio):.2f} times that of site, time and coordinates: {check}"
        ]
    return []


def _notes(frames: FrameSet) -> list[str]:
    notes = Counter(note for note in frames.column("note")[frames.column("status") == "used"].tolist() if note)
    return [f"{count} {'frame' if count == 1 else 'frames'}: {note}" for note, count in notes.most_common(_LISTED)]
