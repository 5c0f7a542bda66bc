"""`hwpol setup`: instrument and night file from the headers in a folder."""

from __future__ import annotations

import argparse
from pathlib import Path

from hwpol.commands import ASIDE, DONE


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("folder", help="folder with the raw frames (subfolders are searched too)")
    parser.add_argument("--where", metavar="FOLDER", help="folder for instrument.toml and night.toml (default: here)")
    parser.add_argument(
        "--measure-offset", action="store_true", help="measure the offset between the beams on a science frame"
    )


def run(options: argparse.Namespace) -> int:
    """Propose, write, and say what to look at."""
    from hwpol.setup import propose

    proposal = propose(Path(options.folder), measure_offset=options.measure_offset)
    written = proposal.write(Path(options.where or "."))
    if not options.quiet:
        print(proposal.summary())
        print()
    for path in written:
        print(f"Written: {path}")
    night = next((path for path in written if "night" in path.name), written[-1])
    print(f"Read both files, correct what is marked, then: hwpol plan {night}")
    return ASIDE if proposal.problems else DONE
