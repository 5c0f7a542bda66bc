"""One set of frames from several."""

from __future__ import annotations

from astropy.table import vstack

from hwpol.errors import InputError
from hwpol.frames.frameset import FrameSet


def merged(*sets: FrameSet) -> FrameSet:
    """Join sets of frames of one instrument; a file in two of them stands once. Visits keep their numbers."""
    if not sets or any(one.instrument != sets[0].instrument for one in sets):
        raise InputError("frames of different instruments cannot be joined; read them with the same instrument file")
    tables = [one.table for one in sets if len(one)]
    if not tables:
        return sets[0]
    table = vstack(tables, metadata_conflicts="silent")
    seen: set[str] = set()
    keep = [not (name in seen or seen.add(name)) for name in table["file"]]  # type: ignore[func-returns-value]
    return FrameSet(sets[0].instrument, table[keep])
