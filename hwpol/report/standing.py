"""Figures of the calibration, of the checks and of the error budget."""

from __future__ import annotations

from typing import Any

import numpy as np
from markupsafe import Markup
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter
from scipy.stats import chi2

from hwpol.report import figures
from hwpol.report.drawing import Plot, covariances
from hwpol.report.stored import Stored
from hwpol.report.style import BLUE, COLOURS, FAINT, MARKERS, VERMILION, few_ticks, inline_svg, new_figure

#: Rows drawn at most in one figure of dots.
MOST_ROWS = 40


def calibration_plots(stored: Stored, name: str, number: int) -> list[list[Plot]]:
    """Figures of one filter's calibration, low ones in one column; `number` makes their names."""
    table = stored.standards.table
    here = np.asarray(table["filter"]) == name
    zero = np.flatnonzero(here & (np.asarray(table["role"]) == "zero-polarised"))
    polarised = np.flatnonzero(here & (np.asarray(table["role"]) == "polarised"))
    rows = np.flatnonzero(here)
    columns = []
    if len(zero):
        columns.append([_observed_zeros(stored, name, zero, number)])
        if np.isfinite(np.asarray(table["dq"])[zero]).any():
            columns.append([_corrected_zeros(stored, name, zero, number)])
    plots = []
    if np.isfinite(np.asarray(table["dp"], dtype=float)[polarised]).any():
        plots.append(_polarised(stored, name, polarised, number))
    left_out = _left_out(stored, name, rows, number)
    plots += [left_out] if left_out else []
    return [*columns, plots] if plots else columns


def _result_row(stored: Stored, row: int) -> int | None:
    """The row of results of a standard."""
    one, table = stored.standards.table[row], stored.results.table
    match = (
        (np.asarray(table["visit"]) == one["visit"])
        & (np.asarray(table["filter"]) == one["filter"])
        & (np.asarray(table["target"]) == one["name"])
        & (np.asarray(table["source"]) == 0)
    )
    found = np.flatnonzero(match)
    return int(found[0]) if len(found) else None


def _labels(table: Any, rows: Any) -> list[str]:
    """Names, with the visit where a name comes twice."""
    names = [str(table["name"][row]) for row in rows]
    return [
        f"{name} ({int(table['visit'][row])})" if names.count(name) > 1 else name
        for name, row in zip(names, rows, strict=True)
    ]


def _plane() -> tuple[Any, Any]:
    figure = new_figure(3.9, 3.3)
    axes = figure.subplots()
    figure.subplots_adjust(left=0.17, right=0.98, bottom=0.135, top=0.98)
    return figure, axes


def _observed_zeros(stored: Stored, name: str, rows: Any, number: int) -> Plot:
    figure, axes = _plane()
    table, results = stored.standards.table, stored.results.table
    matched = [(row, found) for row in rows if (found := _result_row(stored, row)) is not None]
    own = [found for _, found in matched]
    random = np.array([np.diag([results["q_err"][r] ** 2, results["u_err"][r] ** 2]) for r in own]).reshape(-1, 2, 2)
    figures.q_u_plane(
        axes, results["q_inst"][own], results["u_inst"][own], random,
        labels=_labels(table, [row for row, _ in matched]),
        hollow=[not table["used"][row] for row, _ in matched], label="zero stars", zero=False,
    )  # fmt: skip
    entry = (stored.calibration or {}).get("filters", {}).get(name, {})
    ip = [float(entry.get(key, np.nan)) for key in ("ip_q", "ip_u", "ip_q_err", "ip_u_err")]
    # What turns with the telescope is elsewhere for every star: no one point stands for it.
    turning = "tel_q" in entry
    if np.isfinite(ip[:2]).all() and not turning:
        matrix = np.diag(np.nan_to_num(ip[2:]) ** 2)[None]
        figures.q_u_plane(
            axes,
            ip[:1],
            ip[1:2],
            matrix,
            colour=VERMILION,
            marker="s",
            label="fitted",
            filled_ellipse=True,
            zero=False,
        )
    if not turning:
        axes.legend(loc="best")
    fitted = (
        "the telescope's polarisation turns against it from star to star"
        if turning
        else "with the instrumental polarisation fitted to them"
    )
    caption = (
        f"Unpolarised stars as observed, in the instrument's frame; {fitted}. 68 % ellipses by the random errors. "
        "Empty: not used."
    )
    return Plot(inline_svg(figure, f"c{number}-observed", f"{name}: zero-polarised stars in the q-u plane"), caption)


def _corrected_zeros(stored: Stored, name: str, rows: Any, number: int) -> Plot:
    figure, axes = _plane()
    table, results = stored.standards.table, stored.results.table
    found = [_result_row(stored, row) for row in rows]
    matrices = np.array([
        np.full((2, 2), np.nan) if own is None else covariances(results, [own])[0] for own in found
    ]).reshape(-1, 2, 2)  # fmt: skip
    figures.q_u_plane(
        axes, table["dq"][rows], table["du"][rows], matrices, labels=_labels(table, rows),
        hollow=[not table["used"][row] for row in rows],
    )  # fmt: skip
    caption = (
        "The same stars calibrated: what is left of them on the sky, with 68 % ellipses by random and calibration "
        "errors. They should hold zero two times in three."
    )
    return Plot(inline_svg(figure, f"c{number}-left", f"{name}: calibrated zero stars around zero"), caption)


def _rows_figure(number: int, width: float = 3.9, panels: int = 2) -> tuple[Any, Any]:
    figure = new_figure(width, 0.75 + 0.3 * max(number, 2))
    height = figure.get_figheight()
    axes = figure.subplots(1, panels, sharey=True, squeeze=False)[0]
    figure.subplots_adjust(left=0.26, right=0.97, bottom=0.5 / height, top=1 - 0.08 / height, wspace=0.12)
    return figure, axes


def _polarised(stored: Stored, name: str, rows: Any, number: int) -> Plot:
    table = stored.standards.table
    figure, (left, right) = _rows_figure(len(rows))
    labels, hollow = _labels(table, rows), [not table["used"][row] for row in rows]
    column = {key: np.asarray(table[key], dtype=float)[rows] for key in table.colnames if table[key].dtype.kind == "f"}
    figures.dot_rows(
        left, labels, 100 * column["dp"], 100 * np.hypot(column["p_err"], column["cat_p_err"]), hollow=hollow
    )
    figures.dot_rows(
        right, labels, column["dtheta"], np.hypot(column["theta_err"], column["cat_theta_err"]), hollow=hollow,
        colour=VERMILION, marker="s",
    )  # fmt: skip
    left.set_xlabel("p: residual (%)")
    right.set_xlabel("θ: residual (deg)")
    for one in (left, right):
        one.axvline(0, color=FAINT, linewidth=0.8, zorder=0)
        one.xaxis.set_major_locator(few_ticks(3))
    caption = (
        "Polarised standards after calibration, measured minus catalogue; bars: random error and the catalogue's. "
        "Empty: not used."
    )
    return Plot(inline_svg(figure, f"c{number}-polarised", f"{name}: residuals of polarised standards"), caption)


def _left_out(stored: Stored, name: str, rows: Any, number: int) -> Plot | None:
    table, results = stored.standards.table, stored.results.table
    matched = [(row, found) for row in rows if (found := _result_row(stored, row)) is not None]
    matched = [(row, found) for row, found in matched if np.isfinite(table["predicted_q"][row])]
    if not matched:
        return None
    own, told = [found for _, found in matched], [row for row, _ in matched]
    figure, panels = _rows_figure(len(matched))
    for axes, letter, colour, marker in ((panels[0], "q", BLUE, "o"), (panels[1], "u", VERMILION, "s")):
        gap = np.asarray(results[f"{letter}_inst"])[own] - np.asarray(table[f"predicted_{letter}"])[told]
        figures.dot_rows(
            axes, _labels(table, told), 100 * gap, 100 * np.asarray(results[f"{letter}_err"])[own], colour=colour,
            marker=marker, hollow=[not table["used"][row] for row in told],
        )  # fmt: skip
        axes.set_xlabel(f"{letter}: left out (%)")
        axes.axvline(0, color=FAINT, linewidth=0.8, zorder=0)
        axes.xaxis.set_major_locator(few_ticks(3))
    caption = (
        "Each standard left out in turn: observed minus predicted from the others (instrument frame); bars: its own "
        "random error, without the prediction's."
    )
    return Plot(inline_svg(figure, f"c{number}-without", f"{name}: standards predicted by the others"), caption)


def check_plots(stored: Stored) -> list[Plot]:
    """Chi square of the repeats and nulls of all visits."""
    table = stored.results.table
    main = np.flatnonzero(np.asarray(table["source"]) == 0)
    plots = []
    value, dof = np.asarray(table["chi2"], dtype=float)[main], np.asarray(table["dof"])[main]
    tested = np.isfinite(value) & (dof > 0)
    if tested.any():
        plots.append(_chi_squares(np.asarray(table["visit"])[main][tested], value[tested], dof[tested]))
    null = np.stack([np.asarray(table[name], dtype=float)[main] for name in ("null_q", "null_u")])
    if np.isfinite(null).all(axis=0).any():
        figure, axes = _plane()
        few = int(np.isfinite(null).all(axis=0).sum()) <= 15
        figures.q_u_plane(axes, *null, labels=[str(int(v)) for v in np.asarray(table["visit"])[main]] if few else None)
        axes.set_xlabel("null of q (%)")
        axes.set_ylabel("null of u (%)")
        caption = (
            "Half the difference of the first and second half turn of the plate, "
            f"{'by number of the visit, ' if few else ''}instrument frame: zero but for noise."
        )
        plots.append(Plot(inline_svg(figure, "nulls", "Nulls of all visits in the q-u plane"), caption))
    return plots


def _chi_squares(visits: Any, value: Any, dof: Any) -> Plot:
    figure = new_figure(3.9, 3.1)
    axes = figure.subplots()
    figure.subplots_adjust(left=0.15, right=0.98, bottom=0.145, top=0.98)
    order = np.argsort(visits, kind="stable")
    low, high = chi2.ppf(0.025, dof) / dof, chi2.ppf(0.975, dof) / dof
    axes.vlines(visits[order], low[order], high[order], color=FAINT, linewidth=5 if len(visits) < 60 else 1.5)
    axes.plot(visits[order], (value / dof)[order], linestyle="none", marker="o", color=BLUE, rasterized=len(dof) > 1000)
    axes.axhline(1, color=FAINT, linewidth=0.7, zorder=0)
    axes.set_ylim(0, None)
    axes.set_xlabel("visit")
    axes.set_ylabel("χ² of the repeats over its freedom")
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    caption = (
        "Do repeats scatter as the counts say? Grey: where 95 % of clean visits lie. Points above: the errors were "
        "raised where the excess is significant."
    )
    return Plot(inline_svg(figure, "scatter", "Chi square of the repeats of each visit"), caption)


def budget_plot(stored: Stored, rows: list[int]) -> Plot | None:
    """Photon limit, counted, adopted and calibration error of q for the given rows of results."""
    if not rows:
        return None
    shown, table = rows[:MOST_ROWS], stored.results.table
    figure = new_figure(5.2, 0.8 + 0.24 * len(shown))
    height = figure.get_figheight()
    axes = figure.subplots()
    figure.subplots_adjust(left=0.33, right=0.97, bottom=0.45 / height, top=1 - 0.3 / height)
    names = [f"{table['target'][row]}, {table['filter'][row]} ({int(table['visit'][row])})" for row in shown]
    for index, (column, label) in enumerate(
        (("photon_err", "photons"), ("q_count_err", "counts"), ("q_err", "adopted"), ("q_cal_err", "calibration"))
    ):
        figures.dot_rows(
            axes, names, 100 * np.asarray(table[column], dtype=float)[shown], colour=COLOURS[index],
            marker=MARKERS[index], label=label,
        )  # fmt: skip
    axes.set_xscale("log")
    axes.xaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.set_xlabel("error of q (%)")
    axes.grid(axis="x", color="#E4E4E4", linewidth=0.6)
    axes.legend(ncols=4, loc="lower center", bbox_to_anchor=(0.35, 1.0), columnspacing=1.0)
    note = f" The first {MOST_ROWS} of {len(rows)}." if len(rows) > MOST_ROWS else ""
    caption = (
        "What the error of q is made of: source photons alone; all counts (sky, read noise); as adopted, with the "
        f"scatter of repeats where larger; and the calibration's part, which targets of a filter share.{note}"
    )
    return Plot(inline_svg(figure, "budget", "Error budget of q for each target"), caption)


def html(plot: Plot) -> Markup:
    """The figure with its caption."""
    return Markup('<figure class="drawn">{}<figcaption>{}</figcaption></figure>').format(plot.svg, plot.caption)
