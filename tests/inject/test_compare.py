"""The verdict: silent on true errors, loud on biased values and wrong errors."""

import numpy as np
import pytest
from astropy.table import Table
from scipy import stats

from hwpol.inject.compare import BIASED, PULLED, star_rows, summarise, verdict

ERROR = np.array([0.001, 0.002, 0.004, 0.008, 0.016])


def stars(rng, count=40, bias=0.0, scale=1.0, lost=0):
    """Stars of five brightnesses with true q = 0.02, u = -0.01, their scatter `scale` times their errors."""
    step = np.arange(count) % 5
    error = ERROR[step]
    q, u = 0.02 + bias + scale * error * rng.standard_normal(count), -0.01 + scale * error * rng.standard_normal(count)
    table = Table(
        {"step": step + 1, "true_flux": 1e4 / (step + 1.0), "snr": 1.4 / error, "flux_ratio": np.ones(count),
         "true_q": np.full(count, 0.02), "true_u": np.full(count, -0.01), "q": q, "u": u, "q_err": error,
         "u_err": error, "pull_q": (q - 0.02) / error, "pull_u": (u + 0.01) / error}
    )  # fmt: skip
    if lost:
        for name in ("q", "u", "pull_q", "pull_u"):
            table[name][:lost] = np.nan
    return table


def test_false_alarms_are_as_rare_as_stated():
    rng = np.random.default_rng(4)
    trials = 200
    alarms = sum(not verdict(*summarise(stars(rng)))[0] for _ in range(trials))
    # Bias and pull, each once for the steps (their tests share the chance) and once for all stars.
    most = stats.binom.isf(1e-4, trials, 2 * (BIASED + PULLED))
    assert alarms <= most


def test_bias_is_found_and_told():
    sound, words = verdict(*summarise(stars(np.random.default_rng(1), bias=0.003)))
    assert not sound
    assert "all stars together: biased, q by +0.3" in words[0]


@pytest.mark.parametrize(("scale", "word"), [(1.8, "too small"), (0.5, "too large")])
def test_wrong_errors_are_found_and_told(scale, word):
    sound, words = verdict(*summarise(stars(np.random.default_rng(2), scale=scale)))
    assert not sound
    assert any(word in line and line.startswith("all stars together") for line in words)


def test_bias_and_pull_by_hand():
    table = stars(np.random.default_rng(0), count=2, scale=0.0)
    table["step"] = 1
    table["q_err"] = table["u_err"] = [0.001, 0.002]
    table["q"] = [0.021, 0.024]
    table["pull_q"], table["pull_u"] = [1.0, 2.0], [0.0, 0.0]
    (step,), together = summarise(table)
    # Weights 1e6 and 2.5e5: (0.001 x 1e6 + 0.004 x 2.5e5) / 1.25e6 = 0.0016, error 1 / sqrt(1.25e6) = 0.000894.
    assert step.bias_q == pytest.approx(0.0016)
    assert step.bias_q_err == pytest.approx(1 / np.sqrt(1.25e6))
    assert step.rms == pytest.approx(np.sqrt(5 / 4))
    assert (together.stars, together.lost, together.number) == (2, 0, 0)


def test_lost_stars_are_counted():
    steps, together = summarise(stars(np.random.default_rng(3), lost=3))
    assert (together.stars, together.lost) == (37, 3)
    assert sum(step.lost for step in steps) == 3
    assert "3 of 40 stars could not be measured." in verdict(steps, together)[1]


def test_nothing_measured_proves_nothing():
    sound, words = verdict(*summarise(stars(np.random.default_rng(3), count=4, lost=4)))
    assert not sound
    assert "nothing is proved" in words[0]


def test_rows_hold_a_star_without_a_result_too():
    names = ("target", "source", "flux", "flux_err", "frame", "q", "u", "q_err", "u_err", "qu_cov", "frames", "flags")
    results = Table(rows=[("artificial 1", 0, 90.0, 3.0, "sky", 0.03, 0.0, 0.01, 0.02, 0.0, 8, 4)], names=names)
    first, second = star_rows(
        results, common={"target": "Fern"}, steps=np.array([0, 3]), rates=np.array([100.0, 10.0]),
        z=np.array([0.02 + 0.01j, 0.0j]), x=np.array([5.0, 6.0]), y=np.array([7.0, 8.0]), fraction=0.9,
    )  # fmt: skip
    assert (first["pull_q"], first["pull_u"]) == pytest.approx((1.0, -0.5))
    assert first["flux_ratio"] == pytest.approx(1.0)
    assert first["snr"] == pytest.approx(30.0)
    assert (first["star"], first["step"], second["step"]) == (1, 1, 4)
    assert "q" not in second
    assert second["true_flux"] == 10.0
