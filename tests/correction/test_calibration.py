"""Applying a calibration: values, errors, what is shared, flags, and the table of standards."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.correction import Calibration
from hwpol.errors import HwpolWarning, InputError, MissingError
from hwpol.flags import Flag
from hwpol.schema import STANDARDS
from hwpol.stokes import Stokes

# Inverse of the model against its forward form: rounding.
EXACT = 1e-13


@pytest.fixture(scope="module")
def calibration(bench):
    b = bench()
    return Calibration.fit(
        [b.zero("a", mjd=61000.0), b.zero("b", mjd=61000.3), b.pol("p", 0.05, 20), b.pol("r", 0.03, 150)],
        instrument="bench", nights=("2026-03-01",),
    )  # fmt: skip


@settings(deadline=None, max_examples=30)
@given(p=st.floats(0, 0.5), theta=st.floats(0, 180), chi=st.floats(-360, 360), sense=st.sampled_from([1, -1]))
def test_apply_gives_the_sky(bench, calibration, p, theta, chi, sense):
    b = bench(sense=sense)
    sky = calibration.apply(b.observe(p, theta, chi=chi))
    model = calibration.filters["V"]
    # The fit itself is exact to 1e-11.
    assert abs(complex(sky.z) - p * np.exp(2j * np.radians(theta))) < 1e-9
    assert sky.frame == "sky"
    assert model.flags == 0


def test_errors_by_draws(bench, calibration):
    """Random and calibration covariance against 20000 and 2000 draws (5 sigma of a variance: 5 and 16 percent)."""
    rng = np.random.default_rng(0)
    seen = bench().observe(0.04, 70.0, chi=33.0, err=3e-4)
    sky = calibration.apply(seen)
    noisy = replace(
        seen, q=seen.q + 3e-4 * rng.normal(size=20000), u=seen.u + 3e-4 * rng.normal(size=20000),
        covariance=np.eye(2) * 9e-8, flags=0,
    )  # fmt: skip
    drawn = calibration.apply(noisy)
    # A variance of n draws scatters by sqrt(2 / n) of itself.
    many, few = 5 * np.sqrt(2 / 20000), 5 * np.sqrt(2 / 2000)
    np.testing.assert_allclose(np.cov(drawn.q, drawn.u), sky.covariance, rtol=many, atol=many * 9e-8)
    model = calibration.filters["V"]
    skies = []
    for values in rng.multivariate_normal(model.values, model.covariance, size=2000):
        other = Calibration({"V": replace(model, values=values)})
        skies.append(complex(other.apply(seen).z))
    spread = np.cov(np.real(skies), np.imag(skies))
    size = np.trace(sky.calibration_covariance) / 2
    np.testing.assert_allclose(spread, sky.calibration_covariance, rtol=few, atol=few * size)


def test_terms_shapes_and_agreement_with_apply(bench, calibration):
    ip, gain = calibration.terms("V", np.array([1.0, 2.0, 3.0]), None, np.array([0.0, 10.0]), None, 1)
    assert (ip.shape, gain.shape) == ((3, 2), (1, 1))
    assert abs(ip[0, 0] - bench().ip) < 1e-10
    assert abs(gain[0, 0] - bench().gain) < 1e-9


def test_apply_keeps_shapes(bench, calibration):
    seen = bench().observe(np.full((4, 3), 0.02), 40.0, x=np.arange(4.0), y=np.arange(4.0))
    sky = calibration.apply(seen)
    assert (sky.shape, sky.covariance.shape, sky.calibration_covariance.shape) == ((4, 3), (4, 3, 2, 2), (4, 3, 2, 2))
    assert np.ptp(sky.q) < EXACT


def test_inputs_stay_as_they_were(bench, calibration):
    seen = bench().observe(0.02, 40.0)
    before = (seen.q.copy(), seen.covariance.copy(), seen.flags.copy())
    calibration.apply(seen)
    for old, new in zip(before, (seen.q, seen.covariance, seen.flags), strict=True):
        assert np.array_equal(old, new)


def test_circular_part(bench, calibration):
    b = bench(sense=-1)
    seen = replace(b.observe(0.02, 40.0), v=np.array(0.003), covariance=np.diag([1e-8, 1e-8, 4e-8]))
    sky = calibration.apply(seen)
    assert (float(sky.v), sky.covariance.shape) == (-0.003, (3, 3))
    assert sky.covariance[2, 2] == pytest.approx(4e-8, rel=1e-12)


def test_shared_covariance(bench, calibration):
    b = bench()
    one = b.observe(np.array([0.02, 0.03]), np.array([10.0, 80.0]), x=np.zeros(2), y=np.zeros(2))
    two = b.observe(0.05, 120.0, chi=60.0)
    full = calibration.shared_covariance([one, two])
    assert full.shape == (3, 2, 3, 2)
    flat = full.reshape(6, 6)
    np.testing.assert_allclose(flat, flat.T, atol=1e-20)
    assert np.linalg.eigvalsh(flat).min() > -1e-18
    np.testing.assert_allclose(full[2, :, 2, :], calibration.apply(two).calibration_covariance, rtol=1e-12)
    np.testing.assert_allclose(full[1, :, 1, :], calibration.apply(one).calibration_covariance[1], rtol=1e-12)
    # Targets calibrated alike are off alike: observed or calibrated, the slopes are the same.
    np.testing.assert_allclose(calibration.shared_covariance([calibration.apply(one)]), full[:2, :, :2], rtol=1e-9)


def test_averages_do_not_beat_the_calibration(bench):
    """The mean of 200 targets is off by the calibration error, which the shared covariance tells (60 nights)."""
    pulls = []
    for seed in range(60):
        rng = np.random.default_rng(seed)
        b = bench(rng=rng)
        stars = [b.zero(f"z{k}", true=3e-4 * complex(*rng.normal(size=2))) for k in range(4)]
        calibration = Calibration.fit([*stars, b.pol("p", 0.05, 20, p_err=1e-5, theta_err=0.01)])
        seen = b.observe(np.full(200, 0.01), 70.0, err=5e-4)
        sky = calibration.apply(seen)
        shared = np.mean(calibration.shared_covariance([seen])[:, 0, :, 0])
        alone = 5e-4 / b.efficiency / np.sqrt(200)
        truth = 0.01 * np.cos(np.radians(140.0))
        pulls.append((sky.q.mean() - truth) / np.sqrt(shared + alone**2))
        assert shared > 2 * alone**2
    # rms of 60 pulls: 1 +- 0.09; five of those.
    assert 0.55 < np.sqrt(np.mean(np.square(pulls))) < 1.45


def test_flags(bench, calibration):
    b = bench()
    assert calibration.apply(b.observe(0.02, 40.0, mjd=61000.1)).flags == 0
    assert calibration.apply(b.observe(0.02, 40.0, mjd=61005.0)).flags == Flag.OUTSIDE_CALIBRATION
    assert calibration.apply(b.observe(0.02, 40.0, spread=1.5)).flags == Flag.ROTATION
    raw = b.observe(0.02, 40.0, flags=int(Flag.UNCALIBRATED | Flag.LOW_SIGNAL))
    assert calibration.apply(raw).flags == Flag.LOW_SIGNAL


def test_outside_the_field_is_flagged(bench):
    b = bench()
    x, y = (np.array(v, dtype=float) for v in ([0, 2047, 0, 2047, 1000, 500], [0, 0, 2047, 2047, 1000, 700]))
    standards = [b.zero(f"z{k}", x=x[k], y=y[k]) for k in range(6)]
    calibration = Calibration.fit(standards, field_order=1)
    inside, outside = (b.observe(0.0, 0.0, x=v, y=100.0) for v in (2047.0, 3000.0))
    assert not calibration.apply(inside).flags & Flag.OUTSIDE_CALIBRATION
    assert calibration.apply(outside).flags & Flag.OUTSIDE_CALIBRATION


def test_values_from_memory_are_flagged(bench):
    b = bench()
    standards = [b.zero("z"), replace(b.pol("p", 0.05, 20), provenance="memory")]
    calibration = Calibration.fit(standards)
    assert calibration.apply(b.observe(0.02, 40.0)).flags == Flag.FROM_MEMORY


def test_refusals(bench, calibration):
    b = bench()
    with pytest.raises(MissingError, match=r"no calibration for filter 'R': it has 'V'"):
        calibration.apply(b.observe(0.02, 40.0, filter="R"))
    with pytest.raises(InputError, match="on the sky already"):
        calibration.apply(calibration.apply(b.observe(0.02, 40.0)))
    with pytest.raises(InputError, match="made for instrument 'bench', not 'other'"):
        calibration.check_instrument("other")
    calibration.check_instrument("bench")


def test_warning_outside_its_nights(calibration):
    assert calibration.mjd == (61000.0, 61000.3)
    with pytest.warns(HwpolWarning, match=r"2026-03-01.*rests on standards of MJD 61000\.00 to 61000\.30"):
        assert calibration.warn_outside(61010.0, "night.toml")
    assert not calibration.warn_outside(61000.7)


def test_table_has_the_columns_of_the_schema(calibration):
    rows = calibration.standards_table()
    assert [row["name"] for row in rows] == ["a", "b", "p", "r"]
    for row in rows:
        assert list(row) == [column.name for column in STANDARDS]
        kinds = {"text": str, "number": float, "integer": int, "truth": bool}
        for column in STANDARDS:
            assert isinstance(row[column.name], kinds[column.kind]), column.name


def test_table_values(bench, calibration):
    row = calibration.standards_table()[2]
    assert (row["role"], row["cat_p"], row["cat_theta"]) == ("polarised", 0.05, 20)
    assert row["theta"] == pytest.approx(20.0, abs=1e-6)
    assert abs(row["dtheta"]) < 1e-6
    assert row["theta_err"] == pytest.approx(np.degrees(1e-4 / 0.985 / 0.05 / 2), rel=1e-3)
    assert np.isnan(calibration.standards_table()[0]["cat_theta"])


def test_undefined_values_stay_undefined(calibration):
    seen = Stokes(q=[np.nan, 0.01], u=[0.0, 0.0], covariance=np.eye(2) * 1e-8, frame="instrument", filter="V")
    sky = calibration.apply(seen)
    assert np.isnan(sky.q[0])
    assert np.isfinite(sky.q[1])
