"""Plotting helpers: matplotlib axes in, the same axes out.

Each takes plain arrays (fractions, degrees, pixels, as in the tables) and draws in percent. None touches pyplot or
global settings; `hwpol.report.style.settings()` gives the look of the page.

>>> from matplotlib.figure import Figure
>>> from hwpol.report.figures import q_u_plane
>>> axes = q_u_plane(Figure().subplots(), [0.031], [-0.012])
"""

from hwpol.report.figures.maps import stamp, vector_map
from hwpol.report.figures.plane import q_u_plane
from hwpol.report.figures.series import dot_rows, modulation, radius_curve, residuals, time_series

__all__ = [
    "dot_rows",
    "modulation",
    "q_u_plane",
    "radius_curve",
    "residuals",
    "stamp",
    "time_series",
    "vector_map",
]
