"""A field of stars: the vector map, and the error of its mean.

What to look at: the calibration's error moves all stars alike, so that the mean of many stars does not beat it. The
mean's error from the stars' own errors alone would be far too small.
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from hwpol import Night
from hwpol.report.figures import vector_map
from hwpol.simulate import Scenario, shipped_scenarios, simulate

SETTING = '\n[photometry]\nsources = "field"\n'


def main(folder: str) -> None:
    """Simulate a field, measure every star in it, map it, average it correctly."""
    simulated = simulate(Scenario.read(shipped_scenarios()["field"]), Path(folder))
    text = simulated.night_path.read_text(encoding="utf-8")
    simulated.night_path.write_text(text.replace("\n[correction]", SETTING + "\n[correction]", 1), encoding="utf-8")
    answer = Night.read(simulated.night_path).reduce()
    visit, solution = next(
        (v, s) for v, s in zip(answer.visits, answer.solutions, strict=True) if v.names[0] == "Orchard"
    )
    stars = solution.stokes[np.isfinite(solution.stokes.q)]
    print(f"{stars.shape[0]} stars of the field of {visit.names[0]} in {visit.filter}")

    weight = np.linalg.inv(stars.random_covariance)
    random = np.linalg.inv(weight.sum(axis=0))
    mean = random @ np.einsum("sij,sj->i", weight, np.stack([stars.q, stars.u], axis=-1))
    share = random @ weight
    shared = answer.calibration.shared_covariance([stars])
    total = random + np.einsum("sij,sjtk,tlk->il", share, shared, share)
    print(f"mean q {100 * mean[0]:+.3f}, u {100 * mean[1]:+.3f} percent")
    print(f"error from the stars alone {100 * np.sqrt(random[0, 0]):.3f}, with what they share "
          f"{100 * np.sqrt(total[0, 0]):.3f} percent")  # fmt: skip

    figure = Figure(figsize=(6, 5), layout="constrained")
    vector_map(figure.subplots(), stars.x, stars.y, stars.debiased(), stars.p_err, stars.theta)
    figure.savefig(Path(folder) / "field.png", dpi=150)
    print(f"drawn: {Path(folder) / 'field.png'}")


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else "example-field")
