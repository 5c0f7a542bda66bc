"""Every column of every table: its name, kind, unit, UCD1+ word and one sentence.

Columns never depend on options: what is not known is NaN (numbers), -1
(counters) or empty (text). The same entries feed the writers, the readers,
the report and ``hwpol explain``.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Column:
    """One column: `kind` is "text", "integer", "number" or "truth"; `unit` an astropy unit string."""

    name: str
    kind: str
    unit: str
    ucd: str
    text: str


def _columns(*rows: tuple[str, str, str, str, str]) -> tuple[Column, ...]:
    return tuple(Column(*row) for row in rows)


_Q = "phys.polarization.stokes.Q;arith.ratio"
_U = "phys.polarization.stokes.U;arith.ratio"
_ERR_Q = "stat.error;phys.polarization.stokes.Q"
_ERR_U = "stat.error;phys.polarization.stokes.U"
_ERR_P = "stat.error;phys.polarization"

RESULTS: tuple[Column, ...] = _columns(
    ("target", "text", "", "meta.id;meta.main", "name of the target as in the header"),
    ("source", "integer", "", "meta.number", "0 for the target, others from 1 by brightness"),
    ("role", "text", "", "meta.code", "science, zero-polarised or polarised"),
    ("filter", "text", "", "meta.id;instr.filter", "filter as in the header"),
    ("visit", "integer", "", "meta.number", "number of the visit in the night, from 1"),
    ("cycles", "integer", "", "meta.number", "cycles used"),
    ("frames", "integer", "", "meta.number", "frames used"),
    ("mjd", "number", "d", "time.epoch", "middle of the visit, modified Julian date, UTC"),
    ("exposure", "number", "s", "time.duration;obs.exposure", "total exposure of the frames used"),
    ("airmass", "number", "", "obs.airMass", "mean airmass"),
    ("chi", "number", "deg", "pos.posAng;instr", "position angle on the sky of the instrument's +Q axis, mean"),
    ("eta", "number", "deg", "pos.posAng", "parallactic angle, mean"),
    ("x", "number", "pix", "pos.cartesian.x;instr.det", "x in the first beam and first frame of the visit, 0-based"),
    ("y", "number", "pix", "pos.cartesian.y;instr.det", "y in the first beam and first frame of the visit, 0-based"),
    ("ra", "number", "deg", "pos.eq.ra;meta.main", "right ascension, ICRS"),
    ("dec", "number", "deg", "pos.eq.dec;meta.main", "declination, ICRS"),
    ("radius", "number", "pix", "phys.angSize;instr.det", "aperture radius"),
    ("fwhm", "number", "pix", "phys.angSize;instr.det.psf", "median full width at half maximum of the stars"),
    ("flux", "number", "electron / s", "phot.count", "source, all beams together, mean over the frames"),
    ("flux_err", "number", "electron / s", "stat.error;phot.count", "error of flux"),
    ("frame", "text", "", "meta.code", "sky where calibrated, instrument where no calibration applied"),
    ("q", "number", "", _Q, "Q/I"),
    ("u", "number", "", _U, "U/I"),
    ("q_err", "number", "", _ERR_Q, "adopted random error of q"),
    ("u_err", "number", "", _ERR_U, "adopted random error of u"),
    ("qu_cov", "number", "", "stat.covariance", "adopted random covariance of q and u"),
    ("q_count_err", "number", "", _ERR_Q, "error of q from the counts alone"),
    ("u_count_err", "number", "", _ERR_U, "error of u from the counts alone"),
    ("q_scatter_err", "number", "", _ERR_Q, "error of q from the scatter of repeats"),
    ("u_scatter_err", "number", "", _ERR_U, "error of u from the scatter of repeats"),
    ("q_cal_err", "number", "", _ERR_Q, "error of q from the calibration, shared by the targets of a filter"),
    ("u_cal_err", "number", "", _ERR_U, "error of u from the calibration, shared by the targets of a filter"),
    ("qu_cal_cov", "number", "", "stat.covariance", "covariance of q and u from the calibration"),
    ("q_inst", "number", "", _Q, "Q/I as observed, instrument frame, uncalibrated"),
    ("u_inst", "number", "", _U, "U/I as observed, instrument frame, uncalibrated"),
    ("v", "number", "", "phys.polarization.stokes.V;arith.ratio", "V/I, where asked for"),
    ("v_err", "number", "", "stat.error;phys.polarization.stokes.V", "error of v"),
    ("p", "number", "", "phys.polarization.linear;arith.ratio", "degree of linear polarisation, not de-biased"),
    ("p_err", "number", "", _ERR_P, "error of p, random and calibration"),
    ("p_debiased", "number", "", "phys.polarization.linear;arith.ratio", "p with its noise bias removed"),
    ("p_low", "number", "", "phys.polarization.linear;stat.min", "lower end of the interval of p"),
    ("p_high", "number", "", "phys.polarization.linear;stat.max", "upper end of the interval of p"),
    ("p_upper95", "number", "", "phys.polarization.linear;stat.max", "one-sided 95 percent upper limit, flat in p"),
    ("theta", "number", "deg", "pos.posAng;phys.polarization", "position angle, north through east, 0 to 180"),
    ("theta_err", "number", "deg", "stat.error;pos.posAng", "standard deviation of the exact angle distribution"),
    ("theta_low", "number", "deg", "pos.posAng;stat.min", "lower end of the interval of theta"),
    ("theta_high", "number", "deg", "pos.posAng;stat.max", "upper end of the interval of theta"),
    ("null_q", "number", "", _Q, "null of q from redundant pairs, instrument frame"),
    ("null_u", "number", "", _U, "null of u from redundant pairs, instrument frame"),
    ("chi2", "number", "", "stat.fit.chi2", "chi square of the repeats (or of the fit, where there are none)"),
    ("dof", "integer", "", "stat.fit.dof", "degrees of freedom of chi2"),
    ("photon_err", "number", "", _ERR_Q, "error of q that the counted source photons alone would allow"),
    ("calibration", "text", "", "meta.id", "the calibration applied: fit, a file name, or none"),
    ("flags", "integer", "", "meta.code", "bits named in the table's metadata"),
)

CYCLES: tuple[Column, ...] = (
    *RESULTS[:5],
    Column("cycle", "integer", "", "meta.number", "number of the cycle in the visit, from 1"),
    *RESULTS[5:],
)

FRAMES: tuple[Column, ...] = _columns(
    ("file", "text", "", "meta.id", "file name, relative to the night file where it lies below it"),
    ("kind", "text", "", "meta.code", "bias, dark, flat, science or empty"),
    ("object", "text", "", "meta.id", "object as in the header"),
    ("filter", "text", "", "meta.id;instr.filter", "filter as in the header"),
    ("exposure", "number", "s", "time.duration;obs.exposure", "exposure time"),
    ("mjd", "number", "d", "time.epoch", "middle of the exposure, modified Julian date, UTC"),
    ("wave_plate", "text", "", "meta.code", "wave-plate entry as in the header"),
    ("psi", "number", "deg", "pos.posAng;instr", "angle of the plate's fast axis, instrument frame, 0 to 360"),
    ("visit", "integer", "", "meta.number", "visit, from 1; -1 for none"),
    ("cycle", "integer", "", "meta.number", "cycle in the visit, from 1; -1 for none"),
    ("status", "text", "", "meta.code", "used, set aside or unread"),
    ("reason", "text", "", "meta.note", "empty for used, else why, in words"),
)

STANDARDS: tuple[Column, ...] = _columns(
    ("name", "text", "", "meta.id;meta.main", "name of the standard as in the header"),
    ("filter", "text", "", "meta.id;instr.filter", "filter as in the header"),
    ("visit", "integer", "", "meta.number", "visit, from 1"),
    ("role", "text", "", "meta.code", "zero-polarised or polarised"),
    ("q", "number", "", _Q, "Q/I on the sky, calibrated"),
    ("u", "number", "", _U, "U/I on the sky, calibrated"),
    ("q_err", "number", "", _ERR_Q, "error of q, random"),
    ("u_err", "number", "", _ERR_U, "error of u, random"),
    ("p", "number", "", "phys.polarization.linear;arith.ratio", "degree of linear polarisation measured"),
    ("p_err", "number", "", _ERR_P, "error of p, random"),
    ("theta", "number", "deg", "pos.posAng;phys.polarization", "position angle measured"),
    ("theta_err", "number", "deg", "stat.error;pos.posAng", "error of theta, random"),
    ("cat_p", "number", "", "phys.polarization.linear;arith.ratio", "catalogue value of p"),
    ("cat_p_err", "number", "", _ERR_P, "error of cat_p as used"),
    ("cat_theta", "number", "deg", "pos.posAng;phys.polarization", "catalogue value of theta"),
    ("cat_theta_err", "number", "deg", "stat.error;pos.posAng", "error of cat_theta as used"),
    ("cat_q", "number", "", _Q, "catalogue value as Q/I"),
    ("cat_u", "number", "", _U, "catalogue value as U/I"),
    ("dq", "number", "", _Q, "measured minus catalogue"),
    ("du", "number", "", _U, "measured minus catalogue"),
    ("dp", "number", "", "phys.polarization.linear;arith.ratio", "measured minus catalogue"),
    ("dtheta", "number", "deg", "pos.posAng;phys.polarization", "measured minus catalogue, -90 to 90"),
    ("sigma", "number", "", "stat.value", "distance of measured from catalogue in units of all errors together"),
    ("predicted_q", "number", "", _Q, "observed q (instrument frame) predicted from the other standards alone"),
    ("predicted_u", "number", "", _U, "observed u (instrument frame) predicted from the other standards alone"),
    ("used", "truth", "", "meta.code", "took part in the fit"),
    ("doubt", "text", "", "meta.note", "why this standard is doubted; empty for none"),
    ("provenance", "text", "", "meta.note", "read, memory or derived"),
    ("reference", "text", "", "meta.bib", "where the catalogue value was published"),
)

INJECT: tuple[Column, ...] = _columns(
    ("target", "text", "", "meta.id;meta.main", "name of the target whose visit holds the artificial star"),
    ("star", "integer", "", "meta.number", "number of the artificial star in its visit and repeat, from 1"),
    ("filter", "text", "", "meta.id;instr.filter", "filter as in the header"),
    ("visit", "integer", "", "meta.number", "visit, from 1"),
    ("repeat", "integer", "", "meta.number", "realisation: places, polarisation and photon noise, from 1"),
    ("step", "integer", "", "meta.number", "step of brightness of the artificial star, from 1 for the brightest"),
    ("x", "number", "pix", "pos.cartesian.x;instr.det", "x in the first beam and first frame of the visit, 0-based"),
    ("y", "number", "pix", "pos.cartesian.y;instr.det", "y in the first beam and first frame of the visit, 0-based"),
    ("true_flux", "number", "electron / s", "phot.count", "light put in, all beams together, mean over the frames"),
    ("flux", "number", "electron / s", "phot.count", "source, all beams together, mean over the frames"),
    ("flux_ratio", "number", "", "arith.ratio", "flux over the share of the light put in that the aperture holds"),
    ("snr", "number", "", "stat.snr", "flux over its error"),
    ("frame", "text", "", "meta.code", "sky where calibrated, instrument where no calibration applied"),
    ("true_q", "number", "", _Q, "Q/I put in"),
    ("true_u", "number", "", _U, "U/I put in"),
    ("q", "number", "", _Q, "Q/I"),
    ("u", "number", "", _U, "U/I"),
    ("q_err", "number", "", _ERR_Q, "adopted random error of q"),
    ("u_err", "number", "", _ERR_U, "adopted random error of u"),
    ("qu_cov", "number", "", "stat.covariance", "adopted random covariance of q and u"),
    ("pull_q", "number", "", "stat.value", "measured minus put in, in units of the random error of q"),
    ("pull_u", "number", "", "stat.value", "measured minus put in, in units of the random error of u"),
    ("frames", "integer", "", "meta.number", "frames used"),
    ("flags", "integer", "", "meta.code", "bits named in the table's metadata"),
)

CHECKS: tuple[Column, ...] = _columns(
    ("check", "text", "", "meta.id;meta.main", "what was tested: repeats, halves, half turn, seeing, airmass"),
    ("filter", "text", "", "meta.id;instr.filter", "filter as in the header"),
    ("visit", "integer", "", "meta.number", "visit, from 1; -1 for all of the filter"),
    ("chi2", "number", "", "stat.fit.chi2", "chi square of the test"),
    ("dof", "integer", "", "stat.fit.dof", "degrees of freedom of chi2"),
    ("chance", "number", "", "stat.probability", "probability that noise alone gives so large a chi2"),
    ("passed", "truth", "", "meta.code", "the chance is above the night's limit"),
)

TABLES: dict[str, tuple[Column, ...]] = {
    "results": RESULTS,
    "cycles": CYCLES,
    "frames": FRAMES,
    "standards": STANDARDS,
    "checks": CHECKS,
    "inject": INJECT,
}


def column(table: str, name: str) -> Column:
    """Return one column of one table; KeyError when there is none."""
    for entry in TABLES[table]:
        if entry.name == name:
            return entry
    raise KeyError(name)
