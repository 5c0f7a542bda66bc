"""What the instrument file says, as frozen objects."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path


@dataclass(frozen=True)
class Section:
    """A FITS section such as ``[1:2048,1:2048]`` as half-open 0-based bounds, x fastest."""

    x0: int
    x1: int
    y0: int
    y1: int


@dataclass(frozen=True)
class Detector:
    """The detector. `gain` electron/adu, `read_noise` electron, `saturation` adu; None where unknown.

    `linearity` holds c0, c1, ... of  true = raw (c0 + c1 raw + ...), raw in adu after bias.
    """

    gain: float | None = None
    read_noise: float | None = None
    saturation: float | None = None
    pixel_scale: float | None = None
    trim: Section | None = None
    overscan: Section | None = None
    extension: int | str = 0
    bad_pixels: Path | None = None
    linearity: tuple[float, ...] = (1.0,)


@dataclass(frozen=True)
class Keyword:
    """Where a header quantity is found and how it is read: value = scale x (header - zero)."""

    keywords: tuple[str, ...]
    scale: float = 1.0
    zero: float = 0.0
    unit: str | None = None
    pattern: str | None = None
    format: str | None = None
    marks: str = "start"
    equinox: str | float | None = None


@dataclass(frozen=True)
class Band:
    """What a filter's header value stands for in the catalogues; wavelength in micron."""

    band: str | None = None
    wavelength: float | None = None


@dataclass(frozen=True)
class WavePlate:
    """The wave plate: psi = sense x scale x (value - zero). `values` maps header text to value first."""

    retardance: float | dict[str, float] = 180.0
    scale: float = 1.0
    zero: float = 0.0
    sense: int = 1
    values: dict[str, float] = field(default_factory=dict)
    tolerance: float = 1.0

    def retardance_of(self, filter_name: str) -> float:
        """Retardance (deg) in one filter; 180 where a table does not list it."""
        if isinstance(self.retardance, dict):
            return self.retardance.get(filter_name, 180.0)
        return self.retardance


@dataclass(frozen=True)
class Beam:
    """One beam. `analyser` deg; `offset` pixels (x, y) from the first beam; None: as [detector] says."""

    name: str
    analyser: float
    offset: tuple[float, float] = (0.0, 0.0)
    section: Section | None = None
    extension: int | str | None = None
    throughput: float = 1.0
    throughput_err: float | None = None
    gain: float | None = None
    read_noise: float | None = None
    saturation: float | None = None
    trim: Section | None = None
    overscan: Section | None = None


@dataclass(frozen=True)
class Orientation:
    """How the instrument sits on the sky; see the measurement model. `position_angle` deg or "parallactic"."""

    mount: str = "equatorial"
    position_angle: float | str = 0.0
    altitude: int = 0
    sense: int = 1
    frame: str = "instrument"


@dataclass(frozen=True)
class Site:
    """Longitude (east positive) and latitude in deg, height in m."""

    longitude: float
    latitude: float
    height: float = 0.0


@dataclass(frozen=True)
class Instrument:
    """The whole description. Keys of `keywords`: kind, object, filter, exposure, time, wave_plate,
    position_angle, ra, dec, airmass, gain. Keys of `kinds`: bias, dark, flat, science (values lower case).
    `clear_filters` holds the header values (lower case) that mean no filter."""

    name: str
    detector: Detector
    keywords: dict[str, Keyword]
    beams: tuple[Beam, ...]
    kinds: dict[str, tuple[str, ...]] = field(default_factory=dict)
    filters: dict[str, Band] = field(default_factory=dict)
    clear_filters: tuple[str, ...] = ()
    wave_plate: WavePlate | None = field(default_factory=WavePlate)
    orientation: Orientation = field(default_factory=Orientation)
    site: Site | None = None
    path: Path | None = None

    @staticmethod
    def read(path: str | Path) -> Instrument:
        """Read and check an instrument file (TOML); ConfigError lists every problem at once."""
        from hwpol.instrument.reading import read_instrument

        return read_instrument(path)

    def extension_of(self, beam: int) -> int | str:
        """HDU that holds one beam."""
        own = self.beams[beam].extension
        return self.detector.extension if own is None else own
