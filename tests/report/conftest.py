"""A small night as stored products, made from plain numbers."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from hwpol.flags import Flag
from hwpol.products import VisitFile, make_table, write_table, write_text, write_visit

NASTY = "<script>alert('x')</script> & $q_1$"


def visit_of(number: int, target: str, *, beams: int = 2, picture: bool = False, frames: int = 8) -> VisitFile:
    """A visit of made-up numbers."""
    rng = np.random.default_rng(number)
    psi = np.tile([0.0, 22.5, 45.0, 67.5], frames // 4)
    model = 0.03 * np.cos(4 * np.radians(psi))
    curves = ("difference",) if beams == 2 else tuple(f"beam {b}" for b in range(beams))
    column = np.repeat(model[:, None], len(curves), axis=1)
    grid = np.arange(0.0, 70.0, 5.0)
    y, x = np.mgrid[:25, :25]
    star = 1000 * np.exp(-((x - 12) ** 2 + (y - 12) ** 2) / 12)
    return VisitFile(
        number=number,
        target=target,
        filter="V",
        radius=6.0,
        annulus=(8.0, 12.0),
        pixel_scale=0.4,
        beams=tuple(f"beam {b}" for b in range(beams)),
        stamps=np.stack([star + rng.normal(0, 5, star.shape) for _ in range(beams)]),
        stamp_corner=np.tile([40.0, 50.0], (beams, 1)),
        stamp_place=np.tile([52.0, 62.0], (beams, 1)),
        radii=np.arange(3.0, 10.0),
        growth=1 - np.exp(-np.arange(3.0, 10.0) / 2),
        curve_q=0.02 + rng.normal(0, 1e-4, 7),
        curve_u=0.01 + rng.normal(0, 1e-4, 7),
        curve_q_err=np.full(7, 2e-4),
        curve_u_err=np.full(7, 2e-4),
        files=tuple(f"raw/a{number}_{k}.fits" for k in range(frames)),
        frames={
            "cycle": np.repeat(np.arange(1.0, frames // 4 + 1), 4),
            "mjd": 61000.1 + 0.001 * np.arange(frames),
            "psi": psi,
            "exposure": np.full(frames, 10.0),
            "airmass": np.full(frames, 1.2),
            "shift_x": np.zeros(frames),
            "shift_y": np.zeros(frames),
            "transparency": 1 + rng.normal(0, 0.01, frames),
            "fwhm": 4 + rng.normal(0, 0.1, (frames, beams)),
            "ellipticity": np.full((frames, beams), 0.05),
            "sky": 100 + rng.normal(0, 1, (frames, beams)),
        },
        curves=curves,
        modulation={
            "value": column + rng.normal(0, 3e-4, column.shape),
            "error": np.full_like(column, 3e-4),
            "model": column,
        },
        curve_psi=grid,
        curve_model=np.repeat(0.03 * np.cos(4 * np.radians(grid))[:, None], len(curves), axis=1),
        picture=rng.normal(100, 5, (60, 80)) if picture else None,
        picture_corner=(0.5, 0.5),
        picture_step=2,
    )


def result_row(visit: int, target: str, role: str, rng: np.random.Generator, **more: Any) -> dict[str, Any]:
    """A row of results; errors 0.02 percent."""
    q, u = rng.normal(0.02, 0.01, 2) if role != "zero-polarised" else rng.normal(0, 2e-4, 2)
    p, err = float(np.hypot(q, u)), 2.3e-4
    row = {
        "target": target, "source": 0, "role": role, "filter": "V", "visit": visit, "cycles": 2, "frames": 8,
        "mjd": 61000.1 + 0.01 * visit, "exposure": 80.0, "airmass": 1.2, "chi": 0.0, "eta": 30.0, "x": 52.0, "y": 62.0,
        "ra": 112.4, "dec": -24.1, "radius": 6.0, "fwhm": 4.0, "flux": 123456.789, "flux_err": 50.0, "frame": "sky",
        "q": q, "u": u, "q_err": err, "u_err": err, "qu_cov": 0.1 * err**2, "q_count_err": err, "u_count_err": err,
        "q_scatter_err": 0.8 * err, "u_scatter_err": 1.1 * err, "q_cal_err": 1e-4, "u_cal_err": 1e-4, "qu_cal_cov": 0.0,
        "q_inst": q + 0.005, "u_inst": u - 0.003, "p": p, "p_err": err, "p_debiased": max(p - err**2 / (2 * p), 0.0),
        "p_low": max(p - err, 0.0), "p_high": p + err, "p_upper95": p + 1.7 * err,
        "theta": float(np.degrees(np.arctan2(u, q)) / 2 % 180), "theta_err": float(np.degrees(err / (2 * p))),
        "theta_low": 10.0, "theta_high": 12.0, "null_q": 1e-4, "null_u": -1e-4, "chi2": 2.5, "dof": 2,
        "photon_err": 2.1e-4, "calibration": "fit", "flags": int(Flag.LOW_SIGNAL) if p < 3 * err else 0,
    }  # fmt: skip
    return row | more


META = {"instrument": "Test <b>imager</b>", "calibration": "fit", "estimator": "modified-asymptotic", "level": 0.6827,
        "angles": "north through east"}  # fmt: skip

CALIBRATION = """schema = 1
instrument = "Test"
nights = ["2025-11-21"]
[filters.V]
ip_q = 0.0051
ip_u = -0.0029
ip_q_err = 0.00016
ip_u_err = 0.00017
efficiency = 0.9847
efficiency_err = 0.0053
zero_angle = 3.6221
zero_angle_err = 0.1308
chi2 = 1.7
dof = 4
used = ["Zero", "Strong"]
left_out = []
flags = []
"""


@pytest.fixture(scope="session")
def make_night(tmp_path_factory: pytest.TempPathFactory) -> Callable[..., Path]:
    """A function that stores a night of one zero star, one standard and science targets, and returns its folder."""

    def make(science: int = 2, *, field: int = 0, calibrated: bool = True, name: str = NASTY, beams: int = 2) -> Path:
        rng = np.random.default_rng(7)
        folder = tmp_path_factory.mktemp("night")
        stars = [("Zero", "zero-polarised"), ("Strong", "polarised")]
        stars += [(f"{name} {n}" if n else name, "science") for n in range(science)]
        own = {} if calibrated else {"frame": "instrument", "flags": int(Flag.UNCALIBRATED)}
        rows, cycles, frames = [], [], []
        for number, (target, role) in enumerate(stars, start=1):
            row = result_row(number, target, role, rng, **own)
            rows.append(row)
            cycles += [row | {"cycle": c, "cycles": 1, "q": row["q"] + rng.normal(0, 3e-4)} for c in (1, 2)]
            write_visit(
                visit_of(number, target, picture=field > 0, beams=beams), folder / f"visits/visit_{number:03d}.fits"
            )
            frames += [
                {"file": f"raw/a{number}_{k}.fits", "kind": "science", "object": target, "filter": "V", "visit": number,
                 "cycle": 1, "status": "used"} for k in range(8)
            ]  # fmt: skip
        for star in range(1, field + 1):
            x, y = rng.uniform(5, 150), rng.uniform(5, 110)
            rows.append(
                result_row(len(stars), stars[-1][0], "science", rng, source=star, x=x, y=y, ra=112.4 - x * 1e-4,
                           dec=-24.1 + y * 1e-4, **own)
            )  # fmt: skip
        frames.append({"file": "raw/bad.fits", "kind": "", "status": "unread", "reason": f"not a FITS file {name}"})
        standards = [
            {"name": star, "filter": "V", "visit": n, "role": role, "q": rows[n - 1]["q"], "u": rows[n - 1]["u"],
             "q_err": 2e-4, "u_err": 2e-4, "p": rows[n - 1]["p"], "p_err": 2e-4, "theta": 11.0, "theta_err": 0.2,
             "cat_p": 0.03, "cat_p_err": 2e-4, "cat_theta": 11.1, "cat_theta_err": 0.1, "dq": 1e-4, "du": -1e-4,
             "dp": 2e-4, "dtheta": -0.1 if role == "polarised" else np.nan, "sigma": 0.7, "predicted_q": 0.0052,
             "predicted_u": -0.003, "used": True, "reference": "made up for a test"}
            for n, (star, role) in enumerate(stars[:2], start=1)
        ]  # fmt: skip
        for table, entries in (("results", rows), ("cycles", cycles), ("frames", frames), ("standards", standards)):
            write_table(make_table(entries, table, META), folder / f"{table}.ecsv")
        if calibrated:
            write_text(folder / "calibration.toml", CALIBRATION)
        run = {"versions": {"hwpol": "0"}, "configuration": {"output": "reduced", "exclude": ["*<i>*"]}, "inputs": {},
               "notes": [f"visit 1 (Zero, V): a note {name}"], "seconds": 1.5}  # fmt: skip
        write_text(folder / "run.json", json.dumps(run))
        return folder

    return make
