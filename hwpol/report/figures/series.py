"""Curves: against radius, plate angle and time; and rows of dots."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import ArrayLike

from hwpol.report.style import BLUE, COLOURS, FAINT, GREY, MARKERS, RASTER_ABOVE, VERMILION


def radius_curve(
    axes: Axes, radii: ArrayLike, q: ArrayLike, u: ArrayLike, q_err: ArrayLike, u_err: ArrayLike, chosen: float
) -> Axes:
    """Change of q and u with the aperture radius, percent, from their values at the chosen one.

    Parameters
    ----------
    radii : array_like, shape (R,)
        Pixels.
    q, u, q_err, u_err : array_like, shape (R,)
        Fractions.
    chosen : float
        Pixels; marked by a line.
    """
    x = np.asarray(radii, dtype=float)
    here = int(np.argmin(np.abs(x - chosen)))
    step = 0.12 * float(np.min(np.diff(x))) if len(x) > 1 else 0.0
    for values, errors, name, colour, marker, shift in (
        (q, q_err, "q", BLUE, "o", -step),
        (u, u_err, "u", VERMILION, "s", step),
    ):
        value = np.asarray(values, dtype=float)
        axes.errorbar(
            x + shift, 100 * (value - value[here]), 100 * np.asarray(errors, dtype=float), color=colour, marker=marker,
            markersize=3.2, linewidth=0.8, elinewidth=0.6, label=name,
        )  # fmt: skip
    axes.axhline(0, color=FAINT, linewidth=0.7, zorder=0)
    mark_radius(axes, chosen)
    axes.set_xlabel("aperture radius (pixels)")
    axes.set_ylabel("change of q, u (%)")
    return axes


def mark_radius(axes: Axes, chosen: float) -> Axes:
    """A line at the chosen radius."""
    if np.isfinite(chosen):
        axes.axvline(chosen, color=GREY, linewidth=0.9, linestyle=(0, (4, 2)), zorder=0)
    return axes


def modulation(
    axes: Axes,
    psi: ArrayLike,
    value: ArrayLike,
    error: ArrayLike,
    *,
    curve_psi: ArrayLike = (),
    curve: ArrayLike = (),
    colour: str = BLUE,
    marker: str = "o",
    label: str = "",
) -> Axes:
    """Modulation against the angle of the wave plate, percent, with the fit as a line.

    Parameters
    ----------
    psi : array_like, shape (K,)
        Degrees.
    value, error : array_like, shape (K,)
        Fractions: normalised difference of two beams, or a beam relative to its mean.
    curve_psi, curve : array_like, shape (P,)
        The fit.
    """
    _points(axes, psi, value, error, colour, marker, label)
    if len(np.atleast_1d(curve_psi)):
        axes.plot(curve_psi, 100 * np.asarray(curve, dtype=float), color=colour, linewidth=0.9, alpha=0.8, zorder=1)
    axes.axhline(0, color=FAINT, linewidth=0.7, zorder=0)
    axes.set_xlabel("wave-plate angle (deg)")
    axes.set_ylabel("modulation (%)")
    return axes


def residuals(
    axes: Axes,
    x: ArrayLike,
    value: ArrayLike,
    error: ArrayLike,
    *,
    colour: str = BLUE,
    marker: str = "o",
    label: str = "",
) -> Axes:
    """Residuals with error bars, percent (fractions in)."""
    _points(axes, x, value, error, colour, marker, label)
    axes.axhline(0, color=GREY, linewidth=0.7, zorder=0)
    axes.set_ylabel("residual (%)")
    return axes


def _points(axes: Axes, x: ArrayLike, value: ArrayLike, error: ArrayLike, colour: str, marker: str, label: str) -> None:
    drawn = axes.errorbar(
        np.asarray(x, dtype=float), 100 * np.asarray(value, dtype=float), 100 * np.asarray(error, dtype=float),
        linestyle="none", color=colour, marker=marker, markersize=3.4, elinewidth=0.7, label=label,
    )  # fmt: skip
    if np.size(value) > RASTER_ABOVE:
        for artist in drawn.get_children():
            artist.set_rasterized(True)


def time_series(
    axes: Axes, minutes: ArrayLike, values: ArrayLike, *, names: Sequence[str] = (), label: str = "", zero: bool = False
) -> Axes:
    """One quantity against time, a series for each column.

    Parameters
    ----------
    minutes : array_like, shape (K,)
    values : array_like, shape (K,) or (K, B)
    names : sequence of str
        Of the columns, for a legend.
    label : str
        Of the axis, with its unit.
    zero : bool
        Let the axis begin at zero.
    """
    x, y = np.asarray(minutes, dtype=float), np.asarray(values, dtype=float)
    y = y[:, None] if y.ndim == 1 else y
    for b in range(y.shape[1]):
        axes.plot(
            x, y[:, b], color=COLOURS[b % len(COLOURS)], marker=MARKERS[b % len(MARKERS)], markersize=2.8,
            linewidth=0.7, label=names[b] if b < len(names) else "", rasterized=y.size > RASTER_ABOVE,
        )  # fmt: skip
    axes.set_ylabel(label)
    if zero and np.isfinite(y).any():
        axes.set_ylim(0, 1.12 * float(np.nanmax(y)) or 1.0)
    return axes


def dot_rows(
    axes: Axes,
    names: Sequence[str],
    values: ArrayLike,
    errors: ArrayLike | None = None,
    *,
    hollow: ArrayLike | None = None,
    colour: str = BLUE,
    marker: str = "o",
    label: str = "",
    shift: float = 0.0,
) -> Axes:
    """A dot with its error for each name, the first on top.

    Parameters
    ----------
    names : sequence of str, length N
    values, errors : array_like, shape (N,)
    hollow : array_like of bool, shape (N,), optional
    shift : float
        Rows to move the dots down by, where several series share the rows.
    """
    x = np.asarray(values, dtype=float)
    rows = np.arange(len(x)) + shift
    empty = np.zeros(len(x), dtype=bool) if hollow is None else np.asarray(hollow, dtype=bool)
    spread = np.full(len(x), np.nan) if errors is None else np.asarray(errors, dtype=float)
    for part, face in ((~empty, colour), (empty, "white")):
        if np.isfinite(x[part]).any():
            axes.errorbar(
                x[part], rows[part], xerr=spread[part], linestyle="none", color=colour, marker=marker,
                markersize=4.2, markerfacecolor=face, elinewidth=0.9, label=label if face == colour else "",
            )  # fmt: skip
    axes.set_yticks(np.arange(len(x)), list(names), parse_math=False)
    axes.set_ylim(len(x) - 0.4, -0.6)
    axes.tick_params(axis="y", length=0)
    for side in ("top", "right", "left"):
        axes.spines[side].set_visible(False)
    return axes
