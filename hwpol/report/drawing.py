"""The figures of the page, each with a caption and a text for those who do not see it."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any

import numpy as np
from markupsafe import Markup
from matplotlib.figure import Figure
from numpy.typing import NDArray

from hwpol.flags import Flag
from hwpol.products import VisitFile
from hwpol.report import figures
from hwpol.report.stored import Stored
from hwpol.report.style import COLOURS, MARKERS, VERMILION, few_ticks, inline_svg, new_figure
from hwpol.report.words import listed

Array = NDArray[np.float64]

#: Errors from the fit beyond which a frame is named: one in a million clean frames.
OFF = 5.0


@dataclass(frozen=True)
class Plot:
    """A drawn figure."""

    svg: Markup
    caption: str


def utc(mjd: float, form: str = "%Y-%m-%d %H:%M") -> str:
    """A modified Julian date as UTC."""
    if not np.isfinite(mjd):
        return "unknown"
    return (datetime(1858, 11, 17) + timedelta(days=float(mjd))).strftime(form)


def covariances(table: Any, rows: Any) -> Array:
    """Random and calibration covariance of (q, u) together, shape (N, 2, 2)."""
    matrix = np.empty((len(rows), 2, 2))
    for index, row in enumerate(rows):
        qq, uu, qu = (
            float(table[own][row]) ** power + np.nan_to_num(float(table[shared][row])) ** power
            for own, shared, power in (
                ("q_err", "q_cal_err", 2),
                ("u_err", "u_cal_err", 2),
                ("qu_cov", "qu_cal_cov", 1),
            )
        )
        matrix[index] = [[qq, qu], [qu, uu]]
    return matrix


def visit_plots(stored: Stored, visit: VisitFile) -> list[Plot]:
    """All figures of one visit."""
    # The names of the table: a FITS file cannot hold every letter.
    table, row = stored.results.table, stored.target_row(visit.number)
    who = f"{table['target'][row]}, {table['filter'][row]}, visit {visit.number}"
    plots = [_stamps(visit, who)]
    if np.isfinite(visit.growth).any():
        plots.append(_radius(visit, who))
    if np.isfinite(visit.modulation["value"]).any():
        plots.append(_modulation(visit, who))
    if np.isfinite(stored.results.table["q"][stored.target_row(visit.number)]):
        plots.append(_cycles(stored, visit, who))
    series = _series(visit, who)
    return [*plots, *([series] if series else [])]


def off_the_fit(visit: VisitFile) -> list[str]:
    """Frames that lie further than `OFF` of their errors from the fit."""
    with np.errstate(invalid="ignore", divide="ignore"):
        distance = np.abs(visit.modulation["value"] - visit.modulation["model"]) / visit.modulation["error"]
        return [visit.files[k] for k in np.flatnonzero((distance > OFF).any(axis=1))]


def _stamps(visit: VisitFile, who: str) -> Plot:
    number = len(visit.stamps)
    columns = min(number, 2)
    rows = -(-number // columns)
    figure = new_figure(3.9, 0.35 + 1.9 * rows)
    axes = figure.subplots(rows, columns, squeeze=False)
    figure.subplots_adjust(
        left=0.09, right=0.965, bottom=0.09 / rows + 0.02, top=1 - 0.1 / rows, wspace=0.2, hspace=0.3
    )
    for b, one in enumerate(axes.flat):
        if b >= number:
            one.set_axis_off()
            continue
        figures.stamp(one, visit.stamps[b], visit.stamp_corner[b], visit.stamp_place[b], visit.radius, visit.annulus)
        one.set_title(visit.beams[b], parse_math=False)
    caption = (
        f"First frame, in pixels of the detector. Full circle: aperture of {visit.radius:.1f} pixels; dashed: the ring "
        f"of sky, {visit.annulus[0]:.0f} to {visit.annulus[1]:.0f} pixels."
    )
    alt = f"{who}: the target with its aperture and sky ring in {number} beams"
    return Plot(inline_svg(figure, f"v{visit.number}-stamps", alt), caption)


def _pair(height: float = 3.3, ratios: tuple[float, ...] = (3, 2), head: float = 0.07) -> tuple[Figure, Any]:
    figure = new_figure(3.9, height)
    axes = figure.subplots(len(ratios), 1, sharex=True, height_ratios=ratios)
    figure.subplots_adjust(left=0.17, right=0.98, bottom=0.45 / height, top=1 - head / height, hspace=0.08)
    return figure, axes


def _aligned(axes: Any) -> None:
    for one in axes:
        one.yaxis.set_label_coords(-0.145, 0.5)


def _radius(visit: VisitFile, who: str) -> Plot:
    figure, (top, bottom) = _pair(ratios=(1, 1))
    top.plot(visit.radii, 100 * visit.growth, color=COLOURS[2], marker="^", markersize=3.4, linewidth=0.8)
    figures.series.mark_radius(top, visit.radius)
    top.set_ylabel("light inside (%)")
    curve = np.isfinite(visit.curve_q).any()
    figures.radius_curve(
        bottom, visit.radii, visit.curve_q, visit.curve_u, visit.curve_q_err, visit.curve_u_err, visit.radius
    )
    if curve:
        bottom.legend(ncols=2, loc="best")
    _aligned((top, bottom))
    caption = (
        "Light inside the aperture, and q and u against its radius (instrument frame; points of one curve share "
        f"photons). Dashed line: the radius taken, {visit.radius:.1f} pixels."
    )
    alt = f"{who}: growth of light and change of q and u with the aperture radius"
    return Plot(inline_svg(figure, f"v{visit.number}-radius", alt), caption)


def _modulation(visit: VisitFile, who: str) -> Plot:
    figure, (top, bottom) = _pair(head=0.07 if len(visit.curves) == 1 else 0.26)
    psi = visit.frames["psi"]
    value, error, model = (visit.modulation[name] for name in ("value", "error", "model"))
    many = len(visit.curves)
    for m, name in enumerate(visit.curves):
        look = {"colour": COLOURS[m % len(COLOURS)], "marker": MARKERS[m % len(MARKERS)]}
        figures.modulation(
            top, psi, value[:, m], error[:, m], curve_psi=visit.curve_psi,
            curve=visit.curve_model[:, m] if len(visit.curve_psi) else (), label=name if many > 1 else "", **look,
        )  # fmt: skip
        figures.residuals(bottom, psi, value[:, m] - model[:, m], error[:, m], **look)
    top.set_xlabel("")
    bottom.set_xlabel("wave-plate angle (deg)")
    if many > 1:
        top.legend(ncols=4, loc="lower left", bbox_to_anchor=(0.0, 1.0), borderaxespad=0.1)
    _aligned((top, bottom))
    what = (
        "Difference of the beams over their sum (their throughputs divided out)"
        if visit.curves == ("difference",)
        else "Light in each beam relative to its mean"
    )
    line = ", the fit as a line" if len(visit.curve_psi) else ""
    caption = f"{what} in every frame against the angle of the plate{line}; below, data minus fit."
    alt = f"{who}: modulation against wave-plate angle with the fit, and its residuals"
    return Plot(inline_svg(figure, f"v{visit.number}-modulation", alt), caption)


def _cycles(stored: Stored, visit: VisitFile, who: str) -> Plot:
    table = stored.cycles.table
    rows = np.flatnonzero((np.asarray(table["visit"]) == visit.number) & (np.asarray(table["source"]) == 0))
    if len(rows):
        rows = rows[np.asarray(table["target"])[rows] == table["target"][rows[0]]]
    figure = new_figure(3.9, 3.3)
    axes = figure.subplots()
    figure.subplots_adjust(left=0.17, right=0.98, bottom=0.135, top=0.98)
    final = stored.target_row(visit.number)
    results = stored.results.table
    aside = (np.asarray(table["flags"])[rows] & int(Flag.CYCLE_SET_ASIDE)) != 0
    random = np.array([
        [[table["q_err"][r] ** 2, table["qu_cov"][r]], [table["qu_cov"][r], table["u_err"][r] ** 2]] for r in rows
    ]).reshape(-1, 2, 2)  # fmt: skip
    few = len(rows) <= 12
    figures.q_u_plane(
        axes, table["q"][rows], table["u"][rows], random if len(rows) <= 40 else None, hollow=aside,
        labels=[str(int(c)) for c in table["cycle"][rows]] if few else None, label="cycles", zero=False,
    )  # fmt: skip
    matrix = np.array([[
        [results["q_err"][final] ** 2, results["qu_cov"][final]],
        [results["qu_cov"][final], results["u_err"][final] ** 2],
    ]])  # fmt: skip
    figures.q_u_plane(
        axes, results["q"][[final]], results["u"][[final]], matrix, colour=VERMILION, marker="s", label="adopted",
        filled_ellipse=True, zero=False,
    )  # fmt: skip
    axes.legend(loc="best")
    caption = (
        f"{'Numbered cycles' if few else 'Cycles'} and the adopted value ({results['frame'][final]} frame) with "
        "ellipses that hold 68 % by the random errors; empty points were set aside."
    )
    alt = f"{who}: {len(rows)} cycles and the adopted value in the q-u plane"
    return Plot(inline_svg(figure, f"v{visit.number}-cycles", alt), caption)


def _series(visit: VisitFile, who: str) -> Plot | None:
    mjd = visit.frames["mjd"]
    known = np.isfinite(mjd).any()
    minutes = (mjd - np.nanmin(mjd)) * 1440 if known else np.arange(len(mjd), dtype=float)
    scale = visit.pixel_scale if np.isfinite(visit.pixel_scale) else 1.0
    panels = [
        (visit.frames["sky"], "sky (e⁻/pixel)", "sky at the target"),
        (
            scale * visit.frames["fwhm"],
            f"seeing ({'″' if scale != 1.0 else 'pixels'})",
            "width of the stars at half maximum",
        ),
        (
            100 * visit.frames["transparency"],
            "transparency (%)",
            "light received a second against its median over the visit",
        ),
    ]
    panels = [panel for panel in panels if np.isfinite(panel[0]).any()]
    if not panels:
        return None
    figure, axes = _pair(0.75 + len(panels), (1,) * len(panels), 0.26)
    axes = np.atleast_1d(axes)
    for one, (values, label, _) in zip(axes, panels, strict=True):
        figures.time_series(one, minutes, values, names=visit.beams, label=label)
        one.yaxis.set_major_locator(few_ticks(4))
    if len(visit.beams) > 1 and panels[0][0].ndim == 2:
        axes[0].legend(ncols=4, loc="lower left", bbox_to_anchor=(0.0, 1.0), borderaxespad=0.1)
    axes[-1].set_xlabel(f"minutes from {utc(float(np.nanmin(mjd)))} UTC" if known else "frame")
    _aligned(axes)
    words = listed([text for *_, text in panels])
    caption = f"{words[0].upper()}{words[1:]}."
    alt = f"{who}: sky, seeing and transparency against time"
    return Plot(inline_svg(figure, f"v{visit.number}-series", alt), caption)
