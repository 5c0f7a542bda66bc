"""Health checks: uniform chances on clean nights, and failures that are named."""

import numpy as np
import pytest
from scipy.stats import kstest

from hwpol.fluxes import Fluxes
from hwpol.night.health import failed_checks, health_checks
from hwpol.night.solve import solve_visit

ANGLES = np.tile([0.0, 22.5, 45.0, 67.5], 6)


class Visit:
    """What the checks look at of a measured visit."""

    def __init__(self, number, fluxes, fwhm):
        self.task_number, self.filter, self.fluxes, self.fwhm = number, "V", fluxes, fwhm


def visits(rng, number, *, seeing_slope=0.0, step=0.0):
    made = []
    for k in range(number):
        fwhm = rng.normal(4.0, 0.3, len(ANGLES))
        late = np.arange(len(ANGLES)) >= len(ANGLES) // 2
        # The seeing of a cycle, so that its slope stands in the cycle's q.
        width = np.repeat(fwhm.reshape(6, 4).mean(axis=1), 4)
        q = 0.02 + seeing_slope * (width - 4.0) + step * late
        x = q * np.cos(4 * np.radians(ANGLES)) + 0.01 * np.sin(4 * np.radians(ANGLES))
        mean = 2e5 * np.stack([1 + x, 0.9 * (1 - x)], axis=1)
        flux = rng.poisson(mean).astype(float)
        fluxes = Fluxes.from_arrays(
            flux, flux, wave_plate=ANGLES, analyser=[0, 90], cycle=np.repeat(np.arange(1, 7), 4), filter="V",
            airmass=np.linspace(1, 1.3, len(ANGLES)) + rng.normal(0, 0.02, len(ANGLES)),
        )  # fmt: skip
        made.append(Visit(k + 1, fluxes, np.stack([fwhm, fwhm], axis=1)))
    return made


def checks(made):
    return health_checks(made, [solve_visit(visit.fluxes) for visit in made])


def test_chances_are_uniform_on_clean_data():
    rows = [row for seed in range(12) for row in checks(visits(np.random.default_rng(seed), 4))]
    for name in ("repeats", "halves", "seeing", "airmass"):
        chances = [row["chance"] for row in rows if row["check"] == name]
        assert len(chances) >= 12
        assert kstest(chances, "uniform").pvalue > 0.01
    assert np.mean([row["passed"] for row in rows]) > 0.98


def test_what_changes_with_seeing_is_named():
    rows = checks(visits(np.random.default_rng(1), 4, seeing_slope=0.02))
    assert any("follow the seeing" in word for word in failed_checks(rows))


def test_what_changes_with_time_is_named():
    rows = checks(visits(np.random.default_rng(2), 2, step=0.01))
    assert any("second half" in word for word in failed_checks(rows))


def test_a_night_of_single_cycles_has_no_checks_of_repeats():
    made = visits(np.random.default_rng(3), 1)
    made[0].fluxes = made[0].fluxes.take_frames(slice(0, 4))
    made[0].fwhm = made[0].fwhm[:4]
    assert checks(made) == []


@pytest.mark.parametrize("name", ["check", "filter", "visit", "chi2", "dof", "chance", "passed"])
def test_the_table_is_written(reduced_night, name):
    assert name in reduced_night[1].checks.colnames
    assert (reduced_night[0].parent / "reduced" / "checks.ecsv").is_file()
