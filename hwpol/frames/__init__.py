"""Raw files to frames: headers, visits and cycles, and calibrated pixels. The only place that opens raw files."""

from __future__ import annotations

from hwpol.frames.calibrator import Calibrator
from hwpol.frames.frameset import FrameSet
from hwpol.frames.grouping import Cycle
from hwpol.frames.merging import merged

__all__ = ["Calibrator", "Cycle", "FrameSet", "merged"]
