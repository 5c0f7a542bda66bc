"""Artificial stars as measured against what was put in: rows, bias and pull for each brightness, a verdict."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray
from scipy import stats

Array = NDArray[np.float64]

#: Chance that noise alone makes a mean look biased: 3 standard deviations, two-sided.
BIASED = 0.0027
#: Chance that noise alone brings the rms pull outside its bounds.
PULLED = 0.001


@dataclass(frozen=True)
class Step:
    """What the artificial stars of one brightness say together.

    Attributes
    ----------
    number : int
        From 1 for the brightest; 0 for all stars together.
    stars, lost : int
        Measured, and without a result.
    flux, snr, flux_ratio : float
        Medians: light put in (electron/s), signal over noise, recovered over put in.
    bias_q, bias_u, bias_q_err, bias_u_err : float
        Weighted mean of measured minus put in.
    rms : float
        Of the pulls of q and u together.
    low, high : float
        Bounds of `rms` that true errors leave with a chance of `PULLED` (shared by the steps).
    biased : bool
        The means lie further from zero than noise alone brings them with a chance of `BIASED` (shared by the steps).
    """

    number: int
    stars: int
    lost: int
    flux: float
    snr: float
    flux_ratio: float
    bias_q: float
    bias_u: float
    bias_q_err: float
    bias_u_err: float
    rms: float
    low: float
    high: float
    biased: bool

    @property
    def sound(self) -> bool:
        """Whether nothing speaks against values and errors."""
        return self.stars > 0 and not self.biased and self.low <= self.rms <= self.high


def summarise(table: Table) -> tuple[list[Step], Step]:
    """Each step of brightness, and all stars together."""
    numbers = sorted(set(np.asarray(table["step"]).tolist()))
    steps = [_step(table[table["step"] == number], int(number), len(numbers)) for number in numbers]
    return steps, _step(table, 0, 1)


def _step(rows: Table, number: int, tests: int) -> Step:
    good = np.isfinite(rows["pull_q"]) & np.isfinite(rows["pull_u"])
    used = rows[good]
    count = len(used)
    if not count:
        unknown = float("nan")
        return Step(
            number, 0, len(rows), unknown, unknown, unknown, unknown, unknown, unknown, unknown, unknown, unknown,
            unknown, False,
        )  # fmt: skip
    (bias_q, q_err), (bias_u, u_err) = (_mean(used, name) for name in ("q", "u"))
    pulls = np.concatenate([used["pull_q"], used["pull_u"]])
    # Two-sided in each tail; several steps are as many tests.
    low, high = (
        float(np.sqrt(stats.chi2.ppf(chance, 2 * count) / (2 * count)))
        for chance in (PULLED / (2 * tests), 1 - PULLED / (2 * tests))
    )
    far = (bias_q / q_err) ** 2 + (bias_u / u_err) ** 2
    return Step(
        number=number,
        stars=count,
        lost=len(rows) - count,
        flux=float(np.median(used["true_flux"])),
        snr=float(np.median(used["snr"])),
        flux_ratio=float(np.median(used["flux_ratio"])),
        bias_q=bias_q,
        bias_u=bias_u,
        bias_q_err=q_err,
        bias_u_err=u_err,
        rms=float(np.sqrt(np.mean(pulls**2))),
        low=low,
        high=high,
        biased=bool(stats.chi2.sf(far, 2) < BIASED / tests),
    )


def _mean(rows: Table, name: str) -> tuple[float, float]:
    difference = np.asarray(rows[name]) - np.asarray(rows[f"true_{name}"])
    weight = 1 / np.asarray(rows[f"{name}_err"]) ** 2
    return float(np.sum(weight * difference) / np.sum(weight)), float(1 / np.sqrt(np.sum(weight)))


def verdict(steps: Sequence[Step], together: Step) -> tuple[bool, list[str]]:
    """Whether values and errors pass, and why in words."""
    if not together.stars:
        return False, ["No artificial star could be measured: nothing is proved."]
    said = []
    for step in (together, *steps):
        who = f"brightness {step.number}" if step.number else "all stars together"
        if not step.stars:
            said.append(f"{who}: none of {step.lost} stars could be measured.")
            continue
        if step.biased:
            said.append(
                f"{who}: biased, q by {_percent(step.bias_q, step.bias_q_err)}, "
                f"u by {_percent(step.bias_u, step.bias_u_err)} percent."
            )
        if step.rms > step.high:
            said.append(
                f"{who}: the errors are too small by a factor of about {step.rms:.2f} (the rms pull of true errors "
                f"stays below {step.high:.2f})."
            )
        elif step.rms < step.low:
            said.append(
                f"{who}: the errors are too large by a factor of about {1 / step.rms:.2f} (the rms pull of true errors "
                f"stays above {step.low:.2f})."
            )
    sound = together.sound and all(step.sound for step in steps)
    if sound:
        q, u = _percent(together.bias_q, together.bias_q_err), _percent(together.bias_u, together.bias_u_err)
        said.append(
            f"Sound: {together.stars} artificial stars came back unbiased (q {q}, u {u} percent), with errors that "
            f"mean what they say (rms pull {together.rms:.2f}, {together.low:.2f} to {together.high:.2f} expected)."
        )
    if together.lost:
        said.append(f"{together.lost} of {together.stars + together.lost} stars could not be measured.")
    return sound, said


def _percent(value: float, error: float) -> str:
    return f"{100 * value:+.3g} ± {100 * error:.2g}"


def star_rows(
    results: Table,
    *,
    common: dict[str, Any],
    steps: NDArray[np.int_],
    rates: Array,
    z: NDArray[np.complex128],
    x: Array,
    y: Array,
    fraction: float,
) -> list[dict[str, Any]]:
    """A row of inject.ecsv for each artificial star of one visit and repeat; without a result where none was given."""
    found = {str(row["target"]): row for row in results if row["source"] == 0}
    rows = []
    for s in range(len(x)):
        row: dict[str, Any] = {
            **common, "star": s + 1, "step": int(steps[s]) + 1, "x": float(x[s]), "y": float(y[s]),
            "true_flux": float(rates[s]), "true_q": float(z[s].real), "true_u": float(z[s].imag), "flags": 0,
        }  # fmt: skip
        result = found.get(star_name(s))
        if result is not None:
            row |= {name: result[name] for name in ("flux", "frame", "q", "u", "q_err", "u_err", "qu_cov")}
            row |= {"frames": int(result["frames"]), "flags": int(result["flags"])}
            row["flux_ratio"] = result["flux"] / (rates[s] * fraction)
            row["snr"] = result["flux"] / result["flux_err"]
            for name in ("q", "u"):
                row[f"pull_{name}"] = (result[name] - row[f"true_{name}"]) / result[f"{name}_err"]
        rows.append(row)
    return rows


def star_name(number: int) -> str:
    """Name of an artificial star in its night file."""
    return f"artificial {number + 1}"
