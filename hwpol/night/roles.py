"""What each target of a visit is: science, or a standard with a catalogue value."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from hwpol.correction.catalogue import Catalogue, Entry
from hwpol.correction.catalogue.bands import band_name
from hwpol.errors import HwpolError
from hwpol.frames import FrameSet
from hwpol.instrument.description import Instrument
from hwpol.instrument.names import normal_name
from hwpol.night.config_objects import TargetConfig


@dataclass(frozen=True)
class Role:
    """Role of a target in a filter; `entry` is its catalogue value, None for science or where none is usable."""

    role: str
    entry: Entry | None = None
    note: str = ""


def targets_of(visit: FrameSet, targets: Sequence[TargetConfig]) -> tuple[TargetConfig, ...]:
    """The targets that lie in a visit's field: those whose header value it bears, else the one the header names."""
    name = str(visit.table["object"][0])
    chosen = tuple(t for t in targets if normal_name(t.object or t.name) == normal_name(name))
    return chosen or (TargetConfig(name=name or "unnamed"),)


def role_of(target: TargetConfig, visit: FrameSet, catalogue: Catalogue, instrument: Instrument) -> Role:
    """Role of a target: as configured, else from the catalogues by name, else by position."""
    filter_name = str(visit.table["filter"][0])
    known = instrument.filters.get(filter_name)
    band = known.band if known is not None and known.band else filter_name
    wavelength = None if known is None else known.wavelength
    if target.role == "science":
        return Role("science")
    ra = target.ra if target.ra is not None else float(visit.table["ra"][0])
    dec = target.dec if target.dec is not None else float(visit.table["dec"][0])
    if not np.isfinite([ra, dec]).all() or (target.xy is not None and target.ra is None):
        ra = dec = None  # type: ignore[assignment]
    try:
        star: Any = catalogue.star(target.catalogue or target.name, ra, dec)
        if star is None:
            note = f"{target.name}: role {target.role!r}, but no catalogue has it" if target.role else ""
            return Role(target.role or "science", None, note)
        if star.first("variable") and target.role is None:
            return Role("science", None, f"{target.name}: not used as a standard: {star.first('variable')}")
        entry = catalogue.entry(star, band, wavelength)
    except HwpolError as problem:
        return Role(target.role or "science", None, f"{target.name}: not used as a standard: {problem}")
    if entry is None:
        return Role(
            target.role or "science",
            None,
            f"{target.name}: no catalogue value for filter {filter_name!r} (band {band})",
        )
    if target.role == "zero-polarised" and entry.role == "polarised":
        return Role(target.role, replace(entry, role=target.role, theta=float("nan"), theta_err=float("nan")))
    if target.role is not None and target.role != entry.role:
        return Role(
            target.role, None, f"{target.name}: role {target.role!r}, but the catalogue lists it as {entry.role}"
        )
    return Role(entry.role, entry, _doubt(target.name, filter_name, entry, known is not None))


def _doubt(name: str, filter_name: str, entry: Entry, described: bool) -> str:
    """What is odd about the band of a catalogue value; empty for nothing."""
    if not described and (not filter_name or band_name(filter_name) is None):
        return (
            f"{name}: its filter {filter_name or '(none)'!r} names no band: the catalogue's value for "
            f"{entry.band or 'its first band'} is used; describe it in [filters] of the instrument file"
        )
    if entry.method in {"serkowski", "fitted", "nearest"}:
        how = "of its nearest band" if entry.method == "nearest" else "by the Serkowski law from its other bands"
        return (
            f"{name} in {filter_name or 'no filter'}: no tabulated value at {entry.wavelength:.2f} micron; taken {how}"
        )
    return ""
