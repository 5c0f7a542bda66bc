"""`hwpol simulate`: a night of frames with a known truth."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from hwpol.commands import DONE
from hwpol.commands.running import check_jobs
from hwpol.commands.screen import Steps
from hwpol.errors import InputError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("scenario", help="scenario file (TOML), or the name of one that is shipped, such as demo")
    parser.add_argument("folder", help="new folder for the night")
    parser.add_argument("--jobs", type=int, default=2, metavar="N", help="processes at once (default 2)")


def run(options: argparse.Namespace) -> int:
    """Simulate and say where things are."""
    night = make_night(options.scenario, options.folder, jobs=check_jobs(options.jobs), quiet=options.quiet)
    print(f"{len(night.paths)} frames in {Path(options.folder) / 'raw'}; the truth in {night.truth_path}")
    print(f"Reduce them with: hwpol reduce {night.night_path}")
    return DONE


def make_night(scenario: str, folder: str, *, jobs: int, quiet: bool) -> Any:
    """Simulate a scenario, by path or shipped name, into a folder that must be new or empty."""
    from hwpol.simulate import Scenario, shipped_scenarios, simulate

    shipped = shipped_scenarios()
    path = Path(scenario)
    if not path.is_file() and scenario in shipped:
        path = shipped[scenario]
    elif not path.is_file():
        raise InputError(f"{scenario}: no such scenario file; shipped ones are {', '.join(sorted(shipped))}")
    target = Path(folder)
    if target.exists() and (not target.is_dir() or any(target.iterdir())):
        raise InputError(f"{target}: exists and is not empty; give a new folder")
    chosen = Scenario.read(path)
    try:
        target.mkdir(parents=True, exist_ok=True)
    except OSError as problem:
        raise InputError(f"{target}: cannot be made ({problem.strerror}); give a folder that can") from None
    steps = Steps(quiet, unit="frame")
    return simulate(chosen, target, jobs=jobs, progress=_sparse(steps))


def _sparse(steps: Steps) -> Any:
    """Pass on every fortieth frame where lines are printed."""
    import sys

    def show(done: int, total: int, *_: object) -> None:
        if sys.stderr.isatty() or done % 40 == 0 or done == total:
            steps(done, total, "simulated")

    return show
