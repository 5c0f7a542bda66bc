"""The q-u plane."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Ellipse
from numpy.typing import ArrayLike, NDArray

from hwpol.report.style import BLUE, FAINT, RASTER_ABOVE

#: Squared radius, in standard deviations, of the ellipse that holds 68.27 percent of a bivariate normal: -2 ln(1 - P).
INSIDE = -2 * np.log(1 - 0.6827)


def q_u_plane(
    axes: Axes,
    q: ArrayLike,
    u: ArrayLike,
    covariance: ArrayLike | None = None,
    *,
    labels: Sequence[str] | None = None,
    hollow: ArrayLike | None = None,
    colour: str = BLUE,
    marker: str = "o",
    label: str = "",
    filled_ellipse: bool = False,
    zero: bool = True,
) -> Axes:
    """Points in the q-u plane, percent, with the ellipses that hold 68.27 percent.

    Parameters
    ----------
    axes : Axes
    q, u : array_like, shape (N,)
        Fractions; NaN is left out.
    covariance : array_like, shape (N, 2, 2), optional
        Of (q, u).
    labels : sequence of str, optional
        Written beside the points.
    hollow : array_like of bool, shape (N,), optional
        Points drawn empty (set aside).
    label : str
        For a legend.
    zero : bool
        Draw lines at q = 0 and u = 0, which brings them into sight.

    Returns
    -------
    Axes
        The same, with equal scales.
    """
    x, y = 100 * np.atleast_1d(np.asarray(q, dtype=float)), 100 * np.atleast_1d(np.asarray(u, dtype=float))
    empty = np.zeros(len(x), dtype=bool) if hollow is None else np.asarray(hollow, dtype=bool)
    seen = np.isfinite(x) & np.isfinite(y)
    for part, face in ((seen & ~empty, colour), (seen & empty, "white")):
        if part.any():
            axes.plot(
                x[part], y[part], linestyle="none", marker=marker, markerfacecolor=face, markeredgecolor=colour,
                zorder=3, label=label if face == colour else "", rasterized=bool(part.sum() > RASTER_ABOVE),
            )  # fmt: skip
    if covariance is not None:
        for centre_x, centre_y, matrix in zip(x, y, np.asarray(covariance, dtype=float), strict=True):
            if np.isfinite([centre_x, centre_y]).all() and np.isfinite(matrix).all():
                axes.add_patch(_ellipse(centre_x, centre_y, matrix, colour, filled_ellipse))
    middle = (np.nanmin(x[seen]) + np.nanmax(x[seen])) / 2 if seen.any() else 0.0
    for text, a, b in zip(labels or (), x, y, strict=False):
        if np.isfinite([a, b]).all():
            # Towards the middle, so that none runs out of the axes.
            side, way = (-5, "right") if a > middle else (5, "left")
            axes.annotate(
                text, (a, b), xytext=(side, 4), textcoords="offset points", ha=way, fontsize=7.5, parse_math=False
            )
    if zero:
        axes.axhline(0, color=FAINT, linewidth=0.7, zorder=0)
        axes.axvline(0, color=FAINT, linewidth=0.7, zorder=0)
    axes.set_xlabel("q (%)")
    axes.set_ylabel("u (%)")
    axes.set_aspect("equal", adjustable="datalim")
    return axes


def _ellipse(x: float, y: float, matrix: NDArray[np.float64], colour: str, filled: bool) -> Ellipse:
    values, vectors = np.linalg.eigh(matrix)
    width, height = 2 * 100 * np.sqrt(np.maximum(values, 0.0) * INSIDE)
    angle = np.degrees(np.arctan2(vectors[1, 0], vectors[0, 0]))
    return Ellipse(
        (x, y), width, height, angle=angle, facecolor=colour if filled else "none", edgecolor=colour,
        alpha=0.2 if filled else 0.8, linewidth=0.8, zorder=1,
    )  # fmt: skip
