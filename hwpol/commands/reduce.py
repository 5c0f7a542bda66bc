"""`hwpol reduce`: the main job."""

from __future__ import annotations

import argparse

from hwpol.commands import ASIDE, DONE
from hwpol.commands.running import add_execution, executor_for
from hwpol.commands.screen import Steps, calibration_lines, notes, results_table


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("night", help="night file (TOML)")
    parser.add_argument(
        "--only", action="append", default=[], metavar="NAME", help="this target only (may be repeated)"
    )
    parser.add_argument("--fresh", action="store_true", help="do not take up the finished visits of an earlier run")
    add_execution(parser)


def run(options: argparse.Namespace) -> int:
    """Reduce and print the night's results."""
    from hwpol.night import Night

    night = Night.read(options.night)
    with executor_for(options) as executor:
        answer = night.reduce(executor=executor, only=options.only, fresh=options.fresh, progress=Steps(options.quiet))
    draw_page(night)
    print_answer(answer, night, quiet=options.quiet)
    return DONE if answer.clean else ASIDE


def draw_page(night: object) -> None:
    """Draw the page from the products just written, unless the night file says not to."""
    config = night.config  # type: ignore[attr-defined]
    if config.products.report:
        from hwpol.report import write_report

        write_report(config.output)
    else:
        # A page of an earlier run would show other numbers than the tables beside it.
        (config.output / "report.html").unlink(missing_ok=True)


def print_answer(answer: object, night: object, *, quiet: bool = False) -> None:
    """Print results, calibration and what is to be kept in mind."""
    results = answer.results  # type: ignore[attr-defined]
    print(results_table(results))
    calibration = answer.calibration  # type: ignore[attr-defined]
    print()
    if calibration is None:
        print("Calibration: none. q and u are in the instrument frame, with the instrument's polarisation in them.")
    else:
        print("Calibration:")
        for line in calibration_lines(calibration):
            print(f"  {line}")
    aside = answer.frames[answer.frames["status"] != "used"]  # type: ignore[attr-defined]
    if len(aside):
        print(f"\n{len(aside)} of {len(answer.frames)} files not used:")  # type: ignore[attr-defined]
        for row in aside[:12]:
            print(f"  {row['file']}: {row['status']}: {row['reason']}")
        if len(aside) > 12:
            print(f"  ... and {len(aside) - 12} more in frames.ecsv")
    text = notes(answer.notes)  # type: ignore[attr-defined]
    if text and not quiet:
        print(f"\n{text}")
    output = night.config.output  # type: ignore[attr-defined]
    print(f"\nWritten to {output}: results.ecsv, cycles.ecsv, frames.ecsv, standards.ecsv and more")
    if (output / "report.html").is_file():
        print(f"Open {output / 'report.html'} to see the night.")
