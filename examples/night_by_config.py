"""A night from its night file.

What to look at: q and u come with a random error and with the error of the calibration, which all targets of a
filter share; below three sigma the position angle says nothing and the upper limit is what to quote.
"""

import sys
from pathlib import Path

import numpy as np

from hwpol import Night
from hwpol.flags import flag_names
from hwpol.simulate import Scenario, shipped_scenarios, simulate


def main(folder: str) -> None:
    """Simulate a small night, reduce it as its night file says, and read the table."""
    simulated = simulate(Scenario.read(shipped_scenarios()["strips16"]), Path(folder))
    night = Night.read(simulated.night_path)
    answer = night.reduce()
    for row in answer.results:
        name, flags = row["target"], ", ".join(flag_names(row["flags"])) or "none"
        print(f"{name} in {row['filter']}, {row['role']}, {row['cycles']} cycles")
        for part in "qu":
            value, random, shared = (100 * row[column] for column in (part, f"{part}_err", f"{part}_cal_err"))
            print(f"  {part} = {value:+.3f} +- {random:.3f} (random) +- {shared:.3f} (calibration) percent")
        if row["p_debiased"] > 3 * row["p_err"]:
            print(
                f"  p = {100 * row['p_debiased']:.3f} percent, theta = {row['theta']:.2f} +- {row['theta_err']:.2f} deg"
            )
        else:
            print(f"  p < {100 * row['p_upper95']:.3f} percent (95 percent); theta is not determined")
        print(f"  photons alone would allow {100 * row['photon_err']:.3f} percent; flags: {flags}")
    used = np.sum(answer.frames["status"] == "used")
    print(f"{used} of {len(answer.frames)} files used; tables in {night.config.output}")


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else "example-night")
