"""One visit, from raw frames to fluxes: a pure function that any executor can run."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.fluxes import Fluxes
from hwpol.frames import Calibrator, FrameSet
from hwpol.frames.world import World, read_world
from hwpol.instrument.description import Section
from hwpol.night.config_objects import PhotometryConfig, TargetConfig
from hwpol.night.images import VisitImages
from hwpol.night.picture import FieldPicture, field_picture
from hwpol.night.radius import LADDER, RadiusChoice, choose_radius
from hwpol.night.seeing import frame_seeing, is_extended
from hwpol.night.sources import (
    field_sources,
    find_targets,
    foreign_error,
    hint_of,
    kept_from_sky,
    neighbour_flags,
    without_neighbours,
)
from hwpol.photometry.measure import Measurement, measure
from hwpol.photometry.scene import REMAINS
from hwpol.pixels import Box
from hwpol.registration import Placement, deeper_stars, register

Array = NDArray[np.float64]

#: Full width at half maximum of a Gaussian, in standard deviations.
FWHM_PER_SIGMA = 2.3548
#: Full width taken where no star tells it, pixels.
UNKNOWN_FWHM = 4.0


@dataclass(frozen=True)
class VisitTask:
    """All that `reduce_visit` needs; pickles."""

    number: int
    frames: FrameSet
    calibrator: Calibrator
    targets: tuple[TargetConfig, ...]
    photometry: PhotometryConfig
    registration: str = "stars"
    hits: bool = True
    method: str = "least-squares"
    gain: str = "visit"


@dataclass(frozen=True)
class VisitResult:
    """What came out of one visit.

    Attributes
    ----------
    names : tuple of str
        Name of each target; source s < len(names) is that target, the rest are field stars by brightness.
    fluxes : Fluxes
    radius : float
        Pixels.
    fwhm, ellipticity : ndarray, shape (K, B)
    shift : ndarray, shape (K, 2)
    ra, dec : ndarray, shape (S,)
    flags : ndarray of int, shape (S,)
        To add to what the solve finds.
    drift : ndarray, shape (S, 2)
        Systematic error of q and u (instrument frame): spread over the plateau of radii (first target), and what the
        light of other stars can do.
    choice : RadiusChoice or None
    radii : ndarray, shape (R,)
        Radii of the curve, pixels.
    growth : ndarray, shape (R,)
        Light of the first target inside each radius relative to the largest.
    stamps : ndarray, shape (B, n, n)
        Picture of the first target in every beam of the first frame, electrons.
    stamp_corner, stamp_place : ndarray, shape (B, 2)
        Pixel of each picture's first element, and where the target falls.
    picture : FieldPicture or None
        The field of the first beam and frame, where its stars are measured.
    notes : tuple of str
    """

    task_number: int
    names: tuple[str, ...]
    filter: str
    fluxes: Fluxes
    radius: float
    annulus: tuple[float, float]
    fwhm: Array
    ellipticity: Array
    shift: Array
    ra: Array
    dec: Array
    flags: NDArray[np.int_]
    drift: Array
    choice: RadiusChoice | None
    radii: Array
    growth: Array
    stamps: Array
    stamp_corner: Array
    notes: tuple[str, ...] = ()
    stamp_place: Array | None = None
    picture: FieldPicture | None = None


def reduce_visit(task: VisitTask) -> VisitResult:
    """Register and measure one visit.

    Raises
    ------
    InputError
        When no frame of the visit can be measured.
    """
    images = VisitImages(task.frames, task.calibrator)
    instrument = task.frames.instrument
    world = read_world(task.frames.table["file"][0], instrument.extension_of(0))
    hints = [hint_of(target, task.frames, world) for target in task.targets]
    sections = [_section(task.frames, b) for b in range(len(instrument.beams))]
    placement = place(task, images, hints, sections)
    fwhm = float(np.nanmedian(placement.fwhm)) if np.isfinite(placement.fwhm).any() else UNKNOWN_FWHM
    notes = list(placement.notes)
    leak = _flat_leak(task, placement, fwhm)

    x, y, flags = find_targets(task.targets, placement, hints, instrument.detector.pixel_scale, notes)
    px, py = placement.positions(x, y)
    photometry = task.photometry
    best = photometry.radius.unit == "best"
    multiples = LADDER if best else np.unique(np.append(LADDER, photometry.radius.pixels(fwhm) / fwhm))
    seeing = _seeing(task, placement, fwhm)
    options: dict[str, Any] = {
        "hdu_of_beam": images.hdu_of_beam,
        "sections": sections,
        "stars": kept_from_sky(placement, fwhm),
        "hits": task.hits,
    }

    def measured_at(px: Array, py: Array, multiples: Array, seeing: Array) -> Measurement:
        ring = np.array([[extent.pixels(width) for width in seeing] for extent in photometry.annulus])
        result = measure(images, px, py, radii=multiples[:, None] * seeing, annulus=ring, **options)
        return without_neighbours(result, images, placement, px, py, sections)

    measured = measured_at(px, py, multiples, seeing)
    if np.ptp(seeing) > 0 and is_extended(measured.fwhm[0], placement.fwhm):
        notes.append(f"{task.targets[0].name}: wider than the stars; its aperture does not follow the seeing")
        seeing = np.full(len(seeing), fwhm)
        measured = measured_at(px, py, multiples, seeing)
    radii = multiples * float(np.median(seeing))
    foreign = np.stack([foreign_error(placement, images, x, y, fwhm, radius) for radius in radii])
    choice = choose_radius(
        [_fluxes(task, measured, r, x[:1], y[:1], slice(0, 1), leak) for r in range(len(radii))],
        multiples,
        REMAINS * foreign[:, 0],
        method=task.method,
        gain=task.gain,
    )
    index = choice.index if best else int(np.argmin(np.abs(multiples - photometry.radius.pixels(fwhm) / fwhm)))
    if best and not choice.plateau:
        flags[0] |= int(Flag.NO_PLATEAU)
    fluxes = _fluxes(task, measured, index, x, y, slice(None), leak)

    if photometry.sources == "field":
        more_x, more_y = field_sources(placement, x, y, fwhm)
        if len(more_x):
            fx, fy = placement.positions(more_x, more_y)
            field = measured_at(fx, fy, multiples[index : index + 1], seeing)
            fluxes = _join(fluxes, _fluxes(task, field, 0, more_x, more_y, slice(None), leak))
            flags = np.append(flags, np.zeros(len(more_x), dtype=int))
    alien = foreign_error(placement, images, fluxes.x, fluxes.y, fwhm, float(radii[index]))
    flags |= neighbour_flags(fluxes, alien)
    drift = np.repeat(REMAINS * alien[:, None], 2, axis=1)
    if best:
        drift[0] = np.hypot(drift[0], choice.drift)
    ring = [extent.pixels(float(np.median(seeing))) for extent in photometry.annulus]
    if task.calibrator.noise_doubtful:
        flags |= int(Flag.NOISE_DOUBTFUL)
    ra, dec = _coordinates(task, world, fluxes)
    brightest = np.nanmedian(measured.flux[:, 0], axis=(1, 2)) if np.isfinite(measured.flux[:, 0]).any() else None
    growth = np.full(len(radii), np.nan) if brightest is None else brightest / brightest[-1]
    stamps, corner = _stamps(images, px[0, 0], py[0, 0], ring[1])
    return VisitResult(
        task_number=task.number,
        names=tuple(target.name for target in task.targets),
        filter=str(task.frames.table["filter"][0]),
        fluxes=fluxes,
        radius=float(radii[index]),
        annulus=(float(ring[0]), float(ring[1])),
        fwhm=placement.fwhm,
        ellipticity=placement.ellipticity,
        shift=placement.shift,
        ra=ra,
        dec=dec,
        flags=flags,
        drift=drift,
        choice=choice,
        radii=radii,
        growth=growth,
        stamps=stamps,
        stamp_corner=corner,
        stamp_place=np.stack([px[0, 0], py[0, 0]], axis=-1),
        picture=field_picture(images, sections[0]) if task.photometry.sources == "field" else None,
        notes=tuple(notes),
    )


def place(
    task: VisitTask, images: VisitImages, hints: list[tuple[float, float] | None], sections: list[Section | None]
) -> Placement:
    """Register the frames of a visit; its stars are those that the sharpest frames show."""
    instrument = task.frames.instrument
    moving = any(target.moving for target in task.targets)
    plate, mjd = task.frames.column("psi"), task.frames.column("mjd")
    strips = [None if s is None else Box(s.x0, s.y0, s.x1, s.y1) for s in sections]
    placement = register(
        images,
        len(task.frames),
        len(instrument.beams),
        nominal_offsets=[beam.offset for beam in instrument.beams],
        hdu_of_beam=images.hdu_of_beam,
        sections=strips,
        method=task.registration,
        header_shifts=_header_shifts(task) if task.registration == "header" else None,
        target=hints[0],
        moving=moving,
        psi=plate if np.isfinite(plate).all() else None,
        times=(mjd - mjd[0]) * 1440.0 if np.isfinite(mjd).all() else None,
    )
    return replace(placement, stars=deeper_stars(placement, images, images.hdu_of_beam, strips))


def _seeing(task: VisitTask, placement: Placement, fwhm: float) -> Array:
    """Width of each frame that apertures given in fwhm follow; one for all where they should not."""
    # A moving target may be a comet, and may be all the light there is: its width is not the seeing's.
    fixed = task.photometry.radius.unit == "pixel" or any(target.moving for target in task.targets)
    width = frame_seeing(placement.fwhm)
    if fixed or not np.isfinite(width).all():
        return np.full(len(width), fwhm)
    return width


def _header_shifts(task: VisitTask) -> Array:
    """Shifts (K, 2) in pixels of the pointing between frames, from world coordinates."""
    files = task.frames.table["file"]
    extension = task.frames.instrument.extension_of(0)
    first = read_world(files[0], extension)
    if first is None:
        raise InputError(
            'registration.method = "header": the frames hold no world coordinates; use "stars", "correlation" or "off"'
        )
    ra, dec = first.sky(*first.wcs.wcs.crpix - 1)
    shifts = []
    for file in files:
        world = read_world(file, extension)
        shifts.append([np.nan, np.nan] if world is None else np.ravel(world.pixel(ra, dec)) - (first.wcs.wcs.crpix - 1))
    return np.asarray(shifts)


def _section(frames: FrameSet, beam: int) -> Section | None:
    instrument = frames.instrument
    return instrument.beams[beam].section or instrument.beams[beam].trim or instrument.detector.trim


def _flat_leak(task: VisitTask, placement: Placement, fwhm: float) -> Array:
    """Variance of a flux, relative to its square, from errors of the flat that motion brings in; shape (K, B).

    Over a Gaussian image the flat's errors average to  variance / (4 pi s^2),  s = fwhm / 2.355. What two images at a
    distance d have of it in common is exp(-d^2 / 4 s^2); only the rest changes from frame to frame.
    """
    row = task.frames.table[0]
    gain = float(row["gain"])
    flat = [
        task.calibrator.flat_noise(
            row["file"],
            b,
            filter=str(row["filter"]),
            exposure=float(row["exposure"]),
            gain=gain if np.isfinite(gain) else None,
            psi=float(row["psi"]),
        )
        for b in range(len(task.frames.instrument.beams))
    ]
    size = (fwhm / FWHM_PER_SIGMA) ** 2
    moved = np.nan_to_num(placement.shift - np.nanmedian(placement.shift, axis=0))
    changed = 1 - np.exp(-np.sum(moved**2, axis=1) / (4 * size))
    return np.asarray(changed[:, None] * np.asarray(flat)[None, :] / (4 * np.pi * size))


def _fluxes(
    task: VisitTask, measured: Measurement, radius: int, x: Array, y: Array, part: slice, leak: Array
) -> Fluxes:
    frames, instrument = task.frames, task.frames.instrument
    column = frames.column
    filter_name = str(frames.table["filter"][0])
    plate = instrument.wave_plate
    # A tiny floor: a variance of zero would be refused, and no detector has one.
    variance = np.maximum(
        measured.variance[radius][part] + leak * np.nan_to_num(measured.flux[radius][part]) ** 2, 1e-6
    )
    return Fluxes.from_arrays(
        measured.flux[radius][part],
        np.where(np.isfinite(measured.flux[radius][part]), variance, np.nan),
        wave_plate=None if plate is None else column("psi"),
        analyser=[beam.analyser for beam in instrument.beams],
        retardance=180.0 if plate is None else plate.retardance_of(filter_name),
        cycle=column("cycle"),
        position_angle=column("chi"),
        parallactic=column("eta"),
        sense=instrument.orientation.sense,
        filter=filter_name,
        x=x,
        y=y,
        mjd=column("mjd"),
        exposure=column("exposure"),
        airmass=column("airmass"),
        throughput=[beam.throughput for beam in instrument.beams],
        throughput_err=[np.nan if b.throughput_err is None else b.throughput_err for b in instrument.beams],
        sky=measured.sky[part],
        flags=measured.flags[radius][part],
        target=task.targets[0].name,
        frames=tuple(str(name) for name in frames.table["name"]),
    )


def _join(first: Fluxes, second: Fluxes) -> Fluxes:
    joined: dict[str, Any] = {
        name: np.concatenate([getattr(first, name), getattr(second, name)])
        for name in ("flux", "variance", "flags", "sky", "x", "y")
    }
    return replace(first, **joined)


def _coordinates(task: VisitTask, world: World | None, fluxes: Fluxes) -> tuple[Array, Array]:
    if world is not None:
        ra, dec = world.sky(fluxes.x, fluxes.y)
    else:
        ra, dec = np.full(fluxes.shape[0], np.nan), np.full(fluxes.shape[0], np.nan)
    for s, target in enumerate(task.targets):
        if target.ra is not None and target.dec is not None:
            ra[s], dec[s] = target.ra, target.dec
        elif not np.isfinite(ra[s]) or s == 0:
            header = float(task.frames.table["ra"][0]), float(task.frames.table["dec"][0])
            if np.isfinite(header).all():
                ra[s], dec[s] = header
    return ra, dec


def _stamps(images: VisitImages, x: Array, y: Array, reach: float) -> tuple[Array, Array]:
    half = int(np.ceil(reach)) + 2
    pictures, corners = [], []
    for b in range(len(x)):
        picture = np.full((2 * half + 1, 2 * half + 1), np.nan, dtype=np.float32)
        corner = (0, 0)
        if np.isfinite([x[b], y[b]]).all():
            cx, cy = round(float(x[b])), round(float(y[b]))
            corner = (cx - half, cy - half)
            box = Box(max(cx - half, 0), max(cy - half, 0), max(cx + half + 1, 0), max(cy + half + 1, 0))
            if box.x1 > box.x0 and box.y1 > box.y0:
                pixels = images(0, b, box)
                rows, columns = pixels.data.shape
                top, left = pixels.y0 - corner[1], pixels.x0 - corner[0]
                picture[top : top + rows, left : left + columns] = pixels.data
        pictures.append(picture)
        corners.append(corner)
    return np.asarray(pictures), np.asarray(corners)
