"""Whether nights agree."""

from __future__ import annotations

import numpy as np
import pytest

from hwpol.correction import Calibration
from hwpol.correction.fitting.nights import compare_nights
from hwpol.errors import InputError


def observed(bench, seed, change=0j, turned=0.0):
    """Return two nights of the same stars; in the second the instrument differs."""
    rng = np.random.default_rng(seed)
    truths = [4e-4 * complex(*rng.normal(size=2)) for _ in range(4)]
    standards, nights = [], []
    for night, b in (("one", bench(rng=rng)), ("two", bench(rng=rng, ip=0.0061 - 0.0034j + change,
                                                            zero_angle=3.7 + turned))):  # fmt: skip
        made = [b.zero(f"z{k}", true=truths[k], cat_err=4e-4, err=3e-5) for k in range(4)]
        made += [b.pol(f"p{k}", 0.06, 50.0 * k + 10, err=3e-5) for k in range(3)]
        standards += made
        nights += [night] * len(made)
    return standards, nights


def test_a_change_is_found_far_below_the_catalogue_errors(bench):
    standards, nights = observed(bench, 1, change=2e-4 - 1e-4j)
    rows = compare_nights(standards, nights, Calibration.fit(standards))
    assert [r["night"] for r in rows] == ["one", "two"]
    two = rows[1]
    assert abs(two["d_ip_q"] - 2e-4) < 4 * two["d_ip_q_err"]
    # Seven stars of 3e-5 in each night; the catalogue's 4e-4 cancels.
    assert two["d_ip_q_err"] == pytest.approx(3e-5 * np.sqrt(2 / 7), rel=0.1)
    assert two["chance"] < 1e-4
    assert rows[0]["d_ip_q"] == pytest.approx(-two["d_ip_q"], rel=1e-6)


def test_a_turn_is_found(bench):
    standards, nights = observed(bench, 2, turned=0.2)
    two = compare_nights(standards, nights, Calibration.fit(standards))[1]
    assert abs(two["d_zero_angle"] - 0.2) < 4 * two["d_zero_angle_err"]
    assert two["d_zero_angle_err"] < 0.03
    assert two["chance"] < 1e-4


def test_nights_that_agree(bench):
    """Chances of 40 pairs of equal nights: none below 1e-4 (false alarm 0.4 percent), mean 0.5 +- 0.046 (5 sigma)."""
    chances = []
    for seed in range(40):
        standards, nights = observed(bench, seed)
        chances.append(compare_nights(standards, nights, Calibration.fit(standards))[1]["chance"])
    assert min(chances) > 1e-4
    assert abs(np.mean(chances) - 0.5) < 5 * np.sqrt(1 / 12 / 40)


def test_zero_stars_alone_tell_of_ip_alone(bench):
    b = bench()
    standards = [b.zero("z"), b.pol("p", 0.05, 20), b.zero("z")]
    rows = compare_nights(standards, ["a", "a", "b"], Calibration.fit(standards))
    assert np.isfinite(rows[1]["d_ip_q"])
    assert np.isnan(rows[1]["d_zero_angle"])
    assert rows[1]["dof"] == 2


def test_single_night_and_wrong_input(bench):
    b = bench()
    standards = [b.zero("z"), b.pol("p", 0.05, 20)]
    calibration = Calibration.fit(standards)
    assert compare_nights(standards, ["a", "a"], calibration) == []
    with pytest.raises(InputError, match="2 standards, but 1 nights"):
        compare_nights(standards, ["a"], calibration)
