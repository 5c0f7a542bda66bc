"""Instrumental polarisation of alt-az telescopes against tabulated values.

Two observations of a star 90 deg apart in parallactic angle: their mean in the telescope's frame is the instrument,
their mean on the sky the star (Tinbergen & Rutten, ISIS polarimetry manual, ING). The table holds the star
0.02 + 0.01 i and the instrument 0.001 - 0.002 i, recomputed from
(q + i u)_tel = (q + i u)_star exp(-2 i eta) + (q + i u)_inst.
"""

from __future__ import annotations

import numpy as np
import pytest

from hwpol.correction import Calibration, Standard
from hwpol.correction.model import FilterModel, term_names
from hwpol.stokes import Stokes

STAR, INSTRUMENT = 0.02 + 0.01j, 0.001 - 0.002j
TELESCOPE_FRAME = {-45: -0.009 + 0.018j, 0: 0.021 + 0.008j, 45: 0.011 - 0.022j, 90: -0.019 - 0.012j}
# What the sky shows where the instrument is not subtracted.
WRONG_SKY = {-45: 0.018 + 0.009j, 0: 0.021 + 0.008j, 45: 0.022 + 0.011j, 90: 0.019 + 0.012j}
# The table is of first order: the denominator of the full model adds up to |ip| p^2 = 1e-6.
SECOND_ORDER = 2e-6


def model(ip):
    """Axes fixed to the telescope: chi = eta, the instrument constant in them."""
    values = np.array([ip.real, ip.imag, 1.0, 0.0])
    return FilterModel(term_names("instrument"), values, np.zeros((4, 4)), np.array([[-1.0, 1.0], [-1.0, 1.0]]))


def observed(z, eta):
    return Stokes(
        q=z.real, u=z.imag, covariance=np.eye(2) * 1e-10, frame="instrument", position_angle=eta, parallactic=eta,
        filter="V",
    )  # fmt: skip


@pytest.mark.parametrize("eta", list(TELESCOPE_FRAME))
def test_observed_in_the_telescope_frame(eta):
    where = model(INSTRUMENT).setting((), eta, eta, 1)
    assert abs(complex(model(INSTRUMENT).observed(STAR, where)) - TELESCOPE_FRAME[eta]) < SECOND_ORDER


@pytest.mark.parametrize("eta", list(TELESCOPE_FRAME))
def test_calibrated_to_the_sky(eta):
    seen = observed(TELESCOPE_FRAME[eta], eta)
    assert abs(complex(Calibration({"V": model(INSTRUMENT)}).apply(seen).z) - STAR) < SECOND_ORDER
    assert abs(complex(Calibration({"V": model(0j)}).apply(seen).z) - WRONG_SKY[eta]) < 1e-15


def test_means_of_two_angles_90_deg_apart():
    assert abs((TELESCOPE_FRAME[-45] + TELESCOPE_FRAME[45]) / 2 - INSTRUMENT) < 1e-15
    assert abs((WRONG_SKY[-45] + WRONG_SKY[45]) / 2 - STAR) < 1e-15


def test_fit_of_one_zero_star_at_two_angles():
    """A zero star with a polarisation of its own: the mean of two angles is the instrument alone."""
    standards = [Standard(observed(TELESCOPE_FRAME[e], e), 0.0, np.nan, 0.03, np.nan, "star") for e in (-45, 45)]
    fitted = Calibration.fit(standards).filters["V"]
    # The star's error of 0.03 / sqrt(2) is common to both visits and turns with eta: it cancels.
    assert abs(complex(fitted.value("ip_q"), fitted.value("ip_u")) - INSTRUMENT) < SECOND_ORDER
    assert fitted.error("ip_q") < 1e-5


def test_efficiency_and_zero_angle_by_hand():
    """A polarised star of p = 5 percent at 30 deg seen as 4.9 percent at 33.7 deg: efficiency 0.98, zero angle 3.7."""
    seen = 0.049 * np.exp(2j * np.radians(33.7))
    standards = [
        Standard(observed(0j, 0.0), 0.0, np.nan, 1e-5, np.nan, "null"),
        Standard(observed(seen, 0.0), 0.05, 30.0, 1e-5, 0.01, "star"),
    ]
    fitted = Calibration.fit(standards).filters["V"]
    assert fitted.efficiency == pytest.approx(0.98, abs=1e-9)
    assert fitted.zero_angle == pytest.approx(3.7, abs=1e-7)
