"""`hwpol demo`: a small night simulated and reduced, result beside truth."""

from __future__ import annotations

import argparse
from pathlib import Path

from hwpol.commands import DONE, FAILED
from hwpol.commands.reduce import draw_page
from hwpol.commands.running import add_execution, check_jobs, executor_for
from hwpol.commands.screen import Steps, calibration_lines, degrees, percent, table, with_error

#: Distance from the truth, in stated errors, that a demo value must stay within.
AGREE = 5.0


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("folder", help="new folder for the night")
    add_execution(parser)


def run(options: argparse.Namespace) -> int:
    """Simulate, reduce, compare."""
    import numpy as np

    from hwpol.commands.simulate import make_night
    from hwpol.night import Night

    jobs = check_jobs(options.jobs) or 2
    if not options.quiet:
        print("Simulating a night of an invented observatory ...", flush=True)
    simulated = make_night("demo", options.folder, jobs=jobs, quiet=options.quiet)
    if not options.quiet:
        print(f"Reducing {len(simulated.paths)} frames ...", flush=True)
    night = Night.read(simulated.night_path)
    with executor_for(options) as executor:
        answer = night.reduce(executor=executor, progress=Steps(options.quiet))
    draw_page(night)
    truth = {(str(t["target"]), str(t["filter"])): t for t in simulated.truth if t["source"] == 0}
    rows: list[list[str]] = []
    pulls: list[float] = []
    for row in answer.results:
        true = truth[str(row["target"]), str(row["filter"])]
        errors = np.hypot(row["q_err"], row["q_cal_err"]), np.hypot(row["u_err"], row["u_cal_err"])
        pull = (row["q"] - true["q"]) / errors[0], (row["u"] - true["u"]) / errors[1]
        pulls += pull
        rows.append(
            [str(row["target"]), str(row["filter"]), with_error(row["q"], errors[0]), percent(true["q"], errors[0]),
             with_error(row["u"], errors[1]), percent(true["u"], errors[1]), f"{pull[0]:+.1f} {pull[1]:+.1f}",
             degrees(row["theta"], row["theta_err"]), f"{true['theta']:.1f}"]
        )  # fmt: skip
    print()
    print(
        table(["target", "filter", "q (%)", "true q", "u (%)", "true u", "off by (sigma)", "theta (deg)", "true"], rows)
    )
    if answer.calibration is not None:
        print("\nCalibration found, and the truth:")
        for line in calibration_lines(answer.calibration):
            name = line.split(":")[0]
            true = next(t for key, t in truth.items() if key[1] == name)
            print(f"  {line}")
            print(
                f"  {' ' * len(name)}  true: ip q {percent(true['ip_q'], 1e-4)}, u {percent(true['ip_u'], 1e-4)} %; "
                f"zero angle {true['zero_angle']:.2f} deg; efficiency {true['efficiency']:.4f}"
            )
    rms = float(np.sqrt(np.mean(np.square(pulls))))
    worst = float(np.max(np.abs(pulls)))
    print(f"\n{len(pulls)} values: rms of (measured - true)/error {rms:.2f}, largest {worst:.1f}.")
    fitted = sum(row["role"] != "science" for row in answer.results)
    print(
        f"({fitted} of the {len(rows)} rows are the standards the calibration is fitted to: theirs are small for it.)"
    )
    print(f"The night is in {Path(options.folder)}, its results in {night.config.output}.")
    if (night.config.output / "report.html").is_file():
        print(f"Open {night.config.output / 'report.html'} to see the night.")
    if not worst < AGREE:
        print(f"A value lies {worst:.1f} of its errors from the truth: the demo failed.")
        return FAILED
    return DONE
