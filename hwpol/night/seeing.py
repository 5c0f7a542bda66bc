"""The seeing that all beams of a frame share: what apertures grow and shrink with."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: A source this much wider than the stars of its frames is extended: its apertures do not follow the seeing.
EXTENDED = 1.25


def frame_seeing(fwhm: Array) -> Array:
    """Width of every frame, from the widths of all its beams.

    Parameters
    ----------
    fwhm : ndarray, shape (K, B)
        Pixels; NaN where not measured.

    Returns
    -------
    ndarray, shape (K,)
        Pixels, on the scale of the visit's median width; that median where a frame has no width; NaN without any.

    Notes
    -----
    ln(fwhm) is split into a part of the beam, which stays, and a part of the frame. What is left over tells the noise
    of a frame's part; with it each part is drawn to the median as its share of the scatter demands (the empirical Bayes
    estimate for normal errors), so that the noisy widths of faint stars do not shake the apertures. With one beam
    nothing is left over, and a frame is compared with the two about it instead.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        logs = np.log(np.where(fwhm > 0, fwhm, np.nan))
    frames, beams = logs.shape
    seen = np.isfinite(logs)
    if not seen.any():
        return np.full(frames, np.nan)
    middle = float(np.median(logs[seen]))
    beam = np.array([np.median(logs[seen[:, b], b]) if seen[:, b].any() else middle for b in range(beams)])
    rest = logs - beam
    count = seen.sum(axis=1)
    part = np.where(count > 0, np.where(seen, rest, 0.0).sum(axis=1) / np.maximum(count, 1), 0.0)
    if beams > 1 and (count > 1).any():
        left = (rest - part[:, None])[seen & (count > 1)[:, None]]
        noise2 = float(np.median(left**2)) / 0.4549 * beams / (beams - 1)
    elif (count > 0).sum() >= 5:
        row = part[count > 0]
        noise2 = float(np.median((row[1:-1] - 0.5 * (row[:-2] + row[2:])) ** 2)) / 0.4549 / 1.5
    else:
        noise2 = 0.0
    noise2 = noise2 / np.maximum(count, 1)
    spread2 = float(np.mean(part[count > 0] ** 2))
    trust = np.where(count > 0, np.clip(1.0 - noise2 / max(spread2, 1e-12), 0.0, 1.0), 0.0)
    return np.asarray(np.exp(middle + trust * part))


def is_extended(own: Array, fwhm: Array) -> bool:
    """Whether a source is wider than stars, by its own widths (K, B) beside those of the frames."""
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = own / fwhm
    ratio = ratio[np.isfinite(ratio)]
    return bool(len(ratio) and np.median(ratio) > EXTENDED)
