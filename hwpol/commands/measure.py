"""`hwpol measure`: one sequence, one source, on screen."""

from __future__ import annotations

import argparse

from hwpol.commands import ASIDE, DONE
from hwpol.commands.screen import degrees, percent, table, with_error


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("frame", nargs="+", help="frames of one target in one filter; bias and flats may be among them")
    parser.add_argument("--instrument", required=True, metavar="FILE", help="instrument file (TOML)")
    where = "pixel of the source, first beam of the first frame, 0-based, good to about 10"
    parser.add_argument("--at", nargs=2, type=float, required=True, metavar=("X", "Y"), help=where)
    parser.add_argument(
        "--radius", default="best", help='aperture radius: pixels, "best" or "2.0 fwhm" (default: best)'
    )
    parser.add_argument("--annulus", nargs=2, default=["4 fwhm", "6 fwhm"], metavar=("IN", "OUT"), help="sky annulus")
    parser.add_argument("--method", default="least-squares", help="least-squares, double-difference or double-ratio")
    parser.add_argument("--calibration", metavar="FILE", help="calibration.toml to bring the result to the sky")


def run(options: argparse.Namespace) -> int:
    """Measure and print."""
    import numpy as np

    import hwpol
    from hwpol.commands.screen import notes
    from hwpol.errors import InputError
    from hwpol.flags import flag_names
    from hwpol.night.solve import solve_visit

    instrument = hwpol.Instrument.read(options.instrument)
    calibration = hwpol.Calibration.read(options.calibration) if options.calibration else None
    frames = hwpol.FrameSet.read(options.frame, instrument)
    aside = frames.table[frames.column("status") != "used"]
    if not len(frames.science()) and len(aside):
        raise InputError("no frame can be used: " + "; ".join(f"{row['name']}: {row['reason']}" for row in aside))
    fluxes = hwpol.photometer(frames, [tuple(options.at)], radius=options.radius, annulus=options.annulus)
    if calibration is not None:
        calibration.check_instrument(instrument.name)
    solution = solve_visit(fluxes, method=options.method, calibration=calibration)
    stokes = solution.stokes
    where = "on the sky" if stokes.frame == "sky" else "in the instrument frame, uncalibrated"
    total = stokes.total_covariance[0]
    low, high = stokes.interval()
    print(f"{fluxes.target or 'source'} in {fluxes.filter or 'no filter'}, {where}")
    print(f"  q      {with_error(stokes.q[0], np.sqrt(total[0, 0]))} %")
    print(f"  u      {with_error(stokes.u[0], np.sqrt(total[1, 1]))} %")
    err = stokes.p_err[0]
    print(f"  p      {percent(stokes.debiased()[0], err, signs=False)} %, de-biased; 68 % interval "
          f"{percent(low[0], err, signs=False)} to {percent(high[0], err, signs=False)} %; "
          f"95 % limit {percent(stokes.upper_limit(0.95)[0], err, signs=False)} %")  # fmt: skip
    print(f"  theta  {degrees(stokes.theta[0], stokes.theta_err[0])} deg")
    photon = np.sqrt(solution.photon_covariance[0, 0, 0])
    print(f"  photons alone would allow {percent(photon, photon, signs=False)} %; "
          f"chi2 {solution.chi2[0]:.1f} for {solution.dof[0]} degrees of freedom")  # fmt: skip
    rows = []
    for c, number in enumerate(np.unique(fluxes.cycle)):
        part = solution.cycles[:, c]
        rows.append([str(number), with_error(part.q[0], part.q_err[0]), with_error(part.u[0], part.u_err[0]),
                     "" if solution.kept[0, c] else "set aside"])  # fmt: skip
    if len(rows) > 1:
        print("\n" + table(["cycle", "q (%)", "u (%)", ""], rows, left=1))
    flags = flag_names(int(solution.flags[0]))
    if flags:
        from hwpol.flags import FLAG_TEXT, Flag

        print("\n" + notes([FLAG_TEXT[Flag[name.upper()]] for name in flags], "Remarks"))
    for row in aside:
        print(f"not used: {row['name']}: {row['reason']}")
    return ASIDE if len(aside) or not np.isfinite(stokes.q[0]) else DONE
