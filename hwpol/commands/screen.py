"""What commands print: progress, tables of results, notes."""

from __future__ import annotations

import sys
import textwrap
import time
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

#: Columns of a terminal that text is wrapped to.
WIDTH = 100


class Steps:
    """Progress of a count of things: a bar on a terminal, plain lines elsewhere, nothing when quiet."""

    def __init__(self, quiet: bool = False, unit: str = "visit") -> None:
        self.quiet, self.unit = quiet, unit
        self.bar: Any = None
        self.begun = time.monotonic()

    def __call__(self, done: int, total: int, words: str) -> None:
        """Show that `done` of `total` are finished, the last one being `words`."""
        if self.quiet:
            return
        if not sys.stderr.isatty():
            left = (time.monotonic() - self.begun) / done * (total - done) if done else float("nan")
            rest = f", {left:.0f} s left" if 0 < done < total else ""
            print(f"{self.unit} {done}/{total}: {words}{rest}", file=sys.stderr, flush=True)
            return
        if self.bar is None:
            from tqdm import tqdm

            self.bar = tqdm(total=total, unit=f" {self.unit}", leave=False, ncols=WIDTH)
        self.bar.set_description(words[:40])
        self.bar.update(done - self.bar.n)
        if done >= total:
            self.bar.close()


def percent(value: float, error: float, signs: bool = True) -> str:
    """A fraction in percent with as many decimals as two digits of its error call for."""
    if not np.isfinite(value):
        return "-"
    places = 3 if not np.isfinite(error) or error <= 0 else int(np.clip(1 - np.floor(np.log10(100 * error)), 0, 5))
    return f"{100 * value:{'+' if signs else ''}.{places}f}"


def with_error(value: float, error: float) -> str:
    """A fraction and its error in percent, two digits of the error."""
    if not np.isfinite(value):
        return "-"
    return f"{percent(value, error)} ± {percent(error, error, signs=False)}"


def degrees(value: float, error: float) -> str:
    """An angle and its error, deg."""
    if not np.isfinite(value):
        return "-"
    if not np.isfinite(error):
        return f"{value:.1f}"
    places = int(np.clip(1 - np.floor(np.log10(max(error, 1e-4))), 0, 3))
    return f"{value:.{places}f} ± {error:.{places}f}"


def table(head: Sequence[str], rows: Iterable[Sequence[str]], left: int = 2) -> str:
    """Columns of text, the first `left` of them and remarks set flush left, the others flush right."""
    lines = [list(head), *[list(row) for row in rows]]
    widths = [max(len(line[c]) for line in lines) for c in range(len(head))]
    shown = []
    for number, line in enumerate(lines):
        cells = [
            t.ljust(w) if c < left or head[c] == "remarks" else t.rjust(w)
            for c, (t, w) in enumerate(zip(line, widths, strict=True))
        ]
        shown.append("  ".join(cells).rstrip())
        if number == 0:
            shown.append("  ".join("-" * w for w in widths))
    return "\n".join(shown)


def notes(lines: Sequence[str], title: str = "To be kept in mind") -> str:
    """Notes as a wrapped list; empty text for none."""
    if not lines:
        return ""
    wrapped = [textwrap.fill(line, WIDTH, initial_indent="  - ", subsequent_indent="    ") for line in lines]
    return "\n".join([f"{title}:", *wrapped])


def results_table(results: Any, most: int = 60) -> str:
    """The targets of a night: p, theta, q, u in percent and degrees."""
    from hwpol.flags import flag_names

    rows = []
    for row in results[:most]:
        name = str(row["target"]) if row["source"] == 0 else f"{row['target']} #{row['source']}"
        sky = row["frame"] == "sky"
        total_q, total_u = (
            np.hypot(row["q_err"], np.nan_to_num(row["q_cal_err"])),
            np.hypot(row["u_err"], np.nan_to_num(row["u_cal_err"])),
        )
        weak = row["p_debiased"] < 3 * row["p_err"]
        p = f"< {percent(row['p_upper95'], row['p_err'], signs=False)}" if weak else with_error(
            row["p_debiased"], row["p_err"]
        ).lstrip("+")  # fmt: skip
        angle = degrees(row["theta"], row["theta_err"]) if sky and not weak else "-"
        shown = [f for f in flag_names(row["flags"]) if f not in {"low_signal"}]
        rows.append(
            [name, str(row["filter"]), with_error(row["q"], total_q), with_error(row["u"], total_u), p, angle,
             str(row["cycles"]), ", ".join(f.replace("_", " ") for f in shown)]
        )  # fmt: skip
    text = table(["target", "filter", "q (%)", "u (%)", "p (%)", "theta (deg)", "cycles", "remarks"], rows)
    more = len(results) - most
    return text + (f"\n... and {more} more rows in results.ecsv" if more > 0 else "")


def calibration_lines(calibration: Any) -> list[str]:
    """Instrumental polarisation, efficiency and zero angle of each filter in words."""
    lines = []
    for name, model in calibration.filters.items():
        parts = []
        for label, q, u in (("ip", "ip_q", "ip_u"), ("ip of the telescope", "tel_q", "tel_u")):
            if q in model.names and q not in model.held:
                parts.append(
                    f"{label} q {with_error(model.value(q), model.error(q))}, "
                    f"u {with_error(model.value(u), model.error(u))} %"
                )
        if not parts:
            parts.append("ip not measured, taken as zero")
        if np.isfinite(model.zero_angle_err):
            parts.append(f"zero angle {degrees(model.zero_angle, model.zero_angle_err)} deg")
        else:
            parts.append("zero angle not measured")
        if np.isfinite(model.efficiency_err):
            parts.append(f"efficiency {model.efficiency:.4f} ± {model.efficiency_err:.4f}")
        else:
            parts.append(f"efficiency taken as {model.efficiency:.4f}")
        lines.append(f"{name or 'no filter'}: " + "; ".join(parts))
    return lines


def standards_table(standards: Any) -> str:
    """Standards against their catalogue values."""
    rows = []
    for row in standards:
        polarised = row["role"] == "polarised"
        rows.append(
            [str(row["name"]), str(row["filter"]), str(row["role"]),
             with_error(row["p"], row["p_err"]).lstrip("+"),
             percent(row["cat_p"], row["cat_p_err"], signs=False),
             degrees(row["theta"], row["theta_err"]) if polarised else "-",
             f"{row['cat_theta']:.1f}" if polarised and np.isfinite(row["cat_theta"]) else "-",
             percent(row["dq"], row["q_err"]), percent(row["du"], row["u_err"]),
             f"{row['dtheta']:+.2f}" if np.isfinite(row["dtheta"]) else "-",
             f"{row['sigma']:.1f}" if np.isfinite(row["sigma"]) else "-",
             "yes" if row["used"] else "no",
             str(row["doubt"]) + (" (from memory)" if row["provenance"] == "memory" else "")]
        )  # fmt: skip
    head = ["standard", "filter", "role", "p (%)", "cat.", "theta (deg)", "cat.", "dq (%)", "du (%)", "dtheta",
            "sigma", "used", "remarks"]  # fmt: skip
    return table(head, rows, left=3)
