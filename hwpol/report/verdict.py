"""The verdict of the night in three lines, from the stored tables."""

from __future__ import annotations

from typing import Any

import numpy as np
from markupsafe import Markup, escape
from scipy.stats import chi2

from hwpol.flags import Flag
from hwpol.report.numbers import Cell, degrees, percent, plain
from hwpol.report.stored import Stored
from hwpol.report.words import BROKEN, CARE, counted, flag_words, listed

#: Probability below which a chi square is said not to fit.
DOUBT = 1e-3


def verdict(stored: Stored) -> list[tuple[str, Markup]]:
    """Heading and text of each line."""
    return [
        ("Reduced", Markup(escape(_reduced(stored)))),
        ("Calibration", _calibration(stored)),
        ("Not to be trusted", _doubts(stored)),
    ]


def _reduced(stored: Stored) -> str:
    table = stored.results.table
    if not len(table):
        return "No target was measured."
    main = np.asarray(table["source"]) == 0
    targets, filters = len(set(table["target"][main])), len(set(table["filter"]))
    frames = np.asarray(stored.frames.table["status"])
    science = np.asarray(stored.frames.table["kind"]) == "science"
    text = (
        f"{counted(targets, 'target')} in {counted(filters, 'filter')}, {counted(int(main.sum()), 'measurement')} "
        f"from {counted(int(np.sum(science & (frames == 'used'))), 'science frame')}"
    )
    lost = int(np.sum(frames != "used"))
    text += f"; {lost} of {len(frames)} files not used. " if lost else f"; all {len(frames)} files used. "
    error = np.sqrt((np.asarray(table["q_err"]) ** 2 + np.asarray(table["u_err"]) ** 2) / 2)
    typical = _median(error[main])
    text += f"Typical random error of q and u {percent(typical, typical)} %"
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = _median((np.asarray(table["q_err"]) / np.asarray(table["photon_err"]))[main])
    text += f", {plain(ratio)} times what photons alone allow. " if np.isfinite(ratio) else ". "
    more = int(np.sum(~main))
    if more:
        text += f"{counted(more, 'field star')} measured beside them. "
    with np.errstate(invalid="ignore"):
        seen = np.asarray(table["p_debiased"]) >= 3 * np.asarray(table["p_err"])
    science_rows = main & (np.asarray(table["role"]) == "science")
    if science_rows.any():
        text += f"Polarisation above three of its errors in {int(np.sum(seen & science_rows))} of "
        text += f"{int(science_rows.sum())} science measurements."
    return text.strip()


def _median(values: Any) -> float:
    finite = np.asarray(values, dtype=float)
    finite = finite[np.isfinite(finite)]
    return float(np.median(finite)) if finite.size else float("nan")


def calibration_cell(name: str, entry: dict[str, Any], key: str, kind: str = "percent", error: str = "") -> Cell:
    """One number of calibration.toml; cells are named calibration/FILTER/key."""
    value = float(entry.get(key, float("nan")))
    spread = float(entry.get(error or f"{key}_err", float("nan")))
    text = {"percent": percent, "degrees": degrees}[kind](value, spread) if kind != "plain" else plain(value, 4)
    return Cell(f"calibration/{name}/{key}", value, text)


def fit_words(entry: dict[str, Any]) -> str:
    """What the chi square of a fit says."""
    value, dof = float(entry.get("chi2", float("nan"))), int(entry.get("dof", 0))
    if dof <= 0 or not np.isfinite(value):
        return "too few standards to test the fit"
    if chi2.sf(value, dof) < DOUBT:
        return "the standards disagree with each other beyond their errors"
    return "the standards agree within their errors"


def _calibration(stored: Stored) -> Markup:
    filters = (stored.calibration or {}).get("filters", {})
    if not filters:
        return Markup("None was applied: q and u stay in the instrument frame, with the instrument's own polarisation.")
    parts = []
    for name, entry in filters.items():
        part = Markup("<b>{}</b>: ").format(name)
        for who, first in (("instrument", "ip"), ("telescope", "tel")):
            if np.isfinite(float(entry.get(f"{first}_q", np.nan))):
                part += Markup("{} adds q {} ± {} %, u {} ± {} %, ").format(
                    who,
                    *(
                        calibration_cell(name, entry, f"{first}_{key}", error=f"{first}_{key[0]}_err")
                        for key in ("q", "q_err", "u", "u_err")
                    ),
                )
        angle_err = calibration_cell(name, entry, "zero_angle_err", "degrees", "zero_angle_err")
        if np.isfinite(angle_err.value):
            part += Markup("zero angle {} ± {}°; ").format(
                calibration_cell(name, entry, "zero_angle", "degrees"), angle_err
            )
        else:
            part += "zero angle not measured; "
        parts.append(part + fit_words(entry))
    missing = sorted(set(stored.results.table["filter"]) - set(filters))
    if missing:
        parts.append(escape(f"no calibration for {listed(missing)}"))
    worst = _worst_standard(stored)
    return Markup(". ").join([*parts, *([worst] if worst else [])]) + Markup(".")


def _worst_standard(stored: Stored) -> Markup:
    table = stored.standards.table
    sigma = np.asarray(table["sigma"], dtype=float) if len(table) else np.empty(0)
    # A fit without freedom meets its standards exactly, which says nothing.
    filters = (stored.calibration or {}).get("filters", {})
    free = [int(filters.get(str(name), {}).get("dof", 0)) > 0 for name in table["filter"]]
    sigma = np.where(np.asarray(free, dtype=bool) | ~np.asarray(table["used"], dtype=bool), sigma, np.nan)
    if not np.isfinite(sigma).any():
        return Markup()
    row = int(np.nanargmax(sigma))
    return Markup("Standard furthest from its catalogue: {} in {}, {} of its errors").format(
        table["name"][row], table["filter"][row], stored.standards.plain(row, "sigma", 1)
    )


def _doubts(stored: Stored) -> Markup:
    table = stored.results.table
    parts: dict[str, list[Markup]] = {"": [], "Take care: ": []}
    flags = np.asarray(table["flags"]) if len(table) else np.empty(0, dtype=int)
    for level, lead in ((BROKEN, ""), (CARE, "Take care: ")):
        for flag in Flag:
            if not flag & level:
                continue
            rows = np.flatnonzero(flags & int(flag))
            if not len(rows):
                continue
            words = flag_words(int(flag))[0]
            parts[lead].append(
                Markup('<a href="#flag-{}">{}</a> ({})').format(words.name, words.words, _which(stored, rows))
            )
    doubted = [
        f"{row['name']} in {row['filter']} ({row['doubt']})" for row in stored.standards.table if str(row["doubt"])
    ]
    if doubted:
        parts["Take care: "].append(escape(f"standards in doubt: {listed(doubted, 3)}"))
    sentences = [escape(lead) + Markup("; ").join(found) + "." for lead, found in parts.items() if found]
    if not sentences:
        return Markup("Nothing that the checks could find.")
    return Markup(" ").join(sentences)


def _which(stored: Stored, rows: Any) -> str:
    table = stored.results.table
    if len(rows) == len(table):
        return "all measurements"
    main = [row for row in rows if table["source"][row] == 0]
    names = list(dict.fromkeys(f"{table['target'][row]} {table['filter'][row]}" for row in main))
    stars = len(rows) - len(main)
    if stars:
        names.append(counted(stars, "field star"))
    return listed(names, 4)
