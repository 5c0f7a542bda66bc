"""The description of an instrument: objects, reader, and the checker of all TOML files."""

from __future__ import annotations

from hwpol.instrument.description import (
    Band,
    Beam,
    Detector,
    Instrument,
    Keyword,
    Orientation,
    Section,
    Site,
    WavePlate,
)

__all__ = ["Band", "Beam", "Detector", "Instrument", "Keyword", "Orientation", "Section", "Site", "WavePlate"]
