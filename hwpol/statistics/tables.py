"""Interpolation of functions of (signal, shape of the error ellipse), built once and then quick.

A function of a measured vector under a general covariance has three arguments once the unit is taken out:
a signal coordinate x in [0, 1], the logarithm of the axial ratio (`stretch`) and the angle to the major axis
(`tilt`). Equal errors, by far the commonest case, get a fine line of their own; ellipses longer than
`LONGEST` are computed exactly instead, at some 0.4 ms each.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline, NdBSpline, make_interp_spline

from hwpol.statistics.moments import Array

# Beyond 3:1 a posterior flat in p can have two peaks and the ends of its shortest interval jump from one to the other.
LONGEST = float(np.log(2.5))
FEW = 1000  # so many values are computed exactly sooner than the tables for general ellipses are made
ROUND = 1e-6  # below this stretch the ellipse is a circle to better than the tables' accuracy
_STRETCH = np.linspace(0.0, LONGEST, 9)
_TILT = np.linspace(0.0, 0.5 * np.pi, 11)

Function = Callable[[Array, Array, Array], Array]


def not_tabulated(stretch: Array) -> NDArray[np.bool_]:
    """Which values are computed exactly: long ellipses, and all but circles where they are few."""
    return np.asarray(stretch > (ROUND if np.sum(stretch > ROUND) <= FEW else LONGEST))


@dataclass(frozen=True)
class Table:
    """A function of (x, stretch, tilt) tabulated, when first asked, for x in [0, 1] and stretch up to `LONGEST`.

    Parameters
    ----------
    function : callable
        Takes three flat arrays (n,), x = 0 and x = 1 included, and returns (n,) or (n, k).
    line, bulk : int
        Number of nodes in x for equal errors and for general ones.
    """

    function: Function
    line: int
    bulk: int

    @cached_property
    def _line(self) -> CubicSpline:
        x = np.linspace(0.0, 1.0, self.line)
        return CubicSpline(x, self.function(x, np.zeros_like(x), np.zeros_like(x)))

    @cached_property
    def _bulk(self) -> NdBSpline:
        grids = (np.linspace(0.0, 1.0, self.bulk), _STRETCH, _TILT)
        mesh = np.meshgrid(*grids, indexing="ij")
        values = self.function(*(part.ravel() for part in mesh))
        cube = values.reshape(mesh[0].shape + values.shape[1:])
        knots = []
        for axis, grid in enumerate(grids):
            spline = make_interp_spline(grid, cube, k=3, axis=axis)
            knots.append(spline.t)
            cube = np.moveaxis(spline.c, 0, axis)
        return NdBSpline(tuple(knots), np.ascontiguousarray(cube), 3)

    def __call__(self, x: Array, stretch: Array, tilt: Array) -> Array:
        """Interpolated values, (n,) or (n, k). Beyond `LONGEST` those of the longest ellipse tabulated."""
        circle = stretch < ROUND
        if circle.all():
            return self._line(x)
        points = np.stack([x, np.minimum(stretch, LONGEST), tilt], axis=-1)
        if not circle.any():
            return self._bulk(points)
        rest = self._bulk(points[~circle])
        out = np.empty((x.size, *rest.shape[1:]))
        out[circle], out[~circle] = self._line(x[circle]), rest
        return out


def root(function: Callable[[Array], Array], low: Array, high: Array, steps: int = 60, exact: float = 1e-11) -> Array:
    """Roots of increasing functions between ``low`` and ``high``, all at once (false position, Illinois weights).

    Where no sign change lies inside, the nearer end is returned: low where the function is positive there.
    """
    a, b = np.array(low, dtype=float), np.array(high, dtype=float)
    fa, fb = function(a), function(b)
    below, above = fa >= 0, fb <= 0
    side = np.zeros(a.shape, dtype=int)
    for step in range(steps):
        gap = fb - fa
        middle = np.where(gap > 0, b - fb * (b - a) / np.where(gap > 0, gap, 1.0), 0.5 * (a + b))
        # A bisection now and then bounds the number of steps whatever the function's shape.
        middle = np.where((middle > a) & (middle < b) & (step % 4 < 3), middle, 0.5 * (a + b))
        fm = function(middle)
        up = fm < 0
        fb = np.where(up & (side == 1), 0.5 * fb, fb)
        fa = np.where(~up & (side == -1), 0.5 * fa, fa)
        a, fa = np.where(up, middle, a), np.where(up, fm, fa)
        b, fb = np.where(up, b, middle), np.where(up, fb, fm)
        side = np.where(up, 1, -1)
        if np.all((b - a < exact * (1 + np.abs(b))) | (fm == 0) | below | above):
            break
    out = np.where(fm == 0, middle, np.where(np.abs(fa) < np.abs(fb), a, b))
    return np.where(below, np.asarray(low, dtype=float), np.where(above, np.asarray(high, dtype=float), out))
