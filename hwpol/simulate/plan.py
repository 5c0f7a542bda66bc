"""The night as it passes: every exposure with its time, angles, seeing, transparency and place."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d

from hwpol.errors import ConfigError
from hwpol.simulate.scenario import Block, Scenario, in_filter

EXPOSURES, WALKS, FIELDS, DETECTOR, CATALOGUE, GUIDING, POINTING = range(7)
_STEPS = 5  # samples of a random walk in one correlation time


def child(seed: int, *key: int) -> np.random.Generator:
    """The generator of one thing in the night, independent of all others."""
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=key))


@dataclass(frozen=True)
class Exposure:
    """One frame as it truly was.

    `start` MJD UTC; `hours` from the start of the night to mid-exposure;
    angles deg; `psi_header` what the header will say (NaN without a plate),
    `psi` the truth; `fwhm` pixels; `shift` pixels, the
    plate's wobble included; `visit`, `cycle`, `position` from 1, -1 for none;
    `faults` pairs of kind and amount, with the beam for hits.
    """

    number: int
    kind: str
    block: int
    target: str = ""
    filter: str = ""
    seconds: float = 0.0
    start: float = 0.0
    hours: float = 0.0
    psi_header: float = np.nan
    psi: float = np.nan
    chi: float = 0.0
    eta: float = np.nan
    altitude: float = np.nan
    transparency: float = 1.0
    fwhm: float = np.nan
    elongation: float = 0.0
    shift: tuple[float, float] = (0.0, 0.0)
    sky: float = 1.0
    visit: int = -1
    cycle: int = -1
    position: int = -1
    faults: tuple[tuple[str, float, int], ...] = ()

    @property
    def file(self) -> str:
        """Name of the file."""
        return f"night_{self.number:04d}.fits"

    @property
    def middle(self) -> float:
        """MJD of mid-exposure."""
        return self.start + self.seconds / 172800.0

    def has(self, fault: str) -> bool:
        """Whether this fault befalls the frame."""
        return any(kind == fault for kind, _, _ in self.faults)


def plan(scenario: Scenario) -> tuple[Exposure, ...]:
    """Lay out the night in time order; nothing of pixels is decided here."""
    exposures = list(_schedule(scenario))
    for number, fault in enumerate(scenario.faults, 1):
        for frame in fault.frames:
            if frame > len(exposures):
                raise ConfigError(
                    f"fault[{number}].frames = {frame}: expected 1 to {len(exposures)}, the frames of this night"
                )
            old = exposures[frame - 1]
            exposures[frame - 1] = replace(old, faults=(*old.faults, (fault.kind, fault.amount, fault.beam)))
    exposures = _pointed(scenario, exposures)
    exposures = _weather(scenario, exposures)
    exposures = _mechanics(scenario, exposures)
    return tuple(_visits(scenario, exposures))


def _schedule(scenario: Scenario) -> Iterator[Exposure]:
    from astropy.time import Time

    first = float(Time(scenario.start, scale="utc").mjd)
    clock, pointed, number = 0.0, "", 0
    for index, block in enumerate(scenario.blocks):
        earliest = 0.0 if block.at is None else block.at * 3600.0
        for target, filter_name, cycle, position, angle in _order(block):
            if target and pointed and target != pointed:
                clock += scenario.slew
            clock = max(clock, earliest)
            pointed = target or pointed
            number += 1
            seconds = 0.0 if block.kind == "bias" else in_filter(block.exposure, filter_name)
            psi = np.nan if scenario.instrument.wave_plate is None else angle
            yield Exposure(
                number=number,
                kind=block.kind,
                block=index,
                target=target,
                filter=filter_name,
                seconds=seconds,
                start=first + clock / 86400.0,
                hours=(clock + seconds / 2) / 3600.0,
                psi=psi,
                psi_header=psi,
                cycle=cycle,
                position=position,
            )
            clock += seconds + scenario.overhead


def _order(block: Block) -> Iterator[tuple[str, str, int, int, float]]:
    """Target, filter, cycle, position and plate angle of each frame of a block."""
    angles = block.angles or (np.nan,)
    if block.kind in ("bias", "dark"):
        yield from (("", "", -1, -1, 0.0) for _ in range(block.frames))
    elif block.kind == "flat":
        for filter_name in block.filters:
            for angle in block.angles or (0.0,):
                yield from (("", filter_name, -1, -1, angle) for _ in range(block.frames))
    else:
        passes = [(f, c) for f in block.filters for c in range(1, block.cycles + 1)]
        if block.order == "cycles":
            passes.sort(key=lambda one: one[1])
        for filter_name, cycle in passes:
            for target in block.targets:
                for position, angle in enumerate(angles, 1):
                    yield target, filter_name, cycle, position, angle


def _pointed(scenario: Scenario, exposures: list[Exposure]) -> list[Exposure]:
    """Add parallactic angle, altitude and the position angle of the instrument."""
    orientation = scenario.instrument.orientation
    found = list(exposures)
    for target in scenario.targets:
        mine = [i for i, one in enumerate(exposures) if one.target == target.name]
        if not mine:
            continue
        eta, altitude = _horizon(scenario, target.ra, target.dec, np.array([exposures[i].middle for i in mine]))
        for i, angle, height in zip(mine, eta, altitude, strict=True):
            own = scenario.blocks[exposures[i].block].position_angle
            if orientation.position_angle == "parallactic":
                chi = angle + orientation.altitude * height
            else:
                chi = float(orientation.position_angle) if own is None else own
            found[i] = replace(exposures[i], eta=float(angle), altitude=float(height), chi=float(chi % 360))
    return found


def _horizon(scenario: Scenario, ra: float, dec: float, mjd: NDArray[np.float64]) -> tuple[Any, Any]:
    """Position angle of the zenith at the target (ICRS north through east) and altitude, deg; NaN without a site."""
    from astropy import units as u
    from astropy.coordinates import AltAz, EarthLocation, SkyCoord
    from astropy.time import Time
    from astropy.utils import iers

    site = scenario.instrument.site
    if site is None:
        return np.full(mjd.shape, np.nan), np.full(mjd.shape, np.nan)
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("iers_degraded_accuracy", "ignore"):
        place = EarthLocation(lon=site.longitude * u.deg, lat=site.latitude * u.deg, height=site.height * u.m)
        frame = AltAz(obstime=Time(mjd, format="mjd", scale="utc"), location=place)
        star = SkyCoord(ra * u.deg, dec * u.deg)
        zenith = SkyCoord(np.zeros(mjd.shape) * u.deg, np.full(mjd.shape, 90.0) * u.deg, frame=frame).icrs
        eta = SkyCoord(star.ra, star.dec).position_angle(SkyCoord(zenith.ra, zenith.dec)).deg
        altitude = star.transform_to(frame).alt.deg
    low = altitude.min()
    if low < 5:
        raise ConfigError(
            f"target at ra {ra}, dec {dec}: altitude down to {low:.0f} deg, expected 5 or more; change start or ra"
        )
    return eta, altitude


def _walk(rng: np.random.Generator, minutes: NDArray[np.float64], scale: float) -> NDArray[np.float64]:
    """A smooth random function of time of mean 0 and variance 1, changing over `scale` minutes."""
    grid = minutes / scale * _STEPS
    noise = rng.standard_normal(int(grid.max(initial=0.0)) + 10 * _STEPS)
    smooth = gaussian_filter1d(noise, _STEPS / 2.0, mode="wrap") * np.sqrt(np.sqrt(np.pi) * _STEPS)
    return np.asarray(np.interp(grid + 4 * _STEPS, np.arange(noise.size), smooth))


def _weather(scenario: Scenario, exposures: list[Exposure]) -> list[Exposure]:
    """Add seeing, transparency and the sky's changes."""
    from scipy.special import ndtr

    air = scenario.atmosphere
    minutes = np.array([one.hours * 60.0 for one in exposures])
    seeing = air.seeing * np.exp(air.seeing_change * _walk(child(scenario.seed, WALKS, 0), minutes, air.seeing_time))
    clear = 1.0 - air.clouds * ndtr(_walk(child(scenario.seed, WALKS, 1), minutes, air.cloud_time))
    found = []
    for one, fwhm, light in zip(exposures, seeing, clear, strict=True):
        rng = child(scenario.seed, WALKS, 2, one.number)
        flicker = np.exp(air.scintillation * rng.standard_normal() - air.scintillation**2 / 2)
        sky = np.exp(scenario.sky.change * rng.standard_normal())
        elongation = rng.uniform(0, 180)
        cloud = np.prod([amount for kind, amount, _ in one.faults if kind == "cloud"])
        if one.kind == "science":
            one = replace(one, fwhm=float(fwhm), transparency=float(light * flicker * cloud), sky=float(sky),
                          elongation=float(elongation))  # fmt: skip
        found.append(one)
    return found


def _mechanics(scenario: Scenario, exposures: list[Exposure]) -> list[Exposure]:
    """Add what plate and guiding truly did."""
    optics, guiding = scenario.optics, scenario.guiding
    found: list[Exposure] = []
    pointing, since, last = 0, 0, ("", -1)
    for one in exposures:
        rng = child(scenario.seed, GUIDING, one.number)
        psi = one.psi + optics.setting_noise * rng.standard_normal()
        if one.has("stuck") and found:
            psi = found[-1].psi
        header = one.psi_header + sum(amount for kind, amount, _ in one.faults if kind == "mislabelled")
        if one.kind == "science":
            if (one.target, one.block) != last:
                pointing += 1
                since = since if one.block == last[1] else 0
            last = (one.target, one.block)
            offset = guiding.pointing * child(scenario.seed, POINTING, pointing).standard_normal(2)
            offset = offset + since * np.array(guiding.drift) + guiding.jitter * rng.standard_normal(2)
            phase = np.deg2rad(optics.wobble_phase + (0.0 if np.isnan(psi) else psi))
            offset = offset + optics.wobble * np.array([np.cos(phase), np.sin(phase)])
            since += 1
            one = replace(one, shift=(float(offset[0]), float(offset[1])))
        found.append(replace(one, psi=float(psi), psi_header=float(header)))
    return found


def _visits(scenario: Scenario, exposures: list[Exposure]) -> Iterator[Exposure]:
    """Number the visits in order of their first frame, and the cycles in each."""
    gap = float(scenario.night.get("grouping", {}).get("gap", 60.0)) / 1440.0
    latest: dict[tuple[str, str], tuple[int, float, int, tuple[int, int]]] = {}
    count = 0
    for one in exposures:
        if one.kind == "science":
            key = (one.target, one.filter)
            visit, end, cycle, block_cycle = latest.get(key, (0, -np.inf, 0, (-1, -1)))
            if one.start - end > gap:
                count += 1
                visit, cycle, block_cycle = count, 0, (-1, -1)
            if (one.block, one.cycle) != block_cycle:
                cycle, block_cycle = cycle + 1, (one.block, one.cycle)
            latest[key] = (visit, one.start + one.seconds / 86400.0, cycle, block_cycle)
            one = replace(one, visit=visit, cycle=cycle)
        yield one
