"""The Serkowski law against published statements and tabulated values of the formula."""

from __future__ import annotations

import numpy as np
import pytest

from hwpol.correction.catalogue.bands import LAMBDA_MAX, k_of, serkowski
from hwpol.correction.foreground import MOST_PER_REDDENING, excess_note

# p / p_max at U B V R I J H K (0.36 ... 2.20 micron), exact recomputations of the formula to six digits.
WAVELENGTHS = np.array([0.36, 0.44, 0.55, 0.64, 0.79, 1.25, 1.65, 2.20])
TABLE = {
    (0.545, "constant"): [0.820571, 0.948692, 0.999904, 0.970745, 0.853425, 0.452734, 0.243859, 0.106533],
    (0.545, "wilking"): [0.854601, 0.959015, 0.999924, 0.976685, 0.881676, 0.532795, 0.325889, 0.168778],
    (0.545, "whittet"): [0.854454, 0.958971, 0.999924, 0.976660, 0.881555, 0.532428, 0.325489, 0.168450],
    (0.55, "constant"): [0.813376, 0.944347, 1.0, 0.973933, 0.860023, 0.460653, 0.249576, 0.109691],
    (0.55, "wilking"): [0.847226, 0.955081, 1.0, 0.979024, 0.886007, 0.536810, 0.328239, 0.169681],
    (0.45, "whittet"): [0.963008, 0.999618, 0.969977, 0.910362, 0.786815, 0.453784, 0.278616, 0.148604],
    (0.80, "whittet"): [0.426080, 0.619890, 0.828740, 0.935548, 0.999788, 0.766062, 0.495995, 0.254304],
}
ROUNDING = 5e-7


@pytest.mark.parametrize(("lambda_max", "law"), list(TABLE))
def test_table_of_the_law(lambda_max, law):
    values = serkowski(WAVELENGTHS, lambda_max, k_of(lambda_max, law))
    np.testing.assert_allclose(values, TABLE[lambda_max, law], rtol=0, atol=ROUNDING)


def test_k_relations():
    """K = 1.15 (Serkowski, Mathewson & Ford 1975, abstract); the other two from memory."""
    assert float(k_of(0.545, "constant")) == 1.15
    assert float(k_of(0.545, "wilking")) == pytest.approx(0.91370, abs=5e-6)
    assert float(k_of(0.545, "whittet")) == pytest.approx(0.91470, abs=5e-6)
    # The two relations cross at 0.55 micron exactly.
    assert float(k_of(0.55, "wilking")) == pytest.approx(float(k_of(0.55, "whittet")), rel=1e-14)


def test_half_maximum():
    """Half of the maximum for K = 1.15 at 0.4600771077 and 2.1735487012 lambda_max (recomputed)."""
    for ratio in (0.4600771077, 2.1735487012):
        assert float(serkowski(ratio, 1.0, 1.15)) == pytest.approx(0.5, abs=1e-9)


def test_ratio_of_extinction_of_the_median_star():
    """R = 5.5 lambda_max gives R = 3.0 at the median 0.545 micron (Serkowski, Mathewson & Ford 1975, abstract)."""
    assert round(5.5 * LAMBDA_MAX, 1) == 3.0


@pytest.mark.parametrize(("p", "noted"), [(0.0269, False), (0.0271, True)])
def test_limit_of_polarisation_by_reddening(p, noted):
    """9 percent per magnitude (Serkowski et al. 1975): 2.70 percent at E(B-V) = 0.3."""
    assert MOST_PER_REDDENING == 0.09
    assert bool(excess_note(p, 0.3)) == noted
