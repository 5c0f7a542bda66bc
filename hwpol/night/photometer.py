"""Per-target aperture photometry from scripts: FrameSet to Fluxes in one call."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from hwpol.errors import InputError
from hwpol.fluxes import Fluxes
from hwpol.frames import Calibrator, FrameSet
from hwpol.frames.world import read_world
from hwpol.night.config_objects import Extent, PhotometryConfig, TargetConfig
from hwpol.night.visit import VisitTask, reduce_visit


def photometer(
    frames: FrameSet,
    positions: Any,
    radius: Any = "best",
    annulus: Sequence[Any] = ("4 fwhm", "6 fwhm"),
    *,
    calibrations: FrameSet | None = None,
    flat: str = "pooled",
    registration: str = "stars",
    cosmic_rays: bool = True,
    moving: bool = False,
) -> Fluxes:
    """Measure sources in every frame and beam of one visit.

    Parameters
    ----------
    frames : FrameSet
        Science frames of one target and filter; bias, dark and flat frames among them are used.
    positions : sequence of (x, y), or SkyCoord
        Pixels (0-based, first beam, first frame), good to about 10 pixels; a SkyCoord needs frames with world
        coordinates.
    radius : float, Quantity, str
        Pixels, "best", or a multiple such as "2.0 fwhm".
    annulus : two of the same kind
        Inner and outer radius of the sky.
    calibrations : FrameSet, optional
        Bias, dark and flat frames, where `frames` does not hold them.

    Returns
    -------
    Fluxes
        Electrons, shape (source, frame, beam), NaN and flags where a frame could not be used.

    Raises
    ------
    InputError
        No science frame, several visits at once, or positions that cannot be understood.
    """
    science = frames.science()
    visits = science.visits()
    if not visits:
        raise InputError("photometer: no usable science frame; see the status and reason columns of frames.table")
    if len(visits) > 1:
        names = "; ".join(f"{v.table['object'][0]} in {v.table['filter'][0]}" for v in visits[:5])
        raise InputError(
            f"photometer: the frames hold {len(visits)} visits ({names}); give one at a time: "
            "for visit in frames.visits(): ..."
        )
    source = calibrations if calibrations is not None else frames
    from hwpol.frames import merged

    calibrator = Calibrator(merged(source.calibrations(), visits[0]), flat=flat)
    pixels = _pixels(positions, visits[0])
    name = str(visits[0].table["object"][0]) or "target"
    task = VisitTask(
        number=1,
        frames=visits[0],
        calibrator=calibrator,
        targets=tuple(TargetConfig(name=name, xy=xy, moving=moving) for xy in pixels),
        photometry=PhotometryConfig(
            extent(radius), (extent(annulus[0], "annulus"), extent(annulus[1], "annulus")), "target"
        ),
        registration=registration,
        hits=cosmic_rays,
    )
    result = reduce_visit(task)
    # What is doubtful about a source as a whole (not found, neighbours, no plateau) stands in all its frames.
    return replace(result.fluxes, flags=result.fluxes.flags | result.flags[:, None, None])


def extent(value: Any, name: str = "radius") -> Extent:
    """An extent from pixels (number or Quantity), text such as "2.0 fwhm", or, for the radius, "best"."""
    if hasattr(value, "to_value"):
        value = float(value.to_value("pix"))
    if isinstance(value, Extent):
        return value
    text = str(value).strip().lower()
    best = name == "radius"
    if best and text == "best":
        return Extent(0.0, "best")
    number, unit = (text[:-4], "fwhm") if text.endswith("fwhm") else (text, "pixel")
    try:
        size = float(number)
    except ValueError:
        size = float("nan")
    if not (np.isfinite(size) and size > 0):
        allowed = 'pixels > 0, "best", or' if best else "pixels > 0, or"
        raise InputError(f'{name} = {value!r}: expected {allowed} a multiple of fwhm such as "2.0 fwhm"')
    return Extent(size, unit)


def _pixels(positions: Any, frames: FrameSet) -> list[tuple[float, float]]:
    if hasattr(positions, "icrs"):
        world = read_world(frames.table["file"][0], frames.instrument.extension_of(0))
        if world is None:
            raise InputError(
                "positions: a SkyCoord needs frames with world coordinates; give pixels (x, y) of the first frame"
            )
        sky = positions.icrs
        x, y = world.pixel(np.atleast_1d(sky.ra.deg), np.atleast_1d(sky.dec.deg))
    else:
        if hasattr(positions, "to_value"):
            positions = positions.to_value("pix")
        pairs = np.asarray(positions, dtype=float)
        pairs = pairs[None] if pairs.ndim == 1 else pairs
        if pairs.ndim != 2 or pairs.shape[1] != 2 or not np.isfinite(pairs).all():
            raise InputError("positions: expected pairs (x, y) in pixels or a SkyCoord, one for each source")
        x, y = pairs.T
    if not len(x) or not np.isfinite(x).all():
        raise InputError("positions: a source lies outside the frame's world coordinates; give pixels instead")
    return [(float(a), float(b)) for a, b in zip(x, y, strict=True)]
