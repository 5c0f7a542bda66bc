"""Raw files to frames: headers, visits and cycles, and calibrated pixels. The only place that opens raw files."""

from __future__ import annotations

from hwpol.frames.frameset import FrameSet
from hwpol.frames.grouping import Cycle

__all__ = ["Cycle", "FrameSet"]
