"""Maps of the stars of a field."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.products import VisitFile
from hwpol.report import figures
from hwpol.report.drawing import Plot
from hwpol.report.stored import Stored
from hwpol.report.style import inline_svg, new_figure

Array = NDArray[np.float64]

#: Sources needed to tell how the sky lies on the detector.
ENOUGH = 4
#: Width of a map, inches: one that can still be read on a phone.
WIDTH = 5.4
#: Largest misfit (arcsec) of a linear map between sky and pixels that still counts as one.
FIT = 2.0


def sky_on_pixels(x: Array, y: Array, ra: Array, dec: Array) -> Array | None:
    """Steps in pixels (x, y) for one arcsec north (first column) and east (second); None where not known.

    From sources with both pixels and coordinates (deg), a linear map on the tangent plane (small field).
    """
    good = np.isfinite(np.stack([x, y, ra, dec])).all(axis=0)
    if good.sum() < ENOUGH:
        return None
    east = ((ra - np.median(ra[good]) + 180) % 360 - 180) * np.cos(np.radians(np.median(dec[good]))) * 3600
    north = (dec - np.median(dec[good])) * 3600
    design = np.stack([np.ones(good.sum()), x[good], y[good]], axis=-1)
    sky = np.stack([north[good], east[good]], axis=-1)
    solution, *_ = np.linalg.lstsq(design, sky, rcond=None)
    if np.median(np.hypot(*(sky - design @ solution).T)) > FIT or abs(np.linalg.det(solution[1:])) < 1e-6:
        return None
    return np.asarray(np.linalg.inv(solution[1:].T))


def field_plot(stored: Stored, visit: VisitFile | None, number: int) -> Plot | None:
    """Vector map of a visit's sources over the picture of its field; None for a single source."""
    table = stored.results.table
    rows = np.flatnonzero(np.asarray(table["visit"]) == number)
    if len(rows) < 2:
        return None
    column = {
        name: np.asarray(table[name], dtype=float)[rows]
        for name in ("x", "y", "ra", "dec", "p_debiased", "p_err", "theta")
    }
    matrix = sky_on_pixels(column["x"], column["y"], column["ra"], column["dec"])
    on_sky = str(table["frame"][rows[0]]) == "sky"
    figure = new_figure(WIDTH, 0.85 * WIDTH)
    axes = figure.subplots()
    options: dict[str, Any] = {} if matrix is None else {"to_pixels": matrix}
    if visit is not None and visit.picture is not None:
        ny, nx = visit.picture.shape
        figure.set_size_inches(WIDTH, 1.05 + 0.87 * WIDTH * min(max(ny / nx, 0.3), 1.3))
        options |= {"picture": visit.picture, "corner": visit.picture_corner, "step": visit.picture_step}
    else:
        axes.set_xlim(np.nanmin(column["x"]) - 20, np.nanmax(column["x"]) + 20)
        axes.set_ylim(np.nanmin(column["y"]) - 20, np.nanmax(column["y"]) + 20)
    height = figure.get_figheight()
    figure.subplots_adjust(left=0.11, right=0.98, bottom=0.5 / height, top=1 - 0.55 / height)
    figures.vector_map(
        axes, column["x"], column["y"], column["p_debiased"], column["p_err"], column["theta"],
        **options,
    )  # fmt: skip
    target, band = str(table["target"][rows[0]]), str(table["filter"][rows[0]])
    caption = (
        f"{target}, {band}, visit {number}: de-biased p of {len(rows)} sources, a vector where it is above three of "
        "its errors, a ring where it is not."
    )
    if matrix is None:
        caption += (
            " The frames tell no world coordinates: vectors are drawn with north up and east to the left, which need "
            "not be how the stars lie."
        )
    if not on_sky:
        caption += " Not calibrated: angles are those of the instrument."
    alt = f"{target}, {band}: polarisation vectors of {len(rows)} sources over the field"
    return Plot(inline_svg(figure, f"f{number}", alt), caption)
