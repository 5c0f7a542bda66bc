"""Optical imaging polarimetry behind a rotating half-wave plate: frames to calibrated Stokes parameters.

FrameSet --photometer--> Fluxes --demodulate--> Stokes --Calibration.apply--> Stokes
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOMES = {
    "Instrument": "hwpol.instrument",
    "FrameSet": "hwpol.frames",
    "Fluxes": "hwpol.fluxes",
    "Stokes": "hwpol.stokes",
    "Calibration": "hwpol.correction",
    "Standard": "hwpol.correction",
    "Night": "hwpol.night",
    "photometer": "hwpol.night",
    "demodulate": "hwpol.demodulation",
    "Flag": "hwpol.flags",
    "HwpolError": "hwpol.errors",
}

__all__ = ["__version__", *_HOMES]


# What must be loaded beside a name for it to work in full.
_COMPANIONS = {"Fluxes": "hwpol.demodulation", "Calibration": "hwpol.demodulation"}


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        return version("hwpol")
    if name in _COMPANIONS:
        import_module(_COMPANIONS[name])
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'hwpol' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
