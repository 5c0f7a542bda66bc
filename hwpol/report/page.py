"""The page: sections gathered from stored products, filled into the template, written whole or not at all."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import jinja2
import numpy as np
from markupsafe import Markup

from hwpol.errors import InputError
from hwpol.products import write_text
from hwpol.report.drawing import off_the_fit, utc
from hwpol.report.drawing import visit_plots as draw_visit
from hwpol.report.field import field_plot
from hwpol.report.rows import (
    aside_groups,
    budget_rows,
    calibration_sections,
    check_rows,
    checks,
    field_rows,
    provenance,
    standard_rows,
    target_rows,
    visit_facts,
)
from hwpol.report.standing import budget_plot, check_plots, html
from hwpol.report.stored import Stored, read_stored
from hwpol.report.style import settings
from hwpol.report.verdict import verdict
from hwpol.report.words import BROKEN, CARE, LEVELS, flag_words

#: Visits drawn in full where nothing else is asked for: what a page under 15 megabytes holds with ease.
MOST_VISITS = 40
#: Fields mapped at most.
MOST_FIELDS = 12

PAGE = "report.html"


def write_report(folder: str | Path, *, visits: int = MOST_VISITS) -> Path:
    """Draw the page of a reduced night.

    Parameters
    ----------
    folder : path
        Output folder of the night, where the page goes too.
    visits : int
        Visits drawn in full; of the rest the tables alone tell. Taken first: those whose flags say that they cannot
        be trusted, standards, then by the significance of p.

    Returns
    -------
    Path
        ``report.html`` in the folder.

    Raises
    ------
    InputError
        When the folder holds no reduced night.
    """
    if visits < 0:
        raise InputError(f"visits = {visits}: expected a number of visits to draw, 0 or more")
    stored = read_stored(folder)
    with settings():
        text = _render(stored, visits)
    path = stored.folder / PAGE
    write_text(path, text)
    return path


def _render(stored: Stored, most: int) -> str:
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("hwpol.report"), autoescape=True, trim_blocks=True, lstrip_blocks=True,
        undefined=jinja2.StrictUndefined,
    )  # fmt: skip
    numbers = stored.visit_numbers()
    chosen = important(stored, most)
    results = stored.results.table
    rows = main_rows(stored)
    used = int(np.bitwise_or.reduce(np.asarray(results["flags"]))) if len(results) else 0
    plot = budget_plot(stored, rows)
    return environment.get_template("page.html.j2").render(
        style=Markup((Path(__file__).parent / "templates" / "style.css").read_text(encoding="utf-8")),
        title=_title(stored),
        instrument=str(results.meta.get("instrument", "")),
        verdict=verdict(stored),
        level=100 * float(results.meta.get("level", 0.6827)),
        estimator=str(results.meta.get("estimator", "")).replace("-", " "),
        targets=target_rows(stored, rows),
        drawn=set(chosen),
        notes=[str(note) for note in stored.run.get("notes", [])],
        fields=_fields(stored, numbers),
        calibration=calibration_sections(stored),
        standards=standard_rows(stored),
        visits=[_visit(stored, number) for number in chosen],
        number_of_visits=len(numbers),
        checks=checks(stored, rows),
        check_rows=check_rows(stored, rows),
        check_plots=[html(plot) for plot in check_plots(stored)],
        aside=aside_groups(stored),
        files=len(stored.frames.table),
        budget=None if plot is None else html(plot),
        budget_rows=budget_rows(stored, rows),
        provenance=provenance(stored),
        glossary=flag_words(used),
        levels=LEVELS,
    )


def main_rows(stored: Stored) -> list[int]:
    """Rows of results that are targets: science first, then standards, each in the order of the night."""
    table = stored.results.table
    rows = [int(row) for row in np.flatnonzero(np.asarray(table["source"]) == 0)]
    return sorted(rows, key=lambda row: str(table["role"][row]) != "science")


def important(stored: Stored, most: int) -> list[int]:
    """Numbers of the visits to draw in full, in the order of the night."""
    numbers = stored.visit_numbers()
    if len(numbers) <= most:
        return numbers
    table = stored.results.table

    def rank(number: int) -> tuple[int, float]:
        row = stored.target_row(number)
        flags = int(table["flags"][row])
        with np.errstate(invalid="ignore", divide="ignore"):
            strength = float(np.nan_to_num(table["p_debiased"][row] / table["p_err"][row]))
        level = 0 if flags & int(BROKEN) else 1 if str(table["role"][row]) != "science" else 2
        return level, -strength - (1e-9 if flags & int(CARE) else 0.0)

    # Neither group may crowd out the science: each gets a third at most.
    ranked = sorted(numbers, key=rank)
    levels = {number: rank(number)[0] for number in ranked}
    share = most // 3
    taken = [n for level in (0, 1) for n in [m for m in ranked if levels[m] == level][:share]]
    taken += [n for n in ranked if levels[n] == 2][: most - len(taken)]
    taken += [n for n in ranked if n not in taken][: most - len(taken)]
    return sorted(taken)


def _title(stored: Stored) -> str:
    mjd = np.asarray(stored.results.table["mjd"], dtype=float) if len(stored.results.table) else np.empty(0)
    mjd = mjd[np.isfinite(mjd)]
    if not mjd.size:
        return "Reduced night"
    evenings = sorted({utc(float(np.floor(day - 0.5)), "%Y-%m-%d") for day in mjd})
    return f"Night of {evenings[0]}" if len(evenings) == 1 else f"Nights of {evenings[0]} to {evenings[-1]}"


def _visit(stored: Stored, number: int) -> dict[str, Any]:
    visit = stored.visit(number)
    facts = visit_facts(stored, number)
    facts["off"] = [] if visit is None else off_the_fit(visit)
    facts["plots"] = [] if visit is None else [html(plot) for plot in draw_visit(stored, visit)]
    return facts


def _fields(stored: Stored, numbers: list[int]) -> list[dict[str, Any]]:
    table = stored.results.table
    visit, source = np.asarray(table["visit"]), np.asarray(table["source"])
    many = [number for number in numbers if np.sum((visit == number) & (source > 0)) > 0]
    many.sort(key=lambda number: str(table["role"][stored.target_row(number)]) != "science")
    fields = []
    for number in many[:MOST_FIELDS]:
        plot = field_plot(stored, stored.visit(number), number)
        row = stored.target_row(number)
        fields.append(
            {
                "heading": f"{table['target'][row]}, {table['filter'][row]}, visit {number}",
                "plot": None if plot is None else html(plot),
                "rows": field_rows(stored, number),
            }
        )
    return fields
