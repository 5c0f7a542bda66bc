"""Stokes(instrument) to Stokes(sky): standard stars, the calibration model and its fit, foreground."""

from __future__ import annotations

from hwpol.correction.calibration import Calibration
from hwpol.correction.standard import Standard

__all__ = ["Calibration", "Standard"]
