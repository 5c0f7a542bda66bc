"""The list of standards, and which are up."""

from __future__ import annotations

import numpy as np
import pytest

from hwpol.correction.catalogue import Catalogue
from hwpol.correction.catalogue.listing import listing
from hwpol.errors import InputError
from hwpol.instrument.description import Site


@pytest.fixture(scope="module")
def catalogue():
    return Catalogue.read()


def test_all_standards_of_a_band(catalogue):
    rows = listing(catalogue, band="V")
    assert {r["role"] for r in rows} == {"polarised", "zero-polarised"}
    assert all(np.isfinite(r["p"]) and r["reference"] for r in rows)
    assert {r["name"] for r in rows} >= {"HD 204827", "HD 183143", "HD 21447"}
    assert "HD 183143" not in {r["name"] for r in listing(catalogue, band="V", variable=False)}


def test_those_up_in_a_night(catalogue):
    south = Site(longitude=-70.7, latitude=-29.3, height=2300.0)
    up = {r["name"]: r for r in listing(catalogue, band="V", date="2026-06-15", site=south)}
    assert "HD 147084" in up  # culminates near midnight in June, 5 deg from the zenith
    # Altitude of culmination: 90 - |latitude - dec|, sampled every 10 min (below 0.1 deg near the meridian).
    assert up["HD 147084"]["altitude"] == pytest.approx(90 - abs(-29.3 + 24.169), abs=1.5)
    assert up["HD 147084"]["up_from"] < up["HD 147084"]["up_to"]
    assert "BD+64 106" not in up  # never rises there
    assert "HD 21447" not in up


def test_dates_far_ahead_need_no_network(catalogue):
    north = Site(longitude=0.0, latitude=28.76)
    assert any(r["name"] == "HD 204827" for r in listing(catalogue, date="2027-08-01", site=north))


@pytest.mark.parametrize("date", ["tonight", "2026-13-01", "2026-02-30"])
def test_wrong_dates(catalogue, date):
    with pytest.raises(InputError, match="YYYY-MM-DD"):
        listing(catalogue, date=date, site=Site(0.0, 0.0))


def test_no_site(catalogue):
    with pytest.raises(InputError, match="the site is not known"):
        listing(catalogue, date="2026-06-15")
