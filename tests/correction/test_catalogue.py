"""Names, positions, precedence, and values in bands."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.table import Table

from hwpol.correction.catalogue import Catalogue
from hwpol.correction.catalogue.tables import star_key
from hwpol.errors import ConfigError, InputError, MissingError


@pytest.fixture(scope="module")
def catalogue():
    return Catalogue.read()


def own(path, *stars, role="polarised"):
    """Write a table of (name, aliases, ra, dec, band, p, p_err, theta, theta_err)."""
    names = ("name", "aliases", "ra", "dec", "band", "p", "p_err", "theta", "theta_err")
    table = Table(rows=[*stars], names=names)
    table["vmag"] = 9.0
    table["variable"] = ""
    table["reference"] = "mine"
    table.meta["role"] = role
    table.write(path, format="ascii.ecsv")
    return path


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("HD204827", "HD 204827"),
        ("hd 204827", "HD 204827"),
        ("HD_204827", "HD 204827"),
        ("HD-204827", "HD 204827"),
        ("BD +59 389", "BD+59 389"),
        ("bd+59_389", "BD+59 389"),
        ("BD+59d389", "BD+59 389"),
        ("HD 236928", "BD+59 389"),
        ("Cyg OB2 12", "VI Cyg 12"),
        ("Cyg OB2 #12", "VI Cyg 12"),
        ("CygOB2 No.12", "VI Cyg 12"),
        ("BD-12 5133", "BD-12 5133"),
        ("BD -12 5133", "BD-12 5133"),
        ("BD\u221212 5133", "BD-12 5133"),
        ("G191B2B", "G191-B2B"),
        ("omi sco", "HD 147084"),
        ("WD2149+021", "WD 2149+021"),
        ("hiltner960", "Hiltner 960"),
        ("NGC2024-1", "NGC 2024-1"),
    ],
)
def test_names_as_headers_write_them(catalogue, name, expected):
    assert catalogue.star(name).name == expected


@pytest.mark.parametrize("name", ["BD+12 5133", "BD+25 5133", "BD+59 3890", "HD 20482", "WD 2359+434", "blazar 1", ""])
def test_names_of_other_stars(catalogue, name):
    assert catalogue.star(name) is None


def test_sign_of_the_zone_counts():
    assert star_key("BD-12 5133") != star_key("BD+12 5133")
    assert star_key("BD+5 3993") == star_key("bd +05_3993")
    assert star_key("BD+5 9389") != star_key("BD+59 389")


def test_every_name_and_alias_finds_its_star(catalogue):
    for star in catalogue.stars:
        for name in (star.name, *star.aliases):
            assert catalogue.star(name) is star
            assert catalogue.star(name.lower().replace(" ", "_")) is star


def test_position_within_30_arcsec(catalogue):
    ra, dec = 322.240667, 58.739784
    step = 1 / 3600 / np.cos(np.radians(dec))
    assert catalogue.star("some field", ra + 29 * step, dec).name == "HD 204827"
    assert catalogue.star("some field", ra + 31 * step, dec) is None
    assert catalogue.star("some field", float("nan"), float("nan")) is None


def test_position_across_the_meridian_of_zero(tmp_path):
    path = own(tmp_path / "mine.ecsv", ("Edge", "", 0.001, 10.0, "V", 0.05, 0.001, 20.0, 0.2))
    assert Catalogue.read([path]).star("", 359.999, 10.0).name == "Edge"


def test_coarse_and_moving_stars_have_leeway(catalogue):
    star = catalogue.star("HD 10476")  # 0.73 arcsec/yr
    assert catalogue.star("x", star.first("ra"), star.first("dec") + 45 / 3600) is star


def test_ambiguous_position_is_refused(tmp_path):
    path = own(
        tmp_path / "mine.ecsv",
        ("One", "", 10.0, 10.0, "V", 0.05, 0.001, 20.0, 0.2),
        ("Two", "", 10.0, 10.005, "V", 0.05, 0.001, 20.0, 0.2),
    )
    catalogue = Catalogue.read([path])
    with pytest.raises(InputError, match="One, Two are both within 30 arcsec"):
        catalogue.find("field", 10.0, 10.0025, band="V")
    assert catalogue.find("Two", 10.0, 10.0025, band="V").name == "Two"


def test_name_against_position_is_refused(catalogue):
    with pytest.raises(InputError, match=r"its name is that of HD 204827, but its position .* that of HD 154445"):
        catalogue.find("HD 204827", 256.384412, -0.892066, band="V")


def test_tabulated_value(catalogue):
    entry = catalogue.find("HD 204827", band="R")
    assert (entry.p, entry.p_err, entry.theta, entry.theta_err) == (0.04893, 0.00029, 59.10, 0.17)
    assert (entry.method, entry.role, entry.provenance, entry.band) == ("tabulated", "polarised", "memory", "R")
    assert "Schmidt" in entry.reference


def test_missing_errors_get_floors(catalogue):
    entry = catalogue.find("Vela1 95", band="V")  # no angle error in the table
    assert entry.theta_err == 0.5
    entry = catalogue.find("HD 147084", band="V")  # Serkowski parameters without errors
    assert (entry.method, entry.theta_err) == ("serkowski", 1.0)
    assert entry.p_err >= 0.001 * entry.p / 0.043


def test_zero_polarised_entries(catalogue):
    tabulated = catalogue.find("HD 21447", band="B")
    assert (tabulated.p, tabulated.p_err, tabulated.role) == (0.00017, 0.0003, "zero-polarised")
    assert np.isnan(tabulated.theta)
    other = catalogue.find("HD 21447", band="I")  # B was read, V recalled
    assert (other.p, other.method, other.provenance) == (0.00017, "nearest", "read")
    unlisted = catalogue.find("HD 10476", band="R")  # listed as unpolarised without a value
    assert np.hypot(unlisted.p, unlisted.p_err) / np.sqrt(2) == pytest.approx(0.0005, rel=1e-12)
    any_band = catalogue.find("HD 4813", band="I")  # a value for every band, without error
    assert (any_band.p, any_band.p_err) == (0.000006, 0.00001)


def test_variable_stars_only_when_asked(catalogue):
    assert catalogue.find("HD 183143", band="V") is None
    entry = catalogue.find("HD 183143", band="V", variable=True)
    assert "Cotton" in entry.variable
    assert (entry.p_err >= 0.003, entry.theta_err >= 1.0) == (True, True)
    assert catalogue.find("HD 251204", band="V", variable=True) is None  # a warning without a value


def test_unknown_band_is_refused_unless_a_wavelength_is_given(catalogue):
    with pytest.raises(MissingError, match=r"band 'wide' is not known: .*\[filters\]"):
        catalogue.find("HD 204827", band="wide")
    assert catalogue.find("HD 204827", band="wide", wavelength=0.7).method == "fitted"
    assert catalogue.find("HD 204827", wavelength=0.5501).method == "tabulated"
    with pytest.raises(InputError, match="expected micron > 0"):
        catalogue.find("HD 204827", wavelength=-0.5)


def test_law_through_bands_predicts_a_band_left_out(catalogue):
    """The fitted law agrees with the tabulated band beside it: 2 percent of p covers law and recalled values."""
    for name in ("BD+59 389", "HD 25443", "HD 19820", "HD 204827"):
        tabulated = catalogue.find(name, band="R")
        law = catalogue.find(name, wavelength=0.665)
        assert law.method == "fitted"
        assert abs(law.p - tabulated.p) < 0.03 * tabulated.p
        assert law.p_err < 0.02 * law.p


def test_angle_is_interpolated_in_wavelength(catalogue):
    middle = catalogue.find("HD 204827", wavelength=(0.55 + 0.64) / 2)
    assert middle.theta == pytest.approx((58.73 + 59.10) / 2, abs=1e-9)
    assert middle.theta_err == pytest.approx(np.hypot(0.08, 0.17) / 2, abs=1e-9)
    beyond = catalogue.find("HD 204827", wavelength=0.99)
    assert beyond.theta == 59.94
    assert beyond.theta_err > 0.6


def test_angle_interpolates_across_180(tmp_path):
    path = own(
        tmp_path / "mine.ecsv",
        ("Wrap", "", 10.0, 10.0, "B", 0.05, 0.001, 179.0, 0.2),
        ("Wrap", "", 10.0, 10.0, "V", 0.05, 0.001, 1.0, 0.2),
    )
    assert Catalogue.read([path]).find("Wrap", wavelength=0.495).theta % 180 == pytest.approx(0.0, abs=1e-9)


def test_johnson_r_is_not_cousins_r(catalogue):
    entry = catalogue.find("BD+59 389", band="Johnson R")
    assert (entry.method, entry.wavelength) == ("fitted", 0.70)


def test_a_wavelength_far_from_its_band_is_believed(catalogue):
    assert catalogue.find("BD+59 389", band="R", wavelength=0.66).method == "tabulated"
    assert catalogue.find("BD+59 389", band="R", wavelength=0.70).method == "fitted"


def test_users_tables_go_first(tmp_path):
    path = own(tmp_path / "mine.ecsv", ("hd204827", "mine;my star", 322.24, 58.74, "V", 0.06, 0.001, 50.0, 0.2))
    catalogue = Catalogue.read([path])
    assert (catalogue.find("HD 204827", band="V").p, catalogue.find("my star", band="V").p) == (0.06, 0.06)
    assert catalogue.find("HD 204827", band="R").p == 0.04893  # ours still serves the other bands
    assert Catalogue.read().find("HD 204827", band="V").p == 0.05322


def test_users_role_goes_first(tmp_path):
    star = ("HD 21447", "", 52.500764, 55.451809, "V", 0.02, 0.001, 20.0, 1.0)
    entry = Catalogue.read([own(tmp_path / "mine.ecsv", star)]).find("HD 21447", band="V")
    assert (entry.role, entry.p) == ("polarised", 0.02)


def test_two_roles_are_refused(tmp_path):
    star = ("Janus", "", 10.0, 10.0, "V", 0.02, 0.001, 20.0, 1.0)
    paths = [own(tmp_path / "a.ecsv", star), own(tmp_path / "zero_b.ecsv", star, role="zero-polarised")]
    with pytest.raises(ConfigError, match=r"zero_b\.ecsv, row 1 \(Janus\): listed as zero-polarised, but a\.ecsv"):
        Catalogue.read(paths)


def test_two_roles_at_one_place_are_refused(tmp_path):
    first = ("Janus", "", 10.0, 10.0, "V", 0.02, 0.001, 20.0, 1.0)
    second = ("Bifrons", "", 10.0, 10.0003, "V", 0.0002, 0.0001, 20.0, 1.0)
    paths = [own(tmp_path / "a.ecsv", first), own(tmp_path / "zero_b.ecsv", second, role="zero-polarised")]
    with pytest.raises(ConfigError, match=r"Janus .* and Bifrons .* are 1\.1 arcsec apart; remove one"):
        Catalogue.read(paths)


def test_an_alias_of_two_stars_is_refused(tmp_path):
    path = own(
        tmp_path / "a.ecsv",
        ("One", "", 10.0, 10.0, "V", 0.02, 0.001, 20.0, 1.0),
        ("Two", "", 20.0, 10.0, "V", 0.02, 0.001, 20.0, 1.0),
        ("Three", "One; Two", 30.0, 10.0, "V", 0.02, 0.001, 20.0, 1.0),
    )
    with pytest.raises(ConfigError, match=r"row 3 \(Three\): its names belong to One and Two"):
        Catalogue.read([path])


def test_unknown_relation_for_k_is_refused():
    with pytest.raises(InputError, match="K relation 'mine'"):
        Catalogue.read(k_law="mine")
