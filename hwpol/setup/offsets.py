"""Where the second beam lies, measured on science frames by the pairs their stars make."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.frames.opening import read_box
from hwpol.instrument.description import Section
from hwpol.pixels import Box, Pixels
from hwpol.registration.detection import Stars, detect
from hwpol.registration.matching import vote
from hwpol.setup.findings import GUESSED, OPEN, Finding
from hwpol.setup.survey import Survey

Floats = NDArray[np.float64]

_MOST_FRAMES = 4
_MOST_STARS = 80
_LEAST_SHARE = 0.3  # of the pairs that there are where every star is seen twice
_NEAREST = 6.0  # pixels: closer companions are neighbours, not beams
_GAIN, _READ_NOISE = 1.0, 10.0  # only the thresholds of the detection depend on them
_APART = 1e7  # pixels between the star lists of two frames, so that no pair spans both


def measure_offset(
    survey: Survey, frames: list[int], extensions: tuple[int | str, int | str], trim: Section | None
) -> list[Finding]:
    """Findings for the place of the second beam.

    Parameters
    ----------
    survey : Survey
    frames : list of int
        Science frames, each of another field as far as there are; up to four are read.
    extensions : tuple
        HDU of each beam; the same twice where they share an image.
    trim : Section, optional
        Part of the array that sees light.
    """
    shared = extensions[0] == extensions[1]
    lists_of: tuple[list[Floats], ...] = ([], [], [], [])
    first, second, flux_a, flux_b = lists_of
    read = 0
    reach = 0.0
    for k in frames[:_MOST_FRAMES]:
        try:
            lists = [_stars(survey, k, ext, trim) for ext in dict.fromkeys(extensions)]
        except InputError:
            continue
        read += 1
        for box in survey.images[k][:1]:
            reach = max(reach, math.hypot(*box.sides[:2]))
        for stars, xy, flux in ((lists[0], first, flux_a), (lists[-1], second, flux_b)):
            xy.append(np.column_stack([stars.x + read * _APART, stars.y]))
            flux.append(np.maximum(stars.flux, 1e-3))
    pairs = min(sum(len(xy) for xy in first), sum(len(xy) for xy in second))
    key = "beam[2].offset"
    if not read or pairs < (2 if shared else 1):
        why = f"{read} science frames were read but hold too few stars; give the pixels [x, y]"
        return [Finding(key, None, OPEN, why)]
    a, b = np.concatenate(first), np.concatenate(second)
    fa, fb = np.concatenate(flux_a), np.concatenate(flux_b)
    # The beams share a star's light about equally, while two stars are seldom alike; bright ones are surer.
    alike = np.exp(-0.5 * (np.log(fa[:, None] / fb[None, :]) / 0.25) ** 2)
    weight = alike * np.sqrt(np.minimum(fa[:, None] / fa.max(), fb[None, :] / fb.max()))
    offset, votes, expected = vote(
        a, b, radius=reach, tolerance=2.5, weight=weight, exclude=_NEAREST if shared else 0.0
    )
    possible = min(len(a), len(b)) / (2 if shared else 1)
    near = np.hypot(*(b[None] - a[:, None] - offset).transpose(2, 0, 1)) <= 2.5
    count = int((near & (alike > 0.1)).sum())
    if votes <= 0 or count == 0:
        return [Finding(key, None, OPEN, "no two images of like brightness were found; is there a second beam?")]
    # Either image may be called the first one: the sign that grows along the axis of the split.
    if shared and offset[int(np.argmax(np.abs(offset)))] < 0:
        offset = -offset
    place = [round(float(v), 1) for v in offset]
    if count < _LEAST_SHARE * possible:
        seen = f"of {possible * (2 if shared else 1):.0f} stars only {count} have a like one at {place}"
        why = f"{seen}, as by chance; is there a second beam?"
        return [Finding(key, None, OPEN, why)]
    sure = count >= 5 and votes > 4 * expected
    why = f"measured on {read} science frames from {count} pairs of stars of like brightness"
    why += ", far more than chance gives" if sure else "; that may be chance, look at a frame"
    return [Finding(key, place, GUESSED, why)]


def _stars(survey: Survey, k: int, extension: int | str, trim: Section | None) -> Stars:
    """Stars of one raw image; sky and noise from the image itself."""
    box = None if trim is None else Box(trim.x0, trim.y0, trim.x1, trim.y1)
    raw = read_box(survey.files[k], extension, box)
    data = raw.data.astype(np.float32)
    level = float(np.nanpercentile(data, 1.0))
    variance = np.maximum(data - level, 0.0) / _GAIN + _READ_NOISE**2
    mask = np.where(np.isfinite(data), 0, 1).astype(np.uint8)
    pixels = Pixels(np.nan_to_num(data - level), np.nan_to_num(variance, nan=1.0).astype(np.float32), mask,
                    raw.box.x0, raw.box.y0)  # fmt: skip
    found = detect(pixels, threshold=8.0)
    return found.select(np.arange(min(len(found), _MOST_STARS)))
