"""Frames into visits and cycles: arithmetic on arrays of times, names and plate angles."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.instrument.names import normal_name

# Prices that decide how a visit is cut into cycles; see `cycles`. Only their order matters: a broken-off pass must
# cost more than a position taken again in place or somewhat later, less than two of those or than the first position
# of the pass coming back.
_INCOMPLETE = 1.0
_MISSING = 0.01
_AGAIN_IN_PLACE = 0.3
_AGAIN_LATER = 0.8
_FIRST_AGAIN = 1.5
_PAUSE = 1.0
_UNUSUAL_START = 0.6
_OTHER_NATURAL = 0.02
_OTHER_START = 0.7
_PAUSE_FACTOR = 5.0  # a gap this many times the usual one counts as a pause
_RARE = 0.34  # positions seen less often than this part of the median are no part of the pass
_ROUNDING = 1e-9
_SECONDS = 86400.0

#: Share of a full turn's steps that distinct plate angles must fill to count as positions of one full turn.
FULL_TURN = 0.6


def visits(
    names: Sequence[str], filters: Sequence[str], mjd: ArrayLike, exposure: ArrayLike, gap: float
) -> NDArray[np.int64]:
    """Number the visits: all frames of one target in one filter without a gap longer than `gap`.

    Parameters
    ----------
    names, filters : sequences of str, length frame
        Object and filter of each frame. Names are compared without case, blanks, hyphens and underscores.
    mjd : array_like, shape (frame,)
        Middle of the exposure. NaN: the frame follows the one before it in the given order.
    exposure : array_like, shape (frame,)
        Seconds; the gap runs from the end of one exposure to the start of the next of the same target and filter.
    gap : float
        Minutes.

    Returns
    -------
    ndarray of int, shape (frame,)
        From 1, in the order of the visits' first frames. Other targets and filters may lie in between.
    """
    time = np.asarray(mjd, dtype=float) * _SECONDS
    half = np.nan_to_num(np.asarray(exposure, dtype=float)) / 2
    numbers = np.zeros(len(names), dtype=np.int64)
    latest: dict[tuple[str, str], tuple[int, float]] = {}
    for frame in time_order(time):
        key = (normal_name(names[frame]), filters[frame])
        number, end = latest.get(key, (0, math.nan))
        # A comparison with NaN is false: frames without a time never open a visit of their own.
        if not number or time[frame] - half[frame] - end > gap * 60.0:
            number = int(numbers.max(initial=0)) + 1
        numbers[frame] = number
        latest[key] = (number, time[frame] + half[frame])
    return numbers


def time_order(time: NDArray[np.float64]) -> NDArray[np.intp]:
    """Indices in order of time, frames without a time last, ties as given."""
    return np.argsort(time, kind="stable")


def positions(psi: ArrayLike, tolerance: float) -> NDArray[np.int64]:
    """Number the wave-plate positions by angle, from 1; -1 where the angle is NaN.

    Readings join a position while no further than `tolerance` from their neighbour and 2 x `tolerance` from the
    first, going round from the widest empty stretch of the circle, so that 359.9 and 0.1 deg are one position.
    Angles half a turn or a quarter apart modulate alike but are different positions.

    Parameters
    ----------
    psi : array_like, shape (frame,)
        Degrees, any turn.
    tolerance : float
        Degrees.
    """
    angles = np.mod(np.asarray(psi, dtype=float), 360.0)
    numbers = np.full(angles.shape, -1, dtype=np.int64)
    known = np.flatnonzero(np.isfinite(angles))
    if known.size == 0:
        return numbers
    known = known[np.argsort(angles[known], kind="stable")]
    sorted_ = angles[known]
    start = int(np.argmax(np.diff(sorted_, append=sorted_[0] + 360.0))) + 1
    known = np.roll(known, -start)
    unrolled = np.mod(angles[known] - angles[known[0]], 360.0)
    groups: list[list[int]] = []
    first = last = -math.inf
    for frame, angle in zip(known, unrolled, strict=True):
        if angle - last > tolerance or angle - first > 2 * tolerance:
            groups.append([])
            first = angle
        groups[-1].append(int(frame))
        last = angle
    for number, group in enumerate(sorted(groups, key=lambda members: position_angle(angles[members], tolerance)), 1):
        numbers[group] = number
    return numbers


def within_turn(psi: ArrayLike, tolerance: float) -> NDArray[np.float64]:
    """Plate angles as positions of a visit count them, deg: modulo 360, or modulo 180 where half turns repeat.

    A plate turned by 180 deg modulates as before. Where the distinct angles fill most of the full turn's steps they
    are positions of their own (sixteen over a full turn); where a few come again half a turn on (an encoder that
    counts on over several turns) the later ones repeat the earlier.
    """
    angles = np.mod(np.asarray(psi, dtype=float), 360.0)
    known = angles[np.isfinite(angles)]
    full = positions(known, tolerance)
    number = len(set(full.tolist()))
    if number < 2 or len(set(positions(2 * known, 2 * tolerance).tolist())) == number:
        return angles
    centres = np.sort([position_angle(known[full == one], tolerance) for one in set(full.tolist())])
    step = float(np.min(np.diff(centres, append=centres[0] + 360.0)))
    return angles if number * step > FULL_TURN * 360.0 else np.mod(angles + tolerance, 180.0) - tolerance


def position_angle(psi: NDArray[np.float64], tolerance: float) -> float:
    """Angle of one position, deg: the mean on the circle, in [0, 360); within `tolerance` below 360 counts as 0."""
    turns = np.radians(psi)
    mean = math.degrees(math.atan2(np.sin(turns).mean(), np.cos(turns).mean())) % 360.0
    return 0.0 if mean >= 360.0 - tolerance else mean


def cycles(position: ArrayLike, mjd: ArrayLike) -> NDArray[np.int64]:
    """Cut one visit into cycles, each one pass through the plate positions.

    The visit is cut, in time, at the places that cost least in all. A cycle that lacks a position costs 1; a position
    taken more (or less) often than the usual number of exposures in a row, 0.3 for each exposure when they stand
    together and 0.8 when others lie between, 1.5 when it is the position the cycle began with; a pause (5 times the
    usual gap) inside a cycle 1; a start elsewhere than at the usual angle 0.6, or 0.02 where the plate turns back
    or stood at the usual last angle before.
    The usual number of exposures in a row and the usual start, the lowest angle or (for 0.7) the first, are those
    that make the sum smallest. So repeats at a position stay in one cycle, a spoilt
    exposure taken again does not shift the cycles behind it, passes may run in any order or to and fro, and a pass
    broken off is an incomplete cycle of its own. Sixteen positions over a full turn are one cycle, not four.

    Parameters
    ----------
    position : array_like of int, shape (frame,)
        As of `positions`.
    mjd : array_like, shape (frame,)

    Returns
    -------
    ndarray of int, shape (frame,)
        From 1, in time; -1 where the position is -1.
    """
    place, time = np.asarray(position, dtype=np.int64), np.asarray(mjd, dtype=float)
    numbers = np.full(place.shape, -1, dtype=np.int64)
    order = time_order(time)
    order = order[place[order] > 0]
    if order.size == 0:
        return numbers
    sequence = place[order].tolist()
    gaps = np.diff(time[order])
    usual = np.median(gaps[gaps > 0]) if (gaps > 0).any() else math.inf
    pauses = [False, *(gaps > _PAUSE_FACTOR * usual).tolist()]
    lengths = _run_lengths(sequence)
    tried = sorted({1} | set(lengths) | {length // 2 for length in lengths if length > 1})
    lowest = min(regular_positions(sequence))
    starts = {lowest: 0.0, sequence[0]: 0.0 if sequence[0] == lowest else _OTHER_START}
    choices = [(repeats, start) for repeats in tried for start in starts]
    best, least = [(0, len(sequence))], math.inf
    for repeats, start in choices:
        cost, stretches = _cut(sequence, pauses, repeats, start)
        if cost + starts[start] < least - _ROUNDING:
            best, least = stretches, cost + starts[start]
        if least < _ROUNDING:
            break
    for number, (begin, end) in enumerate(best, 1):
        numbers[order[begin:end]] = number
    return numbers


def _run_lengths(sequence: list[int]) -> list[int]:
    edges = [at for at in range(1, len(sequence)) if sequence[at] != sequence[at - 1]]
    return np.diff([0, *edges, len(sequence)]).tolist()


def regular_positions(position: ArrayLike) -> set[int]:
    """Positions that belong to the pass: all but those seen far less often than the others of the visit."""
    found, counts = np.unique(np.asarray(position), return_counts=True)
    found, counts = found[found > 0], counts[found > 0]
    return set(found[counts >= _RARE * np.median(counts)].tolist()) if found.size else set()


def _natural_starts(sequence: list[int], start: int) -> list[bool]:
    """Where a pass may begin: at `start`, behind the position that usually stands before it, or where the plate
    turns back, which is between two frames of a run that it enters and leaves from and to the same position."""
    pairs = list(pairwise(sequence))
    before = Counter(first for first, second in pairs if second == start != first)
    last = before.most_common(1)[0][0] if before else None
    natural = [True]
    for at, (first, second) in enumerate(pairs, 1):
        if first != second:
            natural.append(second == start or first == last)
            continue
        entered = next((p for p in reversed(sequence[:at]) if p != second), None)
        left = next((p for p in sequence[at:] if p != second), None)
        natural.append(second == start or (entered is not None and entered == left))
    return natural


def _cut(sequence: list[int], pauses: list[bool], repeats: int, start: int) -> tuple[float, list[tuple[int, int]]]:
    """Cheapest cut into stretches and its cost, by going through the sequence once (dynamic programming)."""
    regular = regular_positions(sequence)
    longest = (2 * len(regular) + 2) * (repeats + 1)
    natural = _natural_starts(sequence, start)
    cost = [0.0] + [math.inf] * len(sequence)
    origin = [0] * (len(sequence) + 1)
    for begin in range(len(sequence)):
        counts: dict[int, int] = {}
        lacking = set(regular)
        paid = cost[begin] + (_OTHER_NATURAL if natural[begin] else _UNUSUAL_START) * (sequence[begin] != start)
        short = 0.0  # for positions taken less often than usual
        for end in range(begin, min(begin + longest, len(sequence))):
            here = sequence[end]
            count = counts.get(here, 0)
            counts[here] = count + 1
            lacking.discard(here)
            if pauses[end] and end > begin:
                paid += _PAUSE
            if count and here != sequence[end - 1]:
                paid += _FIRST_AGAIN if here == sequence[begin] else _AGAIN_LATER
            elif count >= repeats:
                paid += _AGAIN_IN_PLACE
            if count == 0:
                short += _AGAIN_IN_PLACE * (repeats - 1)
            elif count < repeats:
                short -= _AGAIN_IN_PLACE
            total = paid + short + (_INCOMPLETE + _MISSING * len(lacking) if lacking else 0.0)
            if total < cost[end + 1] - _ROUNDING:
                cost[end + 1], origin[end + 1] = total, begin
    stretches: list[tuple[int, int]] = []
    end = len(sequence)
    while end:
        stretches.append((origin[end], end))
        end = origin[end]
    return cost[-1], stretches[::-1]


@dataclass(frozen=True)
class Cycle:
    """One cycle of a visit: angles (deg) of the positions it has and of those it lacks, and its frames."""

    cycle: int
    present: tuple[float, ...]
    missing: tuple[float, ...]
    frames: int

    @property
    def complete(self) -> bool:
        """Whether no position of the visit's pass is missing."""
        return not self.missing


def summarise(cycle: ArrayLike, position: ArrayLike, psi: ArrayLike, tolerance: float) -> list[Cycle]:
    """List the cycles of one visit with the positions each has and lacks.

    Parameters
    ----------
    cycle, position : array_like of int, shape (frame,)
    psi : array_like, shape (frame,)
        Degrees.
    tolerance : float
        Degrees, as of `positions`.
    """
    number, place, angle = np.asarray(cycle), np.asarray(position), np.asarray(psi, dtype=float)
    centres = {p: position_angle(angle[place == p], tolerance) for p in np.unique(place[place > 0]).tolist()}
    regular = regular_positions(place)
    rows = []
    for which in np.unique(number[number > 0]).tolist():
        here = set(place[number == which].tolist())
        rows.append(
            Cycle(
                which,
                tuple(centres[p] for p in sorted(here & centres.keys())),
                tuple(centres[p] for p in sorted(regular - here)),
                int((number == which).sum()),
            )
        )
    return rows
