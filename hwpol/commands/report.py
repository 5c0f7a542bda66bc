"""`hwpol report`: the page of a night, redrawn from its stored products."""

from __future__ import annotations

import argparse

from hwpol.commands import DONE


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("night", help="night file (TOML) of a reduced night, or its output folder")
    parser.add_argument(
        "--visits", type=int, default=None, metavar="N", help="visits drawn in full, the most important (default 40)"
    )


def run(options: argparse.Namespace) -> int:
    """Draw the page and say where it is."""
    from pathlib import Path

    from hwpol.night import Night
    from hwpol.report import write_report

    given = Path(options.night)
    folder = given if given.is_dir() else Night.read(given).config.output
    chosen = {} if options.visits is None else {"visits": options.visits}
    print(f"Open {write_report(folder, **chosen)} to see the night.")
    return DONE
