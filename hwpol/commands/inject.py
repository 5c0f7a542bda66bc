"""`hwpol inject`: artificial stars of known polarisation in the night's own frames."""

from __future__ import annotations

import argparse
import textwrap
from typing import Any

from hwpol.commands import ASIDE, DONE
from hwpol.commands.running import add_execution, executor_for
from hwpol.commands.screen import WIDTH, Steps, notes, percent, table, with_error


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("night", help="night file (TOML)")
    parser.add_argument("--target", default="", metavar="NAME", help="this target only (default: of each filter the "
                        "science visit with most frames)")  # fmt: skip
    parser.add_argument("--stars", type=int, default=8, metavar="N", help="artificial stars in each visit (default: "
                        "8); in a small field they reach each other's sky: take fewer and repeat")  # fmt: skip
    parser.add_argument("--repeats", type=int, default=1, metavar="M", help="realisations of each visit (default: 1)")
    parser.add_argument("--seed", type=int, default=0, help="seed of places, polarisation and noise (default: 0)")
    parser.add_argument("--output", metavar="FOLDER", help="folder of inject.ecsv and of kept frames, never among raw "
                        "frames (default: inject in the night's output folder)")  # fmt: skip
    parser.add_argument("--keep", action="store_true", help="keep the altered copies, with a night file of their own")
    add_execution(parser)


def run(options: argparse.Namespace) -> int:
    """Inject, reduce, compare."""
    from hwpol.inject import inject
    from hwpol.night import Night

    night = Night.read(options.night)
    with executor_for(options) as executor:
        done = inject(
            night,
            stars=options.stars,
            repeats=options.repeats,
            seed=options.seed,
            target=options.target,
            folder=options.output,
            keep=options.keep,
            executor=executor,
            progress=Steps(options.quiet),
        )
    print(stars_table(done.table))
    print()
    print(steps_table([*done.steps, done.together]))
    print()
    for line in done.words:
        print(textwrap.fill(line, WIDTH))
    text = notes(done.notes)
    if text:
        print(f"\n{text}")
    print(f"\nWritten: {done.path}")
    for folder in done.kept:
        print(f"Kept: {folder}")
    return DONE if done.sound else ASIDE


def stars_table(found: Any, most: int = 40) -> str:
    """Each artificial star: put in and measured, percent."""
    from hwpol.flags import flag_names

    rows = []
    for row in found[:most]:
        shown = [name.replace("_", " ") for name in flag_names(row["flags"]) if name != "low_signal"]
        rows.append(
            [str(row["target"]), str(row["filter"]), str(row["star"]), str(row["step"]), f"{row['snr']:.0f}",
             percent(row["true_q"], row["q_err"]), with_error(row["q"], row["q_err"]), f"{row['pull_q']:+.1f}",
             percent(row["true_u"], row["u_err"]), with_error(row["u"], row["u_err"]), f"{row['pull_u']:+.1f}",
             f"{row['flux_ratio']:.3f}", ", ".join(shown)]
        )  # fmt: skip
    head = ["target", "filter", "star", "brightness", "S/N", "true q", "q (%)", "pull", "true u", "u (%)", "pull",
            "flux ratio", "remarks"]  # fmt: skip
    more = len(found) - most
    return table(head, rows) + (f"\n... and {more} more rows in inject.ecsv" if more > 0 else "")


def steps_table(steps: list[Any]) -> str:
    """Bias and pull against brightness."""
    rows = [
        [str(s.number or "all"), str(s.stars), f"{s.flux:.4g}", f"{s.snr:.0f}", with_error(s.bias_q, s.bias_q_err),
         with_error(s.bias_u, s.bias_u_err), f"{s.rms:.2f}", f"{s.low:.2f} to {s.high:.2f}", f"{s.flux_ratio:.3f}"]
        for s in steps
    ]  # fmt: skip
    head = ["brightness", "stars", "electron/s", "S/N", "bias of q (%)", "bias of u (%)", "rms pull", "expected",
            "flux ratio"]  # fmt: skip
    return table(head, rows, left=1)
