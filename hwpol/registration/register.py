"""Where every source falls in every beam of every frame of a visit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError
from hwpol.pixels import Box
from hwpol.registration.beams import BeamMap, fit_beam_map, pick_target, shift_map
from hwpol.registration.correlation import combined_shift, image_shift, prepared
from hwpol.registration.detection import no_stars
from hwpol.registration.matching import Motion
from hwpol.registration.placement import Placement, fit_wobble, move
from hwpol.registration.solve import beam_wander, best_motion, relative_to
from hwpol.registration.tracking import follow_target
from hwpol.registration.visit import Follower, FrameMeasures, Images, Layout, Reference, find_reference

Floats = NDArray[np.float64]

METHODS = ("stars", "correlation", "header", "off")
# A beam's own wander enters the positions only when chance is out of the question and it is worth it.
_WANDER_SIGMA, _WANDER_PIXELS = 6.0, 0.01


def register(
    images: Images,
    frames: int,
    beams: int,
    *,
    nominal_offsets: ArrayLike | None = None,
    hdu_of_beam: Sequence[int] | None = None,
    sections: Sequence[Box | None] | None = None,
    method: str = "stars",
    header_shifts: ArrayLike | None = None,
    target: tuple[float, float] | None = None,
    fwhm: float | None = None,
    moving: bool = False,
    psi: ArrayLike | None = None,
    times: ArrayLike | None = None,
) -> Placement:
    """Register the frames of one visit.

    Parameters
    ----------
    images : callable
        ``images(k, b, box=None) -> Pixels``: calibrated pixels of the array that feeds beam b in frame k.
    frames, beams : int
        K and B.
    nominal_offsets : array_like, shape (B, 2)
        Start values of the beams' offsets from the first, raw pixels; default zero.
    hdu_of_beam : sequence of int, length B
        Beams of equal number lie on the same array; default all on one.
    sections : sequence of Box or None, length B
        Each beam's strip of its array; None: the whole.
    method : {"stars", "correlation", "header", "off"}
        How frame shifts are found. The beam map is measured from stars in each case, where there are any.
    header_shifts : array_like, shape (K, 2)
        Shifts for "header", pixels; those of the first frame are subtracted.
    target : tuple, optional
        Place of the target (x, y) in the first frame and beam, good to about 10 pixels.
    fwhm : float, optional
        Width of the stars, pixels; estimated when not given.
    moving : bool
        Follow the target itself between frames.
    psi : array_like, shape (K,), optional
        Wave-plate angle, degrees: the wobble circle is fitted.
    times : array_like, shape (K,), optional
        For interpolation over lost frames and linear motion; any unit. Default the frame number.

    Returns
    -------
    Placement

    Raises
    ------
    InputError
        Where numbers and shapes of the arguments contradict each other.
    """
    nominal = np.zeros((beams, 2)) if nominal_offsets is None else np.asarray(nominal_offsets, dtype=np.float64)
    layout = Layout(tuple(hdu_of_beam or (0,) * beams), tuple(sections or (None,) * beams))
    clock = np.arange(frames, dtype=np.float64) if times is None else np.asarray(times, dtype=np.float64)
    _check(frames, beams, nominal, layout, method, header_shifts, clock, psi)
    notes: list[str] = []
    reference = find_reference(images, range(frames) if method == "stars" else range(1), layout, nominal, fwhm)
    pivot = _centre(layout, images)
    if reference is None:
        placement = _without_stars(images, frames, beams, layout, nominal, pivot, notes)
    else:
        placement = _with_stars(images, frames, layout, reference, pivot, method, target, moving, clock, notes)
    if method in ("correlation", "header", "off"):
        placement = _given_motion(placement, images, layout, method, header_shifts, notes)
    elif reference is None:
        notes.append(
            'no star was found in any frame: all shifts are zero; registration.method "correlation" serves fields '
            "without stars"
        )
    placement = _interpolated(placement, clock, notes)
    placement = _with_target(placement, reference, target, notes)
    if moving and placement.target is not None:
        placement = follow_target(placement, images, clock, notes, reference.fwhm if reference else fwhm or 4.0)
    if psi is not None:
        placement = replace(placement, wobble=fit_wobble(placement.shift, placement.shift_err, psi, clock))
    return replace(placement, notes=tuple(notes))


def _check(
    frames: int, beams: int, nominal: Floats, layout: Layout, method: str, header_shifts: ArrayLike | None,
    clock: Floats, psi: ArrayLike | None,
) -> None:  # fmt: skip
    if frames < 1 or beams < 1:
        raise InputError(f"register: {frames} frames and {beams} beams: expected at least one of each")
    if nominal.shape != (beams, 2):
        raise InputError(f"register: nominal_offsets of shape {nominal.shape}: expected ({beams}, 2)")
    for name, value in (("hdu_of_beam", layout.hdu_of_beam), ("sections", layout.sections)):
        if len(value) != beams:
            raise InputError(f"register: {name} has {len(value)} entries: expected one a beam, {beams}")
    if method not in METHODS:
        raise InputError(f"registration.method = {method!r}: expected one of {', '.join(map(repr, METHODS))}")
    if method == "header" and (header_shifts is None or np.shape(header_shifts) != (frames, 2)):
        raise InputError(f'register: method "header" needs header_shifts of shape ({frames}, 2)')
    for name, array in (("times", clock), ("psi", psi)):
        if array is not None and np.shape(array) != (frames,):
            raise InputError(f"register: {name} of shape {np.shape(array)}: expected ({frames},)")


def _centre(layout: Layout, images: Images) -> tuple[float, float]:
    box = layout.sections[0] or images(0, 0).box
    return 0.5 * (box.x0 + box.x1 - 1), 0.5 * (box.y0 + box.y1 - 1)


def _without_stars(
    images: Images, frames: int, beams: int, layout: Layout, nominal: Floats, pivot: tuple[float, float],
    notes: list[str],
) -> Placement:  # fmt: skip
    if beams > 1:
        notes.append("no star was found to measure the beams' offsets: the instrument file's are used")
    empty = np.full((frames, beams), np.nan)
    return Placement(
        no_stars(), np.zeros((frames, 2)), np.full(frames, np.nan), np.zeros(frames), pivot, np.zeros(frames, np.int64),
        empty, empty.copy(), tuple(shift_map(n) for n in nominal), np.zeros((frames, beams, 2)), None,
        np.zeros(frames, bool), None, -1, False, (),
    )  # fmt: skip


def _with_stars(
    images: Images, frames: int, layout: Layout, reference: Reference, pivot: tuple[float, float], method: str,
    hint: tuple[float, float] | None, moving: bool, clock: Floats, notes: list[str],
) -> Placement:  # fmt: skip
    if not reference.paired and len(layout.hdu_of_beam) > 1:
        notes.append("no star has its partner in every beam: the instrument file's beam offsets are used")
    if reference.frame:
        notes.append(f"no star with its partners in the first frame: frame {reference.frame + 1} is the reference")
    followed = pick_target(reference.stars, hint) if moving else None
    alone = followed is None or len(reference.stars) < 2
    follower = Follower(reference, layout, pivot, -1 if alone or followed is None else followed)
    still = Motion((0.0, 0.0), 0.0, pivot)
    measures: list[FrameMeasures | None] = [None] * frames
    for direction in (range(reference.frame, frames), range(reference.frame - 1, -1, -1)):
        known: list[tuple[float, Motion]] = [(float(clock[reference.frame]), still)]
        follower.width = reference.fwhm
        for k in direction:
            guesses = _guesses(known, float(clock[k]), still)
            found = follower.frame(layout.load(images, k), guesses)
            measures[k] = found
            if found.ok:
                known.append((float(clock[k]), found.motion))
    got = [m for m in measures if m is not None]
    ok = np.array([m.ok for m in got])
    places, errors = np.stack([m.places for m in got]), np.stack([m.errors for m in got])
    shift = np.array([m.motion.shift for m in got])
    rotation = np.array([m.motion.rotation for m in got])
    template = np.column_stack([reference.stars.x, reference.stars.y])
    maps = _refined_maps(reference, places, errors)
    solution = best_motion(places, errors, template, maps, shift, rotation, pivot)
    wander, sigma = beam_wander(solution, errors)
    size = float(np.sqrt(np.mean(wander**2)))
    if method == "stars" and sigma > _WANDER_SIGMA and size > _WANDER_PIXELS:
        notes.append(f"the beams move against each other by {size:.3f} pixel rms from frame to frame: each is followed")
        for _ in range(3):
            solution = best_motion(places - wander[:, :, None], errors, template, maps, shift, rotation, pivot)
            wander = wander + beam_wander(solution, errors)[0]
    else:
        wander = np.zeros_like(wander)
    # The first beam carries the frames' shift; the others move against it.
    solution = replace(solution, shift=solution.shift + wander[:, 0])
    wander = wander - wander[:, :1]
    if wander.any():
        maps = _refined_maps(reference, places - wander[:, :, None], errors)
    origin = 0 if ok[0] else reference.frame
    shift, rotation, template = relative_to(solution, origin, pivot)
    measured = np.isfinite(errors[:, 0]).any(0)
    stars = replace(
        reference.stars,
        x=np.where(measured, template[:, 0], reference.stars.x),
        y=np.where(measured, template[:, 1], reference.stars.y),
    )
    return Placement(
        stars, shift, np.where(ok, solution.shift_err, np.nan), rotation, pivot,
        (solution.weight > 0).sum((1, 2)).astype(np.int64), np.stack([m.fwhm for m in got]),
        np.stack([m.ellipticity for m in got]), maps, wander, None, ok, None, -1, False, (),
    )  # fmt: skip


def _guesses(known: list[tuple[float, Motion]], now: float, still: Motion) -> list[Motion]:
    """Motions to try first: the last one seen, and the last two carried on."""
    guesses = [known[-1][1]]
    if len(known) >= 3 and known[-1][0] != known[-2][0]:
        (t0, a), (t1, b) = known[-2:]
        f = (now - t1) / (t1 - t0)
        carried = Motion(
            (b.shift[0] + f * (b.shift[0] - a.shift[0]), b.shift[1] + f * (b.shift[1] - a.shift[1])),
            b.rotation + f * (b.rotation - a.rotation),
            still.pivot,
        )
        guesses.insert(1, carried)
    return guesses


def _refined_maps(reference: Reference, places: Floats, errors: Floats) -> tuple[BeamMap, ...]:
    """Beam maps from the centroids of all frames: they are static within a visit."""
    maps = [reference.maps[0]]
    for b in range(1, places.shape[1]):
        both = np.isfinite(errors[:, 0]) & np.isfinite(errors[:, b])
        if not both.any() or not reference.paired:
            maps.append(reference.maps[b])
            continue
        error = np.hypot(np.hypot(errors[:, 0], errors[:, b])[both], 0.01)
        star = np.broadcast_to(np.arange(places.shape[2]), both.shape)[both]
        maps.append(fit_beam_map(places[:, 0][both], places[:, b][both], error, groups=star))
    return tuple(maps)


def _given_motion(
    placement: Placement, images: Images, layout: Layout, method: str, header_shifts: ArrayLike | None,
    notes: list[str],
) -> Placement:  # fmt: skip
    """The placement with its shifts taken from correlation, from the header, or zero."""
    frames, beams = len(placement.shift), len(placement.beam_map)
    placement = replace(
        placement,
        rotation=np.zeros(frames),
        beam_shift=np.zeros((frames, beams, 2)),
        matched=np.zeros(frames, np.int64),
    )
    if method != "correlation":
        shift = np.zeros((frames, 2))
        if method == "header":
            shift = np.asarray(header_shifts, dtype=np.float64) - np.asarray(header_shifts, dtype=np.float64)[0]
        seen = np.asarray(np.isfinite(shift).all(axis=1))
        return replace(placement, shift=shift, shift_err=np.full(frames, np.nan), ok=seen)
    places = list(zip(layout.hdu_of_beam, layout.sections, strict=True))
    parts_of = [b for b in range(beams) if places[b] not in places[:b]]

    def parts(k: int) -> list[Floats]:
        arrays = layout.load(images, k)
        return [prepared(arrays[b].cut(layout.sections[b] or arrays[b].box)) for b in parts_of]

    references = parts(0)
    shift, error, ok = np.zeros((frames, 2)), np.full(frames, np.nan), np.zeros(frames, bool)
    ok[0], error[0] = True, 0.0
    for k in range(1, frames):
        shift[k], error[k], ok[k] = combined_shift(references, parts(k))
    error = np.where(ok, np.maximum(error, 0.01), np.nan)
    maps = placement.beam_map
    if not len(placement.stars) and len(parts_of) == beams > 1:
        maps = _correlated_maps(placement, references, layout, images, notes)
    return replace(placement, shift=shift, shift_err=error, ok=ok, beam_map=maps)


def _correlated_maps(
    placement: Placement, references: list[Floats], layout: Layout, images: Images, notes: list[str]
) -> tuple[BeamMap, ...]:
    """Beam offsets from correlating the beams' sections of the first frame."""
    arrays = layout.load(images, 0)
    boxes = [layout.sections[b] or arrays[b].box for b in range(len(references))]
    maps = [placement.beam_map[0]]
    for b in range(1, len(references)):
        ny, nx = (min(m, n) for m, n in zip(references[0].shape, references[b].shape, strict=True))
        shift, likeness = image_shift(references[0][:ny, :nx], references[b][:ny, :nx])
        offset = shift + np.array([boxes[b].x0 - boxes[0].x0, boxes[b].y0 - boxes[0].y0])
        if likeness > 0.5 and np.hypot(*(offset - placement.beam_map[b].offset)) < 25:
            maps.append(shift_map(offset))
            notes.append(f"beam {b + 1}: its offset was measured by correlation with the first beam")
        else:
            maps.append(placement.beam_map[b])
    return tuple(maps)


def _interpolated(placement: Placement, clock: Floats, notes: list[str]) -> Placement:
    """Shifts and rotations of lost frames from their neighbours."""
    ok = placement.ok
    if ok.all() or not ok.any():
        return placement
    order = np.flatnonzero(ok)[np.argsort(clock[ok], kind="stable")]

    def between(values: Floats) -> Floats:
        return np.where(ok, values, np.interp(clock, clock[order], values[order]))

    lost = ", ".join(str(k + 1) for k in np.flatnonzero(~ok))
    notes.append(f"frame {lost}: too few stars matched; its shift was interpolated from the neighbouring frames")
    shift = np.column_stack([between(placement.shift[:, 0]), between(placement.shift[:, 1])])
    return replace(placement, shift=shift, rotation=between(placement.rotation))


def _with_target(
    placement: Placement, reference: Reference | None, hint: tuple[float, float] | None, notes: list[str]
) -> Placement:
    stars = placement.stars
    index = pick_target(stars, hint)
    if index is not None:
        return replace(placement, target=(float(stars.x[index]), float(stars.y[index])), target_index=index,
                       guessed=hint is None)  # fmt: skip
    if hint is None:
        return placement
    if reference is not None:
        # A star of the first beam that lacks a partner still says better than the hint where the target is.
        start = move(reference.lists[0].x, reference.lists[0].y, *_back(placement, reference.frame))
        near = np.hypot(start[0][0] - hint[0], start[1][0] - hint[1])
        if len(near) and near.min() <= 15.0:
            nearest = int(np.argmin(near))
            notes.append("the target was found in the first beam only: its partner was not seen")
            return replace(placement, target=(float(start[0][0, nearest]), float(start[1][0, nearest])))
    notes.append("no star was found near the target's place: the place given is used")
    return replace(placement, target=(float(hint[0]), float(hint[1])))


def _back(placement: Placement, k: int) -> tuple[Floats, Floats, tuple[float, float]]:
    """Shift and rotation that carry frame k to the first frame."""
    angle = -np.radians(placement.rotation[k])
    c, s = np.cos(angle), np.sin(angle)
    dx, dy = -placement.shift[k]
    return np.array([[c * dx - s * dy, s * dx + c * dy]]), -placement.rotation[k : k + 1], placement.pivot
