"""Mueller matrices of the parts of the optical train, written out in full.

Stokes vectors are columns (I, Q, U, V); angles in degrees, growing the way the
frame's own angles grow. Every function broadcasts its arguments and returns an
array of shape (..., 4, 4), so a whole night is one call.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Matrix = NDArray[np.float64]


def _matrix(rows: list[list[ArrayLike]]) -> Matrix:
    """Stack broadcastable entries to (..., 4, 4)."""
    entries = np.broadcast_arrays(*(np.asarray(entry, dtype=float) for row in rows for entry in row))
    stacked: Matrix = np.stack(entries, axis=-1)
    return stacked.reshape(*stacked.shape[:-1], 4, 4)


def _double(angle: ArrayLike) -> tuple[Matrix, Matrix]:
    """Cosine and sine of twice an angle in degrees."""
    twice = np.deg2rad(2.0 * np.asarray(angle, dtype=float))
    return np.cos(twice), np.sin(twice)


def turned(angle: ArrayLike) -> Matrix:
    """Light whose polarisation is turned by +`angle` (deg): q + i u becomes (q + i u) exp(2 i angle).

    Reading the same light in axes turned by +chi is ``turned(-chi)``.
    """
    c, s = _double(angle)
    return _matrix([[1, 0, 0, 0], [0, c, -s, 0], [0, s, c, 0], [0, 0, 0, 1]])


def retarder(retardance: ArrayLike, angle: ArrayLike) -> Matrix:
    """Linear retarder, fast axis at `angle` (deg), `retardance` in degrees.

    Source: Hecht, Optics, problem 8.82 (matrix read there).
    """
    c, s = _double(angle)
    delta = np.deg2rad(np.asarray(retardance, dtype=float))
    cd, sd = np.cos(delta), np.sin(delta)
    return _matrix(
        [
            [1, 0, 0, 0],
            [0, c * c + s * s * cd, c * s * (1 - cd), -s * sd],
            [0, c * s * (1 - cd), s * s + c * c * cd, c * sd],
            [0, s * sd, -c * sd, cd],
        ]
    )


def analyser(angle: ArrayLike) -> Matrix:
    """Ideal linear polariser passing the electric vector at `angle` (deg).

    Source: Handbook of Biomedical Optics, ch. 30 (matrix read there).
    """
    c, s = _double(angle)
    return 0.5 * _matrix([[1, c, s, 0], [c, c * c, c * s, 0], [s, c * s, s * s, 0], [0, 0, 0, 0]])


def diattenuator(diattenuation: ArrayLike, angle: ArrayLike) -> Matrix:
    """Linear diattenuator, mean transmission 1, better transmission at `angle` (deg).

    Diattenuation d in [0, 1]: transmissions 1 + d along and 1 - d across the
    axis; common practice, exact for every d.
    """
    c, s = _double(angle)
    d = np.asarray(diattenuation, dtype=float)
    root = np.sqrt(1.0 - d * d)
    return _matrix(
        [
            [1, d * c, d * s, 0],
            [d * c, c * c + s * s * root, c * s * (1 - root), 0],
            [d * s, c * s * (1 - root), s * s + c * c * root, 0],
            [0, 0, 0, root],
        ]
    )


def weak_diattenuator(q: ArrayLike, u: ArrayLike) -> Matrix:
    """Diattenuator to first order in its strength: unpolarised light leaves with (q, u).

    Departs from the exact matrix of `diattenuator` by less than half the
    square of the diattenuation; it is what makes the measurement model
    z' = (d + z) / (1 + Re[conj(d) z]) hold without a remainder.
    """
    return _matrix([[1, q, u, 0], [q, 1, 0, 0], [u, 0, 1, 0], [0, 0, 0, 1]])


def depolariser(efficiency: ArrayLike) -> Matrix:
    """Loss of linear polarisation: Q and U times `efficiency`, I and V as they are."""
    return _matrix([[1, 0, 0, 0], [0, efficiency, 0, 0], [0, 0, efficiency, 0], [0, 0, 0, 1]])


def mirror() -> Matrix:
    """Odd number of reflections: handedness changes, u and v change sign."""
    return np.diag([1.0, 1.0, -1.0, -1.0])
