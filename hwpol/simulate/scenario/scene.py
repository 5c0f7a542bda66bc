"""What a scenario says, as frozen objects; the keys, their units and defaults are in `keys`."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

PerFilter = float | Mapping[str, float]


def in_filter(value: PerFilter | None, filter_name: str, default: float = 0.0) -> float:
    """A value given once or per filter; `default` where nothing is said of this filter."""
    if value is None:
        return default
    if isinstance(value, Mapping):
        return float(value.get(filter_name, default))
    return float(value)


@dataclass(frozen=True)
class Light:
    """Rate (electrons/s) and polarisation on the sky, each a number or a table per filter."""

    rate: PerFilter = 0.0
    q: PerFilter | None = None
    u: PerFilter | None = None
    p: PerFilter | None = None
    theta: PerFilter | None = None
    v: PerFilter = 0.0

    def stokes(self, filter_name: str) -> tuple[float, float, float]:
        """q, u, v on the sky in one filter."""
        v = in_filter(self.v, filter_name)
        if self.p is None:
            return in_filter(self.q, filter_name), in_filter(self.u, filter_name), v
        twice = 2 * np.deg2rad(in_filter(self.theta, filter_name))
        p = in_filter(self.p, filter_name)
        return float(p * np.cos(twice)), float(p * np.sin(twice)), v


@dataclass(frozen=True)
class Source(Light):
    """A star beside the target: east, north in arcsec."""

    east: float = 0.0
    north: float = 0.0


@dataclass(frozen=True)
class Field:
    """Stars scattered at random over the first beam's area."""

    stars: int
    brightest: float
    faintest: float
    p: float = 0.0
    theta: float = 0.0
    p_scatter: float = 0.0
    separation: float = 0.0


@dataclass(frozen=True)
class Nebula:
    """A smooth polarised nebula centred on the target, 1/rho outside its core."""

    surface: PerFilter
    core: float = 2.0
    extent: float = 60.0
    p: float = 0.1
    pattern: str = "tangential"
    theta: float = 0.0

    def stokes(self, rho: Any, position_angle: Any, filter_name: str) -> tuple[Any, Any, Any]:
        """I, Q, U per pixel (electrons/s; sky frame) at `rho` pixels and `position_angle` deg from the centre.

        I = surface x 10 / sqrt(rho^2 + core^2) x exp(-(rho/extent)^2),
        p = p x rho^2 / (rho^2 + core^2).
        """
        squared = np.square(rho) + self.core**2
        i = in_filter(self.surface, filter_name) * 10 / np.sqrt(squared) * np.exp(-np.square(rho / self.extent))
        p = self.p * np.square(rho) / squared
        theta = {"uniform": self.theta, "radial": position_angle, "tangential": position_angle + 90.0}[self.pattern]
        twice = np.deg2rad(2.0 * np.asarray(theta))
        return i, i * p * np.cos(twice), i * p * np.sin(twice)


@dataclass(frozen=True)
class Target(Light):
    """A pointing and what lies there."""

    name: str = ""
    ra: float = 0.0
    dec: float = 0.0
    role: str = "science"
    vmag: float = 12.0
    p_err: float = 0.0003
    theta_err: float = 0.2
    catalogue_shift: tuple[float, float] = (0.0, 0.0)
    p_rate: float = 0.0
    theta_rate: float = 0.0
    xy: tuple[float, float] | None = None
    motion: tuple[float, float] = (0.0, 0.0)
    companion: tuple[Source, ...] = ()
    field: Field | None = None
    nebula: Nebula | None = None


@dataclass(frozen=True)
class Block:
    """Exposures of one kind, in a row."""

    kind: str = "science"
    frames: int = 1
    targets: tuple[str, ...] = ()
    filters: tuple[str, ...] = ()
    angles: tuple[float, ...] = ()
    cycles: int = 1
    exposure: PerFilter = 0.0
    order: str = "filters"
    at: float | None = None
    position_angle: float | None = None
    level: float = 30000.0
    p: float = 0.0
    theta: float = 0.0


@dataclass(frozen=True)
class Fault:
    """Something that goes wrong in the frames numbered from 1."""

    kind: str
    frames: tuple[int, ...]
    amount: float = 0.0
    beam: int = 0


@dataclass(frozen=True)
class Array:
    """The detector's truth beside what the instrument file says."""

    shape: tuple[int, int]
    bias: float = 1000.0
    bias_drift: float = 0.0
    bias_columns: float = 0.0
    dark: float = 0.0
    pixel_response: float = 0.0
    vignetting: float = 0.0
    dust: int = 0
    bad_pixels: int = 0
    bad_columns: tuple[int, ...] = ()
    cosmic_rays: float = 0.0
    gain: float | None = None
    read_noise: float | None = None


@dataclass(frozen=True)
class Optics:
    """The wave plate's truth."""

    plate_diattenuation: float = 0.0
    setting_noise: float = 0.0
    wobble: float = 0.0
    wobble_phase: float = 0.0


@dataclass(frozen=True)
class BeamTruth:
    """How a beam departs from the instrument file."""

    shift: tuple[float, float] = (0.0, 0.0)
    scale: float = 0.0
    quadratic: float = 0.0
    fwhm: float = 1.0
    throughput: float | None = None


@dataclass(frozen=True)
class FilterTruth:
    """Instrumental polarisation, efficiency, zero angle and sky level in one filter."""

    ip: complex = 0j
    ip_tel: complex = 0j
    ip_drift: complex = 0j
    ip_field: Mapping[str, complex] = field(default_factory=dict)
    efficiency: float = 1.0
    zero_angle: float = 0.0
    retardance: float | None = None
    sky: float = 0.0


@dataclass(frozen=True)
class Atmosphere:
    """Seeing and clouds."""

    seeing: float = 4.0
    seeing_change: float = 0.0
    seeing_time: float = 10.0
    beta: float = 3.0
    ellipticity: float = 0.0
    clouds: float = 0.0
    cloud_time: float = 3.0
    scintillation: float = 0.0


@dataclass(frozen=True)
class Guiding:
    """Motion of the image, pixels."""

    drift: tuple[float, float] = (0.0, 0.0)
    jitter: float = 0.0
    pointing: float = 0.0


@dataclass(frozen=True)
class Sky:
    """Polarisation and run of the sky's light."""

    p: float = 0.0
    theta: float = 0.0
    gradient: tuple[float, float] = (0.0, 0.0)
    change: float = 0.0


@dataclass(frozen=True)
class Headers:
    """Habits of the headers beside those of the instrument file."""

    format: Mapping[str, str] = field(default_factory=dict)
    extra: Mapping[str, Any] = field(default_factory=dict)
    sexagesimal: bool = True
    wcs: bool = False
