"""Standards over two nights: one calibration, and what each standard says against the others.

What to look at: `sigma` tells how far a standard lies from its catalogue value in units of all errors together;
`predicted` is what the other standards alone would have it be. A standard that is doubted is named, with the reason.
"""

import sys
from dataclasses import replace
from pathlib import Path

from hwpol import Calibration, Night
from hwpol.night.check import check_standards
from hwpol.simulate import Scenario, shipped_scenarios, simulate


def main(folder: str) -> None:
    """Simulate two nights of one instrument, fit one calibration, use it as a file."""
    first = Scenario.read(shipped_scenarios()["mirrored"])
    second = replace(first, seed=first.seed + 1)
    nights = []
    for number, scenario in enumerate((first, second), start=1):
        simulated = simulate(scenario, Path(folder) / f"night{number}")
        nights.append(Night.read(simulated.night_path))

    check = check_standards(nights)
    for row in check.standards:
        print(f"{row['name']:10s} {row['filter']} visit {row['visit']:2d}: dq {100 * row['dq']:+.3f}, "
              f"du {100 * row['du']:+.3f} percent, {row['sigma']:.1f} sigma {row['doubt']}")  # fmt: skip
    assert check.calibration is not None
    for name, model in check.calibration.filters.items():
        print(f"filter {name}: zero angle {model.zero_angle:.2f} +- {model.zero_angle_err:.2f} deg, "
              f"efficiency {model.efficiency:.4f} +- {model.efficiency_err:.4f}")  # fmt: skip
    written = check.write(Path(folder))
    again = Calibration.read(written[-1])
    print(f"written and read again: {sorted(again.filters)} of nights {', '.join(again.nights)}")
    print('use it with  [correction] calibration = "calibration.toml"  in a night file')


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else "example-standards")
