"""Standards of one or several nights against their catalogue values, and one calibration from them all."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table

from hwpol.correction import Calibration, Standard
from hwpol.correction.fitting.nights import compare_nights
from hwpol.errors import InputError
from hwpol.night.calibrate import Measured, find_calibration, observed_value
from hwpol.night.config_objects import DemodulationConfig
from hwpol.night.run import Night, Progress, nights_of
from hwpol.products import make_table, write_table
from hwpol.stokes import Stokes


@dataclass(frozen=True)
class StandardsCheck:
    """The table of standards, the calibration they give (None if they give none), and notes in words.

    `agreement` tells how far each night departs from the others (`hwpol.correction.fitting.nights.compare_nights`).
    """

    standards: Table
    calibration: Calibration | None
    notes: tuple[str, ...]
    agreement: tuple[dict[str, Any], ...] = ()

    def write(self, folder: Path) -> list[Path]:
        """Write standards.ecsv and calibration.toml into a folder; return their paths."""
        written = [write_table(self.standards, folder / "standards.ecsv")]
        if self.calibration is not None:
            self.calibration.write(folder / "calibration.toml")
            written.append(folder / "calibration.toml")
        return written


def check_standards(
    nights: Sequence[Night], *, executor: Executor | None = None, progress: Progress | None = None
) -> StandardsCheck:
    """Measure the standards of all nights (finished visits are taken up) and fit one calibration to them.

    Visits are numbered on from night to night; the table's metadata say which numbers are whose.

    Raises
    ------
    InputError
        When no night holds a standard.
    """
    items: list[Measured] = []
    notes: list[str] = []
    dates: list[str] = []
    visits: dict[str, str] = {}
    origin: dict[int, str] = {}
    offset = 0
    for number, night in enumerate(nights, start=1):
        measured = night.standards(executor=executor, progress=progress)
        name = str(night.config.path or f"night {number}")
        last = offset + max((int(v) for v in measured.frames.column("visit")), default=0)
        visits[name] = f"{offset + 1}-{last}"
        origin |= dict.fromkeys(range(offset + 1, last + 1), name)
        items += [replace(item, visit=item.visit + offset) for item in measured.items]
        notes += [f"{name}: {note}" if len(nights) > 1 else note for note in measured.notes]
        notes += [f"{name}: visit {v} could not be measured: {why}" for v, why in measured.failed.items()]
        dates += nights_of(measured.frames)
        offset = last
    if not any(item.role.entry is not None for item in items):
        raise InputError(
            "standards: no target of these nights is a standard star with a catalogue value in its filter; "
            "see hwpol plan"
        )
    config = nights[0].config
    calibration, more = find_calibration(
        items,
        replace(config.correction, calibration="fit"),
        config.demodulation,
        frame=config.instrument.orientation.frame,
        instrument=config.instrument.name,
        nights=tuple(dict.fromkeys(dates)),
        field_range=None,
    )
    rows = [] if calibration is None else calibration.standards_table()
    agreement: list[dict[str, Any]] = []
    if calibration is not None and len(nights) > 1:
        agreement = _compare(items, origin, calibration, config.demodulation, config.instrument.orientation.frame)
    return StandardsCheck(
        standards=make_table(rows, "standards", {"instrument": config.instrument.name, "visits": visits}),
        calibration=calibration,
        notes=tuple(dict.fromkeys([*notes, *more])),
        agreement=tuple(agreement),
    )


def _compare(
    items: Sequence[Measured],
    origin: dict[int, str],
    calibration: Calibration,
    demodulation: DemodulationConfig,
    frame: str,
) -> list[dict[str, Any]]:
    """How far each night departs from the others; standards in a turning field take no part."""
    standards, nights = [], []
    for item in items:
        value = observed_value(item, demodulation, frame) if item.role.entry is not None else None
        if isinstance(value, Stokes) and np.isfinite(value.q).all() and item.role.entry is not None:
            standards.append(Standard.from_entry(value, item.role.entry, name=item.name, visit=item.visit))
            nights.append(origin[item.visit])
    return compare_nights(standards, nights, calibration) if len(set(nights)) > 1 else []
