"""Tables of the truth, and catalogues of the invented standards."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from hwpol.simulate.images import Image, Layout, Stars, scaled
from hwpol.simulate.optics import simulate_fluxes
from hwpol.simulate.plan import CATALOGUE, Exposure, child
from hwpol.simulate.scenario import Scenario

_REFERENCE = "invented for a simulated night"


@dataclass(frozen=True)
class Measured:
    """What one exposure truly was: expected electrons and places (source, beam), hits in all and electrons of
    hits near the target in each beam."""

    electrons: Image
    x: Image
    y: Image
    hits: int
    near: NDArray[np.float64]


def observed(scenario: Scenario, one: Exposure, stokes: Image, x: Image, y: Image) -> NDArray[np.complex128]:
    """q + i u in front of the plate, instrument frame, of every source: what analysers there would show."""
    ideal = replace(scenario.train(one.filter, one.hours), analyser=(0.0, 90.0, 45.0, 135.0), throughput=(1.0,) * 4)
    eta = 0.0 if np.isnan(one.eta) else one.eta
    xs, ys = scaled(scenario, x[:, None], y[:, None])
    f = simulate_fluxes(stokes, ideal, np.nan, chi=one.chi, eta=eta, x=xs, y=ys)[:, 0]
    total = f.sum(axis=1) / 2
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(((f[:, 0] - f[:, 1]) + 1j * (f[:, 2] - f[:, 3])) / total)


def source_table(
    scenario: Scenario,
    layout: Layout,
    exposures: tuple[Exposure, ...],
    stars: Mapping[str, Stars],
    measured: list[Measured],
) -> Table:
    """A row per source, filter and visit.

    q, u, v, p, theta: on the sky, q, u, v the mean of the frames; of the star
    alone where a nebula surrounds it. q_inst, u_inst: as observed in the
    instrument frame, mean of the frames. ip_q, ip_u: at the source in the
    first frame. rate: electrons/s above clouds, flux: in all beams together,
    mean of the frames. x, y: first beam, first frame. edge: smallest distance
    to the border of a beam's area, nearest: to another image on the same
    array, first frame, pixels.
    """
    rows = []
    visits = sorted({one.visit for one in exposures if one.visit > 0})
    for visit in visits:
        mine = [(one, value) for one, value in zip(exposures, measured, strict=True) if one.visit == visit]
        one, value = mine[0]
        target, train, field = scenario.target(one.target), scenario.train(one.filter, one.hours), stars[one.target]
        z = np.mean(
            [observed(scenario, o, field.stokes(o.filter, o.hours), v.x[:, 0], v.y[:, 0]) for o, v in mine], axis=0
        )
        flux = np.mean([v.electrons.sum(axis=1) / o.seconds for o, v in mine], axis=0)
        edge = np.min([_edge(layout, v.x, v.y) for _, v in mine], axis=0)
        nearest = _nearest(layout, value.x, value.y)
        xs, ys = scaled(scenario, value.x[:, 0], value.y[:, 0])
        ip = train.ip_at(one.chi, 0.0 if np.isnan(one.eta) else one.eta, xs, ys)
        cosine = np.cos(np.deg2rad(target.dec))
        q, u, v = np.mean([field.light(o.filter, o.hours) for o, _ in mine], axis=0).T
        for s in range(len(q)):
            rows.append({
                "target": one.target, "source": s, "role": target.role if s == 0 else "science", "filter": one.filter,
                "visit": visit, "frames": len(mine), "cycles": max(o.cycle for o, _ in mine),
                "mjd": (one.start + mine[-1][0].start + mine[-1][0].seconds / 86400) / 2,
                "q": q[s], "u": u[s], "v": v[s], "p": np.hypot(q[s], u[s]),
                "theta": np.rad2deg(np.arctan2(u[s], q[s])) / 2 % 180, "q_inst": z[s].real, "u_inst": z[s].imag,
                "ip_q": ip[s].real, "ip_u": ip[s].imag, "efficiency": train.efficiency,
                "zero_angle": train.zero_angle, "retardance": train.retardance, "rate": field.rate[one.filter][s],
                "flux": flux[s], "x": value.x[s, 0], "y": value.y[s, 0],
                "ra": target.ra + field.east[s] / 3600 / cosine, "dec": target.dec + field.north[s] / 3600,
                "chi": one.chi, "eta": one.eta, "edge": edge[s], "nearest": nearest[s],
            })  # fmt: skip
    return Table(rows) if rows else Table()


def _edge(layout: Layout, x: Image, y: Image) -> Image:
    x0, x1 = (np.array([getattr(area, name) for area in layout.area]) for name in ("x0", "x1"))
    y0, y1 = (np.array([getattr(area, name) for area in layout.area]) for name in ("y0", "y1"))
    margins = [x - (x0 - 0.5), (x1 - 0.5) - x, y - (y0 - 0.5), (y1 - 0.5) - y]
    return np.asarray(np.min(margins, axis=(0, 2)))


def _nearest(layout: Layout, x: Image, y: Image) -> Image:
    hdu = np.broadcast_to(np.array(layout.hdu), x.shape)
    px, py, own = x.ravel(), y.ravel(), hdu.ravel()
    distance = np.hypot(px[:, None] - px, py[:, None] - py)
    distance[own[:, None] != own] = np.inf
    np.fill_diagonal(distance, np.inf)
    return np.asarray(distance.min(axis=1).reshape(x.shape).min(axis=1))


def frame_table(scenario: Scenario, exposures: tuple[Exposure, ...], measured: list[Measured]) -> Table:
    """A row per frame: what it truly was, beside what its header says (psi_header)."""
    rows = []
    for one, value in zip(exposures, measured, strict=True):
        row = {
            "file": one.file, "kind": one.kind, "object": one.target, "filter": one.filter, "exposure": one.seconds,
            "mjd": one.middle, "psi": one.psi % 360, "psi_header": one.psi_header % 360, "chi": one.chi,
            "eta": one.eta, "altitude": one.altitude, "transparency": one.transparency, "fwhm": one.fwhm,
            "sky": one.sky, "shift_x": one.shift[0], "shift_y": one.shift[1], "visit": one.visit,
            "cycle": one.cycle, "position": one.position, "hits": value.hits,
            "faults": ";".join(kind for kind, _, _ in one.faults),
        }  # fmt: skip
        for b, beam in enumerate(scenario.instrument.beams):
            row[f"hit_{beam.name}"] = value.near[b]
        rows.append(row)
    return Table(rows)


def catalogue_tables(scenario: Scenario, exposures: tuple[Exposure, ...]) -> dict[str, Table]:
    """Catalogues of the invented standards, by file name; values drawn from the truth with their errors."""
    found: dict[str, list[dict[str, object]]] = {"polarised.ecsv": [], "zero_polarised.ecsv": []}
    seen = {(one.target, one.filter) for one in exposures}
    for number, target in enumerate(scenario.targets):
        if target.role == "science":
            continue
        seed = scenario.seed if scenario.catalogue_seed is None else scenario.catalogue_seed
        rng = child(seed, CATALOGUE, number)
        for filter_name in scenario.filters:
            q, u, _ = target.stokes(filter_name)
            p, theta = np.hypot(q, u), np.rad2deg(np.arctan2(u, q)) / 2
            draw = rng.standard_normal(2)
            if target.role == "polarised":
                p, theta = abs(p + target.p_err * draw[0]), theta + target.theta_err * draw[1]
            p, theta = p + target.catalogue_shift[0], theta + target.catalogue_shift[1]
            if (target.name, filter_name) not in seen:
                continue
            band = scenario.instrument.filters.get(filter_name)
            found["polarised.ecsv" if target.role == "polarised" else "zero_polarised.ecsv"].append({
                "name": target.name, "aliases": "", "ra": target.ra, "dec": target.dec, "vmag": target.vmag,
                "band": filter_name if band is None or band.band is None else band.band, "p": float(p),
                "p_err": target.p_err, "theta": float(theta % 180), "theta_err": target.theta_err,
                "variable": False, "reference": _REFERENCE, "provenance": "derived", "note": "",
            })  # fmt: skip
    roles = {"polarised.ecsv": "polarised", "zero_polarised.ecsv": "zero-polarised"}
    return {name: Table(rows, meta={"role": roles[name]}) for name, rows in found.items() if rows}
