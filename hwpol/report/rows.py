"""Tables of the page: cells taken from stored tables, with words beside them."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np
from scipy.stats import chi2

from hwpol.flags import Flag
from hwpol.report.drawing import utc
from hwpol.report.numbers import UNKNOWN, Cell, Sheet
from hwpol.report.standing import calibration_plots, html
from hwpol.report.stored import Stored
from hwpol.report.verdict import DOUBT, calibration_cell, fit_words
from hwpol.report.words import counted, flag_words

#: Stars of a field listed at most; the rest is in results.ecsv.
MOST_STARS = 300
#: Files named at most for one reason.
MOST_FILES = 60


def polarisation_cells(sheet: Sheet, row: int) -> dict[str, Any]:
    """p, theta, q and u of a row of results with their errors."""
    p_err, theta_err = sheet.number(row, "p_err"), sheet.number(row, "theta_err")
    total = {
        name: float(np.hypot(sheet.number(row, f"{name}_err"), np.nan_to_num(sheet.number(row, f"{name}_cal_err"))))
        for name in "qu"
    }
    weak = not sheet.number(row, "p_debiased") >= 3 * p_err
    return {
        "p": sheet.percent(row, "p_debiased", p_err),
        "p_low": sheet.percent(row, "p_low", p_err),
        "p_high": sheet.percent(row, "p_high", p_err),
        "p_upper": sheet.percent(row, "p_upper95", p_err) if weak else None,
        "theta": sheet.degrees(row, "theta", theta_err),
        "theta_err": sheet.degrees(row, "theta_err", theta_err),
        "q": sheet.percent(row, "q", total["q"], sign=True),
        "q_err": sheet.percent(row, "q_err", total["q"]),
        "u": sheet.percent(row, "u", total["u"], sign=True),
        "u_err": sheet.percent(row, "u_err", total["u"]),
        "weak": weak,
        "known": bool(np.isfinite(sheet.number(row, "q"))),
        "instrument": sheet.text(row, "frame") != "sky",
        "flags": flag_words(int(sheet.table["flags"][row])),
    }


def target_rows(stored: Stored, rows: list[int]) -> list[dict[str, Any]]:
    """The table at the top."""
    sheet = stored.results
    one_night = len({utc(sheet.number(row, "mjd") - 0.5, "%Y-%m-%d") for row in rows}) == 1
    form = "%H:%M" if one_night else "%m-%d %H:%M"
    return [
        {
            "target": sheet.text(row, "target"),
            "filter": sheet.text(row, "filter"),
            "role": sheet.text(row, "role"),
            "visit": int(sheet.table["visit"][row]),
            "time": time_cell(sheet, row, form),
            "cycles": sheet.plain(row, "cycles", 0),
            **polarisation_cells(sheet, row),
        }
        for row in rows
    ]


def time_cell(sheet: Sheet, row: int, form: str = "%Y-%m-%d %H:%M") -> Cell:
    """The middle of a measurement, UTC."""
    value = sheet.number(row, "mjd")
    return Cell(f"{sheet.name}/{row}/mjd", value, utc(value, form) if np.isfinite(value) else UNKNOWN)


def field_rows(stored: Stored, number: int) -> dict[str, Any]:
    """Stars of a visit, brightest first."""
    sheet = stored.results
    rows = np.flatnonzero(np.asarray(sheet.table["visit"]) == number)
    rows = rows[np.argsort(np.asarray(sheet.table["source"])[rows], kind="stable")]
    shown = [
        {
            "source": int(sheet.table["source"][row]),
            "x": sheet.plain(int(row), "x", 1),
            "y": sheet.plain(int(row), "y", 1),
            **polarisation_cells(sheet, int(row)),
        }
        for row in rows[:MOST_STARS]
    ]
    return {"shown": shown, "more": max(len(rows) - MOST_STARS, 0), "all": len(rows)}


def visit_facts(stored: Stored, number: int) -> dict[str, Any]:
    """Heading and facts of one visit."""
    sheet, row = stored.results, stored.target_row(number)
    facts: list[tuple[str, Any, str]] = [
        ("frames", sheet.plain(row, "frames", 0), ""),
        ("cycles", sheet.plain(row, "cycles", 0), ""),
        ("exposure", sheet.plain(row, "exposure", 0), "s"),
        ("airmass", sheet.plain(row, "airmass", 2), ""),
        ("aperture", sheet.plain(row, "radius", 1), "pixels"),
        ("seeing", sheet.plain(row, "fwhm", 1), "pixels"),
        ("signal", sheet.significant(row, "flux"), "e⁻/s"),
    ]
    table = sheet.table
    others = [str(t) for t in table["target"][(table["visit"] == number) & (table["source"] == 0)]][1:]
    start = f"visit {number} ("
    return {
        "number": number,
        "target": sheet.text(row, "target"),
        "filter": sheet.text(row, "filter"),
        "role": sheet.text(row, "role"),
        "time": time_cell(sheet, row),
        "others": others,
        "facts": [(name, cell, unit) for name, cell, unit in facts if np.isfinite(cell.value)],
        "notes": [str(note).split("): ", 1)[-1] for note in stored.run.get("notes", []) if str(note).startswith(start)],
        **polarisation_cells(sheet, row),
    }


def calibration_sections(stored: Stored) -> list[dict[str, Any]]:
    """One entry a filter of the calibration, and a filter of the standards that has none."""
    filters = (stored.calibration or {}).get("filters", {})
    names = [*filters, *dict.fromkeys(str(f) for f in stored.standards.table["filter"] if str(f) not in filters)]
    sections = []
    for number, name in enumerate(names, start=1):
        entry = filters.get(name)
        sections.append(
            {
                "name": name,
                "numbers": [] if entry is None else _parameters(name, entry),
                "words": "No calibration was found for this filter." if entry is None else _fit(name, entry),
                "chi2": None if entry is None else calibration_cell(name, entry, "chi2", "plain"),
                "used": [] if entry is None else [str(star) for star in entry.get("used", [])],
                "left_out": []
                if entry is None
                else [f"{item['name']} ({item['reason']})" for item in entry.get("left_out", [])],
                "flags": [] if entry is None else flag_words(_bits(entry.get("flags", []))),
                "plots": [[html(plot) for plot in column] for column in calibration_plots(stored, name, number)],
            }
        )
    return sections


def _bits(names: list[str]) -> int:
    value = 0
    for name in names:
        value |= int(Flag.__members__.get(str(name).upper(), 0))
    return value


def _parameters(name: str, entry: dict[str, Any]) -> list[tuple[str, Cell, Cell, str]]:
    rows = []
    for key, label, kind, unit in (
        ("ip_q", "instrumental polarisation, q", "percent", "%"),
        ("ip_u", "instrumental polarisation, u", "percent", "%"),
        ("tel_q", "of the telescope, q", "percent", "%"),
        ("tel_u", "of the telescope, u", "percent", "%"),
        ("efficiency", "efficiency", "percent", "%"),
        ("zero_angle", "zero angle", "degrees", "°"),
    ):
        if key in entry:
            error = f"{key}_err"
            rows.append(
                (
                    label,
                    calibration_cell(name, entry, key, kind),
                    calibration_cell(name, entry, error, kind, error),
                    unit,
                )
            )
    return rows


def _fit(name: str, entry: dict[str, Any]) -> str:
    words = fit_words(entry)
    return words[0].upper() + words[1:] + "."


def standard_rows(stored: Stored) -> list[dict[str, Any]]:
    """Standards against their catalogue values."""
    sheet = stored.standards
    rows = []
    for row in range(len(sheet.table)):
        p_err, theta_err = sheet.number(row, "p_err"), sheet.number(row, "theta_err")
        polarised = sheet.text(row, "role") == "polarised"
        rows.append(
            {
                "name": sheet.text(row, "name"),
                "filter": sheet.text(row, "filter"),
                "role": sheet.text(row, "role"),
                "p": sheet.percent(row, "p", p_err),
                "cat_p": sheet.percent(row, "cat_p", sheet.number(row, "cat_p_err")),
                "theta": sheet.degrees(row, "theta", theta_err) if polarised else None,
                "cat_theta": sheet.degrees(row, "cat_theta", sheet.number(row, "cat_theta_err")) if polarised else None,
                "dq": sheet.percent(row, "dq", sheet.number(row, "q_err"), sign=True),
                "du": sheet.percent(row, "du", sheet.number(row, "u_err"), sign=True),
                "sigma": sheet.plain(row, "sigma", 1),
                "used": bool(sheet.table["used"][row]),
                "doubt": sheet.text(row, "doubt"),
                "provenance": sheet.text(row, "provenance"),
                "reference": sheet.text(row, "reference"),
            }
        )
    return rows


def checks(stored: Stored, rows: list[int]) -> list[tuple[str, str, str]]:
    """Health checks: what was asked, "passed", "failed" or "not possible", and the finding in words."""
    table = stored.results.table
    flags = np.asarray(table["flags"])[rows] if rows else np.empty(0, dtype=int)
    total = len(rows)

    def failing(flag: Flag) -> int:
        return int(np.sum((flags & int(flag)) != 0))

    value, dof = (np.asarray(table[name], dtype=float)[rows] for name in ("chi2", "dof"))
    tested = np.isfinite(value) & (dof > 0)
    lines = []
    if tested.any():
        together, freedom = float(value[tested].sum()), int(dof[tested].sum())
        chance = float(chi2.sf(together, freedom))
        lines.append(
            ("Repeats scatter as the counts say", "passed" if chance > DOUBT else "failed",
             f"χ² {together:.1f} for {freedom} degrees of freedom over {counted(int(tested.sum()), 'measurement')}")
        )  # fmt: skip
    else:
        lines.append(("Repeats scatter as the counts say", "not possible", "no measurement has repeats"))
    nulls = int(np.isfinite(np.asarray(table["null_q"], dtype=float)[rows]).sum()) if rows else 0
    failed = failing(Flag.NULL_FAILED)
    lines.append(
        ("Nulls are zero", "failed" if failed else "passed" if nulls else "not possible",
         f"{failed} of {counted(nulls, 'null')} failed" if nulls
         else "no measurement turns the plate by more than half a turn, which a null needs")
    )  # fmt: skip
    for flag, question in (
        (Flag.PLATE_SUSPECT, "The wave plate was where the headers say"),
        (Flag.CYCLE_VARIABLE, "q and u stay the same from first to last cycle"),
        (Flag.NOISE_DOUBTFUL, "The noise of the detector is known"),
        (Flag.NEIGHBOUR, "No other star's light reaches an aperture"),
        (Flag.NO_PLATEAU, "q and u do not depend on the aperture"),
        (Flag.POSITION_GUESSED, "Targets were found where they should be"),
    ):
        bad = failing(flag)
        found = (
            f"{bad} of {counted(total, 'measurement')} flagged"
            if bad
            else f"none of {counted(total, 'measurement')} flagged"
        )
        lines.append((question, "failed" if bad else "passed", found))
    return lines


def check_rows(stored: Stored, rows: list[int]) -> list[dict[str, Any]]:
    """Chi square and nulls of each target."""
    sheet = stored.results
    return [
        {
            "target": sheet.text(row, "target"),
            "filter": sheet.text(row, "filter"),
            "visit": int(sheet.table["visit"][row]),
            "chi2": sheet.plain(row, "chi2", 1),
            "dof": sheet.plain(row, "dof", 0),
            "null_q": sheet.percent(row, "null_q", sheet.number(row, "q_err"), sign=True),
            "null_u": sheet.percent(row, "null_u", sheet.number(row, "u_err"), sign=True),
        }
        for row in rows
    ]


def budget_rows(stored: Stored, rows: list[int]) -> list[dict[str, Any]]:
    """Parts of the errors of q and u of each target."""
    sheet = stored.results
    listed = []
    for row in rows:
        scale = sheet.number(row, "photon_err")
        scale = scale if np.isfinite(scale) else sheet.number(row, "q_err")
        cells = {
            name: sheet.percent(row, name, scale)
            for name in ("photon_err", "q_count_err", "q_scatter_err", "q_err", "u_err", "q_cal_err", "u_cal_err")
        }
        listed.append(
            {"target": sheet.text(row, "target"), "filter": sheet.text(row, "filter"),
             "visit": int(sheet.table["visit"][row]), **cells}
        )  # fmt: skip
    return listed


def aside_groups(stored: Stored) -> list[dict[str, Any]]:
    """Files that took no part, by reason, most files first."""
    table = stored.frames.table
    groups: dict[tuple[str, str], list[str]] = {}
    for row in np.flatnonzero(np.asarray(table["status"]) != "used"):
        groups.setdefault((str(table["status"][row]), str(table["reason"][row])), []).append(str(table["file"][row]))
    return [
        {"status": status, "reason": reason or "no reason stored", "number": len(files),
         "files": files[:MOST_FILES], "more": max(len(files) - MOST_FILES, 0)}
        for (status, reason), files in sorted(groups.items(), key=lambda item: -len(item[1]))
    ]  # fmt: skip


def provenance(stored: Stored) -> dict[str, Any]:
    """Versions, settings and a summary of the inputs."""
    run = stored.run
    kinds = Counter(str(kind) or "unknown" for kind in stored.frames.table["kind"])
    settings = _flat(run.get("configuration", {}))
    return {
        "versions": sorted((str(name), str(value)) for name, value in run.get("versions", {}).items()),
        "settings": [(key, value) for key, value in settings if not key.startswith("instrument.")],
        "instrument": [
            (key.removeprefix("instrument."), value) for key, value in settings if key.startswith("instrument.")
        ],
        "kinds": sorted(kinds.items()),
        "seconds": run.get("seconds"),
        "checksums": len(run.get("inputs", {})),
        "calibration": stored.results.table.meta.get("calibration", ""),
        "angles": stored.results.table.meta.get("angles", ""),
    }


def _flat(tree: Any, start: str = "") -> list[tuple[str, str]]:
    """A tree as dotted names and values; what is not set is left out."""
    if isinstance(tree, dict):
        pairs = [(f"{start}.{key}" if start else str(key), value) for key, value in tree.items()]
    elif isinstance(tree, list) and any(isinstance(item, dict) for item in tree):
        pairs = [(f"{start}[{number}]", value) for number, value in enumerate(tree, start=1)]
    elif isinstance(tree, list):
        return [(start, ", ".join(map(str, tree)))] if tree else []
    else:
        return [] if tree is None else [(start, str(tree).lower() if isinstance(tree, bool) else str(tree))]
    return [entry for key, value in pairs for entry in _flat(value, key)]
