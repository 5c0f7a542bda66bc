"""What the night file says, as frozen objects with the defaults of the file."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from hwpol.instrument.description import Instrument


@dataclass(frozen=True)
class Extent:
    """A radius: `unit` "pixel", "fwhm" (multiples of the seeing) or "best" (chosen from the data; `value` is 0)."""

    value: float
    unit: str = "pixel"

    def pixels(self, fwhm: float) -> float:
        """Return the radius in pixels where the full width at half maximum is `fwhm` pixels.

        Raises
        ------
        ValueError
            For "best", which no single width decides.
        """
        if self.unit == "best":
            raise ValueError('the extent "best" is chosen from the data')
        return self.value * fwhm if self.unit == "fwhm" else self.value

    def __str__(self) -> str:
        return {"best": "best", "fwhm": f"{self.value:g} fwhm"}.get(self.unit, f"{self.value:g}")


@dataclass(frozen=True)
class GroupingConfig:
    """`gap` minutes without a frame end a visit."""

    gap: float = 60.0


@dataclass(frozen=True)
class DetectorConfig:
    """`flat` "pooled", "per-angle" or "off"; `cosmic_rays` "apertures", "frames" or "off"."""

    flat: str = "pooled"
    cosmic_rays: str = "apertures"


@dataclass(frozen=True)
class RegistrationConfig:
    """`method` "stars", "correlation", "header" or "off"."""

    method: str = "stars"


@dataclass(frozen=True)
class PhotometryConfig:
    """`annulus` inner and outer radius of the sky; `sources` "target" or "field"."""

    radius: Extent = Extent(0.0, "best")
    annulus: tuple[Extent, Extent] = (Extent(4.0, "fwhm"), Extent(6.0, "fwhm"))
    sources: str = "target"


@dataclass(frozen=True)
class DemodulationConfig:
    """`method` "least-squares", "double-difference" or "double-ratio"; `gain` "visit", "cycle", "night" or "fixed"."""

    method: str = "least-squares"
    gain: str = "visit"
    circular: bool = False


@dataclass(frozen=True)
class ForegroundConfig:
    """`method` "off", "field" or "value"; q, u and errors are fractions on the sky, None unless "value".

    `wavelength` (micron) of the values given and `reddening` E(B-V) (mag) may be known.
    """

    method: str = "off"
    q: float | None = None
    u: float | None = None
    q_err: float | None = None
    u_err: float | None = None
    wavelength: float | None = None
    reddening: float | None = None


@dataclass(frozen=True)
class CorrectionConfig:
    """`calibration` "fit", "off" or the path of a file; `efficiency` "fit", a number, or numbers by filter.

    `field_order` is the order of the polynomial in detector position or "best".
    """

    calibration: str | Path = "fit"
    catalogues: tuple[Path, ...] = ()
    efficiency: str | float | dict[str, float] = "fit"
    field_order: int | str = 0
    foreground: ForegroundConfig = field(default_factory=ForegroundConfig)


@dataclass(frozen=True)
class StatisticsConfig:
    """`estimator` of the de-biased p; `level` of the intervals, a probability."""

    estimator: str = "modified-asymptotic"
    level: float = 0.6827


@dataclass(frozen=True)
class ProductsConfig:
    """`formats` of "ecsv", "fits", "votable"; whether the page is drawn."""

    formats: tuple[str, ...] = ("ecsv",)
    report: bool = True


@dataclass(frozen=True)
class TargetConfig:
    """One target. `ra`, `dec` deg (ICRS); `xy` pixels (0-based, first beam, first frame); None where not given.

    `role` is "science", "zero-polarised" or "polarised"; None leaves it to the catalogues.
    """

    name: str
    object: str | None = None
    role: str | None = None
    catalogue: str | None = None
    ra: float | None = None
    dec: float | None = None
    xy: tuple[float, float] | None = None
    moving: bool = False


@dataclass(frozen=True)
class MapSky:
    """Where a map's sky comes from: `kind` "border", "object" (an offset exposure), "circle" (x, y, r pixels)."""

    kind: str = "border"
    object: str | None = None
    circle: tuple[float, float, float] | None = None


@dataclass(frozen=True)
class MapConfig:
    """One map: `size` pixels round the target or `box` x0, x1, y0, y1; `bin` pixels or `snr` of adaptive bins."""

    target: str
    size: int | None = 200
    box: tuple[int, int, int, int] | None = None
    bin: int | None = 4
    snr: float | None = None
    sky: MapSky = MapSky()


@dataclass(frozen=True)
class NightConfig:
    """A night file, checked. Paths are absolute, `frames` and `exclude` are patterns that start at `folder`."""

    instrument_path: Path
    instrument: Instrument
    frames: tuple[str, ...]
    output: Path
    exclude: tuple[str, ...] = ()
    grouping: GroupingConfig = field(default_factory=GroupingConfig)
    detector: DetectorConfig = field(default_factory=DetectorConfig)
    registration: RegistrationConfig = field(default_factory=RegistrationConfig)
    photometry: PhotometryConfig = field(default_factory=PhotometryConfig)
    demodulation: DemodulationConfig = field(default_factory=DemodulationConfig)
    correction: CorrectionConfig = field(default_factory=CorrectionConfig)
    statistics: StatisticsConfig = field(default_factory=StatisticsConfig)
    products: ProductsConfig = field(default_factory=ProductsConfig)
    targets: tuple[TargetConfig, ...] = ()
    maps: tuple[MapConfig, ...] = ()
    folder: Path = Path()
    path: Path | None = None
