"""Standards of one or several nights against their catalogue values, and one calibration from them all."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, replace
from pathlib import Path

from astropy.table import Table

from hwpol.correction import Calibration
from hwpol.errors import InputError
from hwpol.night.calibrate import Measured, find_calibration
from hwpol.night.run import Night, Progress, nights_of
from hwpol.products import make_table, write_table


@dataclass(frozen=True)
class StandardsCheck:
    """The table of standards, the calibration they give (None if they give none), and notes in words."""

    standards: Table
    calibration: Calibration | None
    notes: tuple[str, ...]

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
    offset = 0
    for number, night in enumerate(nights, start=1):
        measured = night.standards(executor=executor, progress=progress)
        name = str(night.config.path or f"night {number}")
        last = offset + max((int(v) for v in measured.frames.column("visit")), default=0)
        visits[name] = f"{offset + 1}-{last}"
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
    return StandardsCheck(
        standards=make_table(rows, "standards", {"instrument": config.instrument.name, "visits": visits}),
        calibration=calibration,
        notes=tuple(dict.fromkeys([*notes, *more])),
    )
