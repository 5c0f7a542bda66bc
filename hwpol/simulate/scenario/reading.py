"""`Scenario`: a night to be simulated, read from a TOML file or a tree of the same layout.

A scenario names what is true; the instrument file in it says how headers
express it. Its sections (all keys, their defaults and meaning: `known_keys`)::

    name, seed, catalogue_seed, start, overhead, slew
    instrument = "file.toml"      # or [instrument] with the content of an instrument file
    [array]        shape, bias, dark, pixel_response, cosmic_rays, ...   the detector's truth
    [optics]       plate_diattenuation, setting_noise, wobble, ...
    [[beam]]       shift, scale, quadratic, fwhm, throughput             how beams depart from the file
    [filters.V]    ip, ip_tel, ip_drift, ip_field, efficiency, zero_angle, retardance, sky
    [atmosphere]   seeing, seeing_change, beta, clouds, ...
    [guiding]      drift, jitter, pointing
    [sky]          p, theta, gradient, change
    [[target]]     name, ra, dec, role, rate, p, theta (or q, u), v, xy, motion, theta_rate, ...
    [[target.companion]]  [target.field]  [target.nebula]
    [[block]]      kind, targets, filters, angles, cycles, exposure, ...  exposures, in order
    [[fault]]      kind, frames, amount, beam                            what goes wrong
    [headers]      format, extra, sexagesimal, wcs
    [night]        anything to be added to the night file
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from hwpol.errors import ConfigError
from hwpol.instrument import Instrument
from hwpol.instrument.toml_check import KeyInfo, known_keys_of, read_toml, read_tree
from hwpol.simulate.optics import Train
from hwpol.simulate.scenario.keys import SCENARIO
from hwpol.simulate.scenario.scene import (
    Array,
    Atmosphere,
    BeamTruth,
    Block,
    Fault,
    FilterTruth,
    Guiding,
    Headers,
    Optics,
    Sky,
    Target,
    in_filter,
)

SAME_ANGLE = 0.01  # deg: coarser than any rounding of positions in a value map, finer than any step


@dataclass(frozen=True)
class Scenario:
    """A night to be simulated; fields as the sections of the file, see `known_keys`.

    `instrument_tree` is the content of the instrument file, `start` UTC.
    """

    name: str
    seed: int
    catalogue_seed: int | None
    start: str
    overhead: float
    slew: float
    instrument: Instrument
    instrument_tree: Mapping[str, Any]
    array: Array
    optics: Optics
    beams: tuple[BeamTruth, ...]
    filters: Mapping[str, FilterTruth]
    atmosphere: Atmosphere
    guiding: Guiding
    sky: Sky
    targets: tuple[Target, ...]
    blocks: tuple[Block, ...]
    faults: tuple[Fault, ...]
    headers: Headers
    night: Mapping[str, Any]

    @staticmethod
    def read(path: str | Path) -> Scenario:
        """Read and check a scenario file; ConfigError lists every problem at once."""
        return Scenario.from_dict(read_toml(path), source=str(path), folder=Path(path).absolute().parent)

    @staticmethod
    def from_dict(tree: Mapping[str, Any], *, source: str = "", folder: Path | None = None) -> Scenario:
        """Check a tree laid out as a scenario file; relative paths start at `folder`.

        Raises
        ------
        ConfigError
            With a line for each problem.
        """
        values = read_tree(SCENARIO, tree, source=source, folder=folder)
        instrument, instrument_tree = values.pop("instrument")
        beams = values.pop("beam")
        missing = len(instrument.beams) - len(beams)
        scenario = Scenario(
            instrument=instrument,
            instrument_tree=instrument_tree,
            beams=(*beams, *(BeamTruth() for _ in range(missing))),
            targets=values.pop("target"),
            blocks=values.pop("block"),
            faults=values.pop("fault"),
            **values,
        )
        problems = _contradictions(scenario)
        if problems:
            raise ConfigError(problems, source)
        return scenario

    def target(self, name: str) -> Target:
        """The target of this name."""
        return next(target for target in self.targets if target.name == name)

    def train(self, filter_name: str, hours: float = 0.0) -> Train:
        """The optical train in one filter, the truth throughout, `hours` after the start."""
        truth = self.filters[filter_name]
        plate = self.instrument.wave_plate
        nominal = 180.0 if plate is None else plate.retardance_of(filter_name)
        return Train(
            analyser=tuple(beam.analyser for beam in self.instrument.beams),
            throughput=tuple(
                beam.throughput if own.throughput is None else own.throughput
                for beam, own in zip(self.instrument.beams, self.beams, strict=True)
            ),
            retardance=nominal if truth.retardance is None else truth.retardance,
            plate_diattenuation=self.optics.plate_diattenuation,
            ip=truth.ip + hours * truth.ip_drift,
            ip_tel=truth.ip_tel,
            ip_field=truth.ip_field,
            efficiency=truth.efficiency,
            zero_angle=truth.zero_angle,
            sense=self.instrument.orientation.sense,
        )


def shipped_scenarios() -> dict[str, Path]:
    """Paths of the scenario files that come with the package, by name."""
    folder = Path(__file__).parents[1] / "scenarios"
    return {path.stem: path for path in sorted(folder.glob("*.toml"))}


def known_keys() -> dict[str, KeyInfo]:
    """Every key of a scenario file by dotted name: what is allowed, its default, what it means."""
    return known_keys_of(SCENARIO)


def _contradictions(scenario: Scenario) -> list[str]:
    """Problems between sections, in words."""
    instrument, problems = scenario.instrument, []
    if len(scenario.beams) > len(instrument.beams):
        problems.append(f"beam: {len(scenario.beams)} tables, expected at most {len(instrument.beams)}")
    names = [target.name for target in scenario.targets]
    problems += [f"target: the name {name!r} stands twice" for name in sorted({n for n in names if names.count(n) > 1})]
    for number, block in enumerate(scenario.blocks, 1):
        problems += _block_problems(scenario, block, f"block[{number}]", names)
    gains = [instrument.detector.gain, scenario.array.gain, *(beam.gain for beam in instrument.beams)]
    if all(gain is None for gain in gains):
        problems.append("array.gain: missing, expected a number (electron/adu), as the instrument states none")
    if instrument.detector.pixel_scale is None and scenario.targets:
        problems.append("instrument.detector.pixel_scale: missing, expected a number (arcsec/pixel)")
    for quantity in scenario.headers.format:
        if quantity not in instrument.keywords:
            problems.append(
                f"headers.format.{quantity}: unknown, expected one of {', '.join(sorted(instrument.keywords))}"
            )
    for number, fault in enumerate(scenario.faults, 1):
        if fault.kind == "hit" and (fault.amount <= 0 or fault.beam >= len(instrument.beams)):
            problems.append(f"fault[{number}]: a hit has amount > 0 electrons and beam below {len(instrument.beams)}")
        if fault.kind == "cloud" and not 0 <= fault.amount <= 1:
            problems.append(f"fault[{number}].amount = {fault.amount:g}: expected a transparency from 0 to 1")
    if instrument.site is None and any(truth.ip_tel for truth in scenario.filters.values()):
        problems.append("instrument.site: missing, expected with ip_tel, which turns with the parallactic angle")
    return problems


def _block_problems(scenario: Scenario, block: Block, place: str, names: list[str]) -> list[str]:
    problems = []
    for name in block.targets:
        if name not in names:
            problems.append(f"{place}.targets: {name!r} is no target, expected one of {', '.join(names)}")
    for name in block.filters:
        if name not in scenario.filters:
            problems.append(f"{place}.filters: {name!r} unknown, expected one of {', '.join(scenario.filters)}")
    if block.kind in ("flat", "science") and not block.filters:
        problems.append(f"{place}.filters: missing, expected at least one filter")
    if block.kind == "science" and not block.targets:
        problems.append(f"{place}.targets: missing, expected at least one target")
    if block.kind in ("dark", "science") and any(not in_filter(block.exposure, f) for f in block.filters or ("",)):
        problems.append(f"{place}.exposure: missing, expected seconds > 0 in every filter")
    plate = scenario.instrument.wave_plate
    if block.angles and plate is None:
        problems.append(f"{place}.angles: expected none, as the instrument has no wave plate")
    if block.kind == "science" and not block.angles and plate is not None:
        problems.append(f"{place}.angles: missing, expected the plate's angles psi in degrees")
    if plate is not None and plate.values:
        known = [(plate.sense * plate.scale * (value - plate.zero)) % 360 for value in plate.values.values()]
        for angle in block.angles:
            if not any(abs((angle - one + 180) % 360 - 180) < SAME_ANGLE for one in known):
                shown = ", ".join(f"{one:g}" for one in sorted(set(known)))
                problems.append(f"{place}.angles = {angle:g}: no entry of wave_plate.values, which reach {shown}")
    return problems
