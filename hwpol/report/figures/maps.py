"""Pictures: apertures on a source, vectors over a field."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.patches import Circle
from numpy.typing import ArrayLike, NDArray

from hwpol.report.style import BLACK, BLUE, ORANGE, RASTER_ABOVE, VERMILION, few_ticks

#: Vectors are drawn for p above this many of its errors (common practice).
SIGNIFICANT = 3.0


def stretch(picture: ArrayLike) -> NDArray[np.float64]:
    """Brightness on a scale that shows sky and stars at once: asinh above the sky in units of its scatter; 0 to 1."""
    data = np.asarray(picture, dtype=float)
    good = data[np.isfinite(data)]
    if not good.size:
        return np.zeros_like(data)
    sky = float(np.median(good))
    noise = 1.4826 * float(np.median(np.abs(good - sky))) or 1.0
    scaled = np.arcsinh((data - sky) / (3 * noise))
    low, high = np.nanpercentile(scaled, [2.0, 99.9])
    return np.clip((np.nan_to_num(scaled, nan=low) - low) / ((high - low) or 1.0), 0.0, 1.0)


def stamp(
    axes: Axes, picture: ArrayLike, corner: ArrayLike, place: ArrayLike, radius: float, annulus: ArrayLike
) -> Axes:
    """A source with its aperture (full line) and the ring its sky is taken from (dashed).

    Parameters
    ----------
    picture : array_like, shape (n, n)
    corner : array_like, shape (2,)
        Raw pixel (x, y) of the picture's first element.
    place : array_like, shape (2,)
        Raw pixel of the source.
    radius : float
        Pixels.
    annulus : array_like, shape (2,)
    """
    _image(axes, picture, np.asarray(corner, dtype=float), 1)
    x, y = np.asarray(place, dtype=float)
    if np.isfinite([x, y]).all():
        axes.add_patch(Circle((x, y), radius, fill=False, edgecolor=VERMILION, linewidth=1.3))
        for ring in np.asarray(annulus, dtype=float):
            axes.add_patch(Circle((x, y), ring, fill=False, edgecolor=BLUE, linewidth=0.9, linestyle=(0, (4, 3))))
    axes.tick_params(labelsize=7)
    axes.xaxis.set_major_locator(few_ticks(3))
    axes.yaxis.set_major_locator(few_ticks(3))
    return axes


def _image(axes: Axes, picture: ArrayLike, corner: NDArray[np.float64], step: int) -> None:
    shown = stretch(picture)
    rows, columns = shown.shape
    low = corner - step / 2
    axes.imshow(
        shown, cmap="Greys", origin="lower", vmin=0.0, vmax=1.25,
        extent=(low[0], low[0] + columns * step, low[1], low[1] + rows * step),
    )  # fmt: skip


def vector_map(
    axes: Axes,
    x: ArrayLike,
    y: ArrayLike,
    p: ArrayLike,
    p_err: ArrayLike,
    theta: ArrayLike,
    *,
    to_pixels: ArrayLike = ((0.0, -1.0), (1.0, 0.0)),
    picture: ArrayLike | None = None,
    corner: ArrayLike = (0.0, 0.0),
    step: int = 1,
) -> Axes:
    """Polarisation vectors over a picture of the field, with a scale bar and the directions of north and east.

    Parameters
    ----------
    x, y : array_like, shape (N,)
        Raw pixels.
    p, p_err : array_like, shape (N,)
        Fractions. Sources with p below three of its errors get a dot and no vector.
    theta : array_like, shape (N,)
        Degrees, north through east.
    to_pixels : array_like, shape (2, 2)
        Columns: the unit steps in pixels (x, y) towards north and towards east. Default: north up, east left.
    picture, corner, step
        As in a visit's file.
    """
    px, py = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    size = np.asarray(p, dtype=float)
    if picture is not None:
        _image(axes, picture, np.asarray(corner, dtype=float), step)
    elif np.isfinite(px).any():
        # Without a picture the sources themselves make the frame, with a margin for their vectors.
        margin = 0.08 * max(float(np.ptp(px[np.isfinite(px)])), float(np.ptp(py[np.isfinite(py)])), 1.0)
        axes.set_xlim(np.nanmin(px) - margin, np.nanmax(px) + margin)
        axes.set_ylim(np.nanmin(py) - margin, np.nanmax(py) + margin)
    axes.set_aspect("equal")
    with np.errstate(invalid="ignore"):
        strong = size >= SIGNIFICANT * np.asarray(p_err, dtype=float)
    weak = np.isfinite(px) & np.isfinite(py) & ~strong
    axes.plot(
        px[weak], py[weak], linestyle="none", marker="o", markersize=4, markerfacecolor="none",
        markeredgecolor=BLUE, markeredgewidth=0.9, rasterized=bool(weak.sum() > RASTER_ABOVE),
    )  # fmt: skip
    matrix = np.asarray(to_pixels, dtype=float)
    left, right = axes.get_xlim()
    below, above = axes.get_ylim()
    width = abs(right - left)
    bar = _round_bar(float(np.median(size[strong])) if strong.any() else 0.01)
    # The bar stands for about the median vector: a fifteenth of the picture, which parts most neighbours.
    length = 0.07 * width / bar
    angle = np.radians(np.asarray(theta, dtype=float)[strong])
    direction = matrix @ np.stack([np.cos(angle), np.sin(angle)])
    half = 0.5 * length * size[strong] * direction / np.maximum(np.hypot(*direction), 1e-12)
    start, end = np.stack([px, py])[:, strong] - half, np.stack([px, py])[:, strong] + half
    # White below colour keeps a vector visible on stars and sky alike.
    segments = np.stack([start.T, end.T], axis=1)
    for colour, line in (("white", 3.0), (VERMILION, 1.5)):
        axes.add_collection(
            LineCollection(
                list(segments), colors=colour, linewidths=line, capstyle="butt", zorder=2,
                rasterized=bool(strong.sum() > RASTER_ABOVE),
            ),
            autolim=False,
        )  # fmt: skip
    axes.set_xlim(left, right)
    axes.set_ylim(below, above)
    _scale_bar(axes, bar, length)
    _compass(axes, matrix)
    axes.set_xlabel("x (pixels)")
    axes.set_ylabel("y (pixels)")
    return axes


def _round_bar(value: float) -> float:
    """The nearest of 1, 2, 5 times a power of ten."""
    power = 10.0 ** np.floor(np.log10(max(value, 1e-6)))
    return float(power * min((1.0, 2.0, 5.0, 10.0), key=lambda n: abs(np.log(n * power / max(value, 1e-6)))))


def _scale_bar(axes: Axes, bar: float, length: float) -> None:
    """Below the axes, so that it hides no star."""
    left, right = axes.get_xlim()
    share = length * bar / abs(right - left)
    axes.plot([0.0, share], [1.035, 1.035], transform=axes.transAxes, color=VERMILION, linewidth=1.8, clip_on=False)
    axes.text(share + 0.02, 1.035, f"p = {100 * bar:g} %", transform=axes.transAxes, fontsize=8.5, va="center")


def _compass(axes: Axes, matrix: NDArray[np.float64]) -> None:
    """North and east as arrows above the right corner of the axes."""
    unit = matrix / np.maximum(np.hypot(*matrix), 1e-12)
    for column, name, colour in ((0, "N", BLACK), (1, "E", ORANGE)):
        tip = 16 * unit[:, column]
        axes.annotate(
            name, xy=(0.9, 1.06), xycoords="axes fraction", xytext=tuple(tip), textcoords="offset points",
            fontsize=8, color=BLACK, ha="center", va="center", annotation_clip=False,
            arrowprops={"arrowstyle": "<-", "color": colour, "linewidth": 1.0, "shrinkA": 2, "shrinkB": 0},
        )  # fmt: skip
