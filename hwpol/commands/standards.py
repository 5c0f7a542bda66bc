"""`hwpol standards`: standards against catalogue values, over one or several nights; and what the tables hold."""

from __future__ import annotations

import argparse
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from hwpol.commands import ASIDE, DONE
from hwpol.commands.running import add_execution, executor_for
from hwpol.commands.screen import Steps, calibration_lines, degrees, notes, standards_table, table, with_error
from hwpol.errors import ConfigError, InputError

#: Chance below which a night is said to depart from the others.
DEPARTS = 1e-3


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("night", nargs="*", help="night files (TOML) of one instrument")
    parser.add_argument("--output", metavar="FOLDER", help="folder for standards.ecsv and calibration.toml "
                        "(default: the night's output; for several nights a folder 'standards')")  # fmt: skip
    parser.add_argument("--list", action="store_true", help="show the standard-star tables instead")
    parser.add_argument("--band", metavar="BAND", help="with --list: this band only")
    parser.add_argument("--up", metavar="DATE", help="with --list and a night file: those observable from its "
                        "site that night (evening date, 2026-03-14)")  # fmt: skip
    add_execution(parser)


def run(options: argparse.Namespace) -> int:
    """Check standards, or list them."""
    if options.list or options.up or options.band:
        return _list(options)
    if not options.night:
        raise ConfigError("standards: give one or more night files, or --list to see the tables")
    from hwpol.night import Night

    nights = [Night.read(path) for path in options.night]
    names = {night.config.instrument.name for night in nights}
    if len(names) > 1:
        raise InputError(
            f"standards: the nights are of different instruments ({', '.join(sorted(names))}); expected one"
        )
    from hwpol.night.check import check_standards

    with executor_for(options) as executor:
        check = check_standards(nights, executor=executor, progress=Steps(options.quiet))
    folder = (
        Path(options.output) if options.output else (nights[0].config.output if len(nights) == 1 else Path("standards"))
    )
    if len(check.standards):
        print(standards_table(check.standards))
    if check.calibration is not None:
        print("\nCalibration from these standards:")
        for line in calibration_lines(check.calibration):
            print(f"  {line}")
    if check.agreement:
        print("\nEach night against the others:")
        print(_agreement(check.agreement))
    text = notes(check.notes)
    if text:
        print(f"\n{text}")
    for path in check.write(folder):
        print(f"Written: {path}")
    doubted = any(str(text) for text in check.standards["doubt"]) if len(check.standards) else True
    return ASIDE if doubted or check.calibration is None else DONE


def _agreement(rows: Sequence[Mapping[str, Any]]) -> str:
    shown = [
        [str(row["night"]), str(row["filter"]), with_error(row["d_ip_q"], row["d_ip_q_err"]),
         with_error(row["d_ip_u"], row["d_ip_u_err"]), degrees(row["d_zero_angle"], row["d_zero_angle_err"]),
         f"{row['d_efficiency']:+.4f}",
         "agrees" if not row["chance"] < DEPARTS else f"departs (chance {row['chance']:.1g})"]
        for row in rows
    ]  # fmt: skip
    head = ["night", "filter", "d ip q (%)", "d ip u (%)", "d zero (deg)", "d efficiency", "remarks"]
    return table(head, shown)


def _list(options: argparse.Namespace) -> int:
    from hwpol.correction.catalogue import Catalogue
    from hwpol.correction.catalogue.listing import listing

    site: Any = None
    extra: list[Path] = []
    if options.night:
        from hwpol.night import Night

        config = Night.read(options.night[0]).config
        site, extra = config.instrument.site, list(config.correction.catalogues)
    if options.up and site is None:
        raise ConfigError(
            "--up needs a night file whose instrument has a [site]: hwpol standards night.toml --list --up DATE"
        )
    found = listing(Catalogue.read(extra), band=options.band, date=options.up, site=site)
    rows = [_readable(row) for row in found]
    if not rows:
        print("no standard star fits")
        return ASIDE
    head = list(rows[0])
    print(table(head, [[str(row[name]) for name in head] for row in rows]))
    return DONE


def _readable(row: dict[str, Any]) -> dict[str, str]:
    """A listed standard as text: percent, degrees, sexagesimal-free positions."""
    import numpy as np

    def number(name: str, form: str, scale: float = 1.0) -> str:
        value = row.get(name, float("nan"))
        return format(scale * value, form) if np.isfinite(value) else "-"

    shown = {
        "name": str(row["name"]), "role": str(row["role"]), "ra": number("ra", ".4f"), "dec": number("dec", "+.4f"),
        "V": number("vmag", ".1f"), "band": str(row["band"]), "p (%)": number("p", ".3f", 100),
        "+-": number("p_err", ".3f", 100), "theta": number("theta", ".1f"), "+- ": number("theta_err", ".1f"),
        "from": str(row["provenance"]),
    }  # fmt: skip
    if "altitude" in row:
        shown["highest"] = f"{row['altitude']:.0f} deg"
    shown["remarks"] = f"varies: {row['variable']}" if row.get("variable") else ""
    return shown
