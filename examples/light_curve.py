"""One target by script: p and theta through a night.

What to look at: every cycle of four positions gives one point. The source varies, which chi2 against a constant
q, u shows; theta is drawn without jumps of 180 deg, for the eye alone.
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import hwpol
from hwpol.report.figures import time_series
from hwpol.simulate import Scenario, simulate
from hwpol.statistics import unwrap_theta, variability

SCENARIO = Path(__file__).resolve().parents[1] / "shared" / "blazar.toml"


def main(folder: str) -> None:
    """Simulate, calibrate with the night's standards, measure the target cycle by cycle, draw."""
    simulated = simulate(Scenario.read(SCENARIO), Path(folder))
    night = hwpol.Night.read(simulated.night_path)
    calibration = night.reduce(only=["Calm 12", "Beacon 12"]).calibration

    instrument = hwpol.Instrument.read(simulated.instrument_path)
    frames = hwpol.FrameSet.read(simulated.paths, instrument)
    visit = next(v for v in frames.visits() if v.column("object")[0] == "Ember")
    fluxes = hwpol.photometer(visit, [(60.0, 34.0)], radius="1.6 fwhm", calibrations=frames)
    cycles = hwpol.demodulate(fluxes, per="cycle", calibration=calibration)[0]

    minutes = (cycles.mjd - cycles.mjd[0]) * 1440
    theta = unwrap_theta(cycles.theta)
    for when, p, p_err, angle, err in zip(
        minutes, cycles.debiased(), cycles.p_err, theta, cycles.theta_err, strict=True
    ):
        print(f"{when:5.1f} min  p {100 * p:.2f} +- {100 * p_err:.2f} percent  theta {angle:.1f} +- {err:.1f} deg")
    test = variability(cycles.q, cycles.u, cycles.random_covariance)
    print(f"against a constant: chi2 {test.chi2:.0f} for {test.dof} degrees of freedom, chance {test.p_value:.1g}")
    print(f"theta turned by {theta[-1] - theta[0]:.1f} deg in {minutes[-1]:.0f} min; p rose by "
          f"{100 * np.ptp(cycles.p):.2f} percent")  # fmt: skip

    figure = Figure(figsize=(6, 5), layout="constrained")
    upper, lower = figure.subplots(2, sharex=True)
    time_series(upper, minutes, 100 * cycles.debiased(), label="p (%)")
    time_series(lower, minutes, theta, label="theta (deg)")
    lower.set_xlabel("time from the first cycle (min)")
    figure.savefig(Path(folder) / "light_curve.png", dpi=150)
    print(f"drawn: {Path(folder) / 'light_curve.png'}")


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else "example-light-curve")
