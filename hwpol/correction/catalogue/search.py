"""Which stars are standards, and what is known of them in a band.

Floors applied where a source gives no error (fractions and degrees):

- a tabulated p without error: 0.001, the rounding of most lists;
- a tabulated theta without error: 28.65 deg x p_err / p, at least 0.5 deg;
- Serkowski parameters without errors: p_max 0.001, lambda_max 0.02 micron, theta 1 deg (lists round to these);
- a star said to vary, used only when asked for: at least 0.003 and 1 deg, what Hsu & Breger (1982, abstract) give for
  the standards they find unsuitable;
- a zero-polarisation star listed without a value: 0.0005; one with a value without error: the value itself. Single
  measurements of listed white dwarfs show 0.0008 to 0.0017 (A&A 2009, aa11152-08, Table 3).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from hwpol.correction.catalogue.bands import K_ERR, Curve, band_name, fit_curve, k_of
from hwpol.correction.catalogue.stars import Star, close_pairs, enter, separation
from hwpol.correction.catalogue.tables import own_tables, read_table, star_key
from hwpol.errors import ConfigError, InputError, MissingError

P_FLOOR, THETA_FLOOR = 0.001, 0.5
CURVE_P_FLOOR, CURVE_LAMBDA_FLOOR, CURVE_THETA_FLOOR = 0.001, 0.02, 1.0
VARIABLE_P_FLOOR, VARIABLE_THETA_FLOOR = 0.003, 1.0
ZERO_FLOOR, ZERO_LEAST = 0.0005, 1e-5
#: Radius (arcsec) of the search by position, and the years of proper motion (from J2000) allowed for.
SEARCH_RADIUS, SEARCH_YEARS = 30.0, 40.0
#: Error (deg) of an angle carried beyond a star's tabulated bands, per micron: HD 204827, an extreme case, turns by 5.
ANGLE_DRIFT = 3.0
#: Tabulated bands from which on the law is fitted through them rather than taken from the table of parameters.
FIT_BANDS = 3
#: Micron within which a wavelength stands for a tabulated band, and within which it may depart from that of the band
#: named beside it; further off, the wavelength is believed (a Johnson R called R, say).
SAME_WAVELENGTH, BAND_LEEWAY = 0.01, 0.03


@dataclass(frozen=True)
class Entry:
    """A standard star in one band.

    `p`, `p_err` fractions; `theta`, `theta_err` deg (NaN for zero-polarised stars); errors as used, floors included;
    `wavelength` micron; `ra`, `dec` deg (NaN where not known). `method` is "tabulated", "serkowski" (parameters from
    the table), "fitted" (the law through the star's tabulated bands) or "nearest" (a zero-polarisation star's value of
    another band, one read before one recalled). `variable` says who calls the star variable or
    doubtful, empty for nobody. `provenance` is "memory" where any value behind it was recalled.
    """

    name: str
    aliases: tuple[str, ...]
    role: str
    ra: float
    dec: float
    vmag: float
    band: str
    wavelength: float
    p: float
    p_err: float
    theta: float
    theta_err: float
    variable: str
    reference: str
    provenance: str
    method: str
    note: str = ""


class _Value(NamedTuple):
    """A value of p (fraction) and theta (deg) with what is said of it."""

    p: float
    p_err: float
    theta: float
    theta_err: float
    method: str
    rows: list[dict[str, Any]]


@dataclass(frozen=True)
class Catalogue:
    """Standard stars by name or position. Make one with `Catalogue.read`."""

    stars: tuple[Star, ...]
    bands: tuple[dict[str, Any], ...]
    k_law: str = "whittet"

    @staticmethod
    def read(extra: Iterable[str | Path] = (), *, k_law: str = "whittet") -> Catalogue:
        """Read our tables and users' own, which go first.

        Parameters
        ----------
        extra : iterable of path
            Tables in the same format. A star they list has the role they give it, and their bands come first.
        k_law : {"whittet", "wilking", "constant"}
            How K of the Serkowski law follows lambda_max where a table gives none.

        Raises
        ------
        ConfigError
            When a table is wrong, or gives one star two roles.
        """
        k_of(1.0, k_law)
        own = own_tables()
        users = [read_table(path) for path in extra]
        stars: list[Star] = []
        index: dict[str, Star] = {}
        problems: list[str] = []
        for table in [*users, *own]:
            for number, row in enumerate(table.rows, start=1):
                if table.kind != "bands":
                    problems += enter(stars, index, table, number, row, table not in own)
        problems += close_pairs(stars)
        if problems:
            raise ConfigError(problems, "standard-star tables")
        bands = tuple(row for table in [*users, *own] if table.kind == "bands" for row in table.rows)
        return Catalogue(tuple(stars), bands, k_law)

    def wavelength_of(self, band: str) -> float:
        """Wavelength (micron) of a band or filter name.

        Raises
        ------
        MissingError
            When the name means no band we know.
        """
        return self._band(band)[1]

    def _band(self, text: str) -> tuple[str, float]:
        for name in (text, band_name(text)):
            for row in self.bands:
                if name is not None and row["band"] == name and (name != "R" and name != "I"):
                    return name, row["wavelength"]
        known = ", ".join(dict.fromkeys(row["band"] for row in self.bands))
        raise MissingError(
            f"band {text!r} is not known: expected one of {known}; give the filter its band or wavelength (micron) in "
            f"[filters] of the instrument file"
        )

    def star(self, name: str = "", ra: float | None = None, dec: float | None = None) -> Star | None:
        """Star of a name, else within 30 arcsec of a position (deg, ICRS); None where there is none.

        Raises
        ------
        InputError
            When several stars fit the position, or the name says one star and the position another.
        """
        named = None
        if name:
            key = star_key(name)
            named = next((s for s in self.stars if key in {star_key(n) for n in (s.name, *s.aliases)}), None)
        near = self._near(ra, dec)
        if named is not None:
            others = [s for s in near if s is not named]
            if near and named not in near and others:
                raise InputError(
                    f"{name}: its name is that of {named.name}, but its position ({ra:.4f}, {dec:+.4f}) that of "
                    f"{others[0].name}; give the [[target]] a role and a catalogue name"
                )
            return named
        if len(near) > 1:
            raise InputError(
                f"{name or 'target'} at ({ra:.4f}, {dec:+.4f}): {', '.join(s.name for s in near)} are both within "
                f"{SEARCH_RADIUS:g} arcsec; give the [[target]] a catalogue name"
            )
        return near[0] if near else None

    def _near(self, ra: float | None, dec: float | None) -> list[Star]:
        if ra is None or dec is None or not (np.isfinite(ra) and np.isfinite(dec)):
            return []
        found = []
        for star in self.stars:
            leeway = np.nan_to_num(star.first("pm")) * SEARCH_YEARS + np.nan_to_num(star.first("pos_err"))
            if separation(ra, dec, star.first("ra"), star.first("dec")) <= SEARCH_RADIUS + leeway:
                found.append(star)
        return found

    def find(
        self,
        name: str = "",
        ra: float | None = None,
        dec: float | None = None,
        *,
        band: str | None = None,
        wavelength: float | None = None,
        variable: bool = False,
    ) -> Entry | None:
        """What is known of a standard star in a band.

        Parameters
        ----------
        name : str
            Name or alias; case, blanks, hyphens and underscores do not matter.
        ra, dec : float, optional
            Position (deg, ICRS), used within 30 arcsec where the name is not known.
        band : str, optional
            Band or filter name. Without band and wavelength the V value, else the first.
        wavelength : float, optional
            Micron; used where `band` is not given or not a band we know.
        variable : bool
            Whether stars said to vary (or to be doubtful) are wanted as well.

        Returns
        -------
        Entry or None
            The tabulated value, else one by the Serkowski law with the angle interpolated in wavelength. None for a
            star that is no standard, has no usable value, or varies and was not asked for.

        Raises
        ------
        InputError
            When the match is ambiguous.
        MissingError
            When the band is not known and no wavelength given.
        """
        star = self.star(name, ra, dec)
        if star is None or (star.first("variable") and not variable):
            return None
        return self.entry(star, band, wavelength)

    def entry(self, star: Star, band: str | None = None, wavelength: float | None = None) -> Entry | None:
        """Value of a star (as `star` returns it) in a band; None where nothing usable is tabulated."""
        canonical, lam = self._wanted(band, wavelength)
        value = self._zero(star, canonical, lam) if star.role == "zero-polarised" else self._value(star, canonical, lam)
        if value is None:
            return None
        if star.first("variable"):
            value = value._replace(
                p_err=max(value.p_err, VARIABLE_P_FLOOR), theta_err=max(value.theta_err, VARIABLE_THETA_FLOOR)
            )
        sources = [row.get("provenance", "") for row in value.rows]
        provenance = "memory" if "memory" in sources else "derived" if "derived" in sources else sources[0]
        return Entry(
            name=star.name,
            aliases=tuple(star.aliases),
            role=star.role,
            ra=star.first("ra"),
            dec=star.first("dec"),
            vmag=star.first("vmag"),
            band=band or (value.rows[0].get("band", "") if value.method == "tabulated" else ""),
            wavelength=lam if lam is not None else self._row_wavelength(value.rows[0]),
            p=value.p,
            p_err=value.p_err,
            theta=value.theta,
            theta_err=value.theta_err,
            variable=star.first("variable"),
            reference="; ".join(dict.fromkeys(row["reference"] for row in value.rows)),
            provenance=provenance,
            method=value.method,
            note="; ".join(dict.fromkeys(row["note"] for row in value.rows if row.get("note"))),
        )

    def _wanted(self, band: str | None, wavelength: float | None) -> tuple[str | None, float | None]:
        if wavelength is not None and not wavelength > 0:
            raise InputError(f"wavelength = {wavelength}: expected micron > 0")
        if band:
            try:
                name, lam = self._band(band)
            except MissingError:
                if wavelength is None:
                    raise
                return None, wavelength
            if wavelength is not None and abs(wavelength - lam) > BAND_LEEWAY:
                return None, wavelength
            return name, lam if wavelength is None else wavelength
        return None, wavelength

    def _row_band(self, row: dict[str, Any]) -> str | None:
        return band_name(row["band"]) if row["band"] in {"R", "I"} else row["band"] or None

    def _row_wavelength(self, row: dict[str, Any]) -> float:
        try:
            return self._band(row["band"])[1] if row.get("band") else float("nan")
        except MissingError:
            return float("nan")

    def _pick(self, rows: list[dict[str, Any]], band: str | None, lam: float | None) -> dict[str, Any] | None:
        """Choose the row that holds the band itself."""
        if not rows:
            return None
        if band is None and lam is None:
            return next((row for row in rows if self._row_band(row) == "V"), rows[0])
        if band is not None:
            return next((row for row in rows if self._row_band(row) == band), None)
        near = [row for row in rows if lam is not None and abs(self._row_wavelength(row) - lam) <= SAME_WAVELENGTH]
        return near[0] if near else None

    def _zero(self, star: Star, band: str | None, lam: float | None) -> _Value | None:
        row = self._pick(star.rows, band, lam) or next((r for r in star.rows if not r["band"]), None)
        method = "tabulated"
        if row is None:
            target = 0.55 if lam is None else lam
            row = min(
                star.rows,
                key=lambda r: (
                    not np.isfinite(r["p"]),
                    r.get("provenance") == "memory",
                    abs(np.nan_to_num(self._row_wavelength(r), nan=target) - target),
                ),
            )
            method = "nearest"
        p = row["p"] if np.isfinite(row["p"]) else 0.0
        err = row["p_err"]
        if not np.isfinite(err):
            err = max(p, ZERO_LEAST) if np.isfinite(row["p"]) else ZERO_FLOOR * np.sqrt(2)
        return _Value(p, float(err), float("nan"), float("nan"), method, [row])

    def _value(self, star: Star, band: str | None, lam: float | None) -> _Value | None:
        rows = [row for row in star.rows if np.isfinite(row["p"])]
        row = self._pick(rows, band, lam)
        if row is None and lam is None:
            if not star.curves:
                return None
            lam = self._band("V")[1]
        if row is not None:
            p, p_err, method, used = row["p"], _p_error(row), "tabulated", [row]
            if np.isfinite(row["theta"]):
                return _Value(p, p_err, row["theta"], _theta_error(row), method, used)
            lam = self._row_wavelength(row) if lam is None else lam
        else:
            assert lam is not None
            curve, used, method = self._curve(star, rows)
            if curve is None:
                return None
            p, p_err = curve.at(lam)
        theta, theta_err, more = self._angle(star, rows, lam)
        return None if np.isnan(theta) else _Value(p, p_err, theta, theta_err, method, [*used, *more])

    def _curve(self, star: Star, rows: list[dict[str, Any]]) -> tuple[Curve | None, list[dict[str, Any]], str]:
        placed = list({self._row_wavelength(r): r for r in reversed(rows) if self._row_wavelength(r) > 0}.values())
        if star.curves and len(placed) < FIT_BANDS:
            row = star.curves[0]
            own = np.isfinite(row["k"])
            p_err = row["p_max_err"] if np.isfinite(row["p_max_err"]) else CURVE_P_FLOOR
            lam_err = row["lambda_max_err"] if np.isfinite(row["lambda_max_err"]) else CURVE_LAMBDA_FLOOR
            covariance = np.diag([(p_err / row["p_max"]) ** 2, (lam_err / row["lambda_max"]) ** 2, K_ERR**2])
            k = row["k"] if own else float(k_of(row["lambda_max"], self.k_law))
            law = "own" if own else self.k_law
            return Curve(row["p_max"], row["lambda_max"], k, covariance, law), [row], "serkowski"
        if not placed:
            return None, [], ""
        lams = [self._row_wavelength(row) for row in placed]
        return fit_curve(lams, [r["p"] for r in placed], [_p_error(r) for r in placed], self.k_law), placed, "fitted"

    def _angle(self, star: Star, rows: list[dict[str, Any]], lam: float) -> tuple[float, float, list[dict[str, Any]]]:
        """Angle (deg) at a wavelength, linear between the neighbouring tabulated bands, constant beyond them."""
        first = {self._row_wavelength(r): r for r in reversed(rows) if np.isfinite(r["theta"])}
        known = sorted((wave, row) for wave, row in first.items() if wave > 0) if first else []
        if not known:
            curve = next((row for row in star.curves if np.isfinite(row["theta"])), None)
            return (float("nan"),) * 2 + ([],) if curve is None else (curve["theta"], CURVE_THETA_FLOOR, [curve])
        waves = np.array([wave for wave, _ in known])
        after = int(np.searchsorted(waves, lam))
        pair = [known[max(after - 1, 0)], known[min(after, len(known) - 1)]]
        (wave0, row0), (wave1, row1) = pair
        if wave0 == wave1:
            error = np.hypot(_theta_error(row0), ANGLE_DRIFT * abs(lam - wave0))
            return row0["theta"], float(error), [row0]
        share = (lam - wave0) / (wave1 - wave0)
        turned = (row1["theta"] - row0["theta"] + 90.0) % 180.0 - 90.0
        error = np.hypot((1 - share) * _theta_error(row0), share * _theta_error(row1))
        return float((row0["theta"] + share * turned) % 180.0), float(error), [row0, row1]


def _p_error(row: dict[str, Any]) -> float:
    return float(row["p_err"]) if np.isfinite(row["p_err"]) and row["p_err"] > 0 else P_FLOOR


def _theta_error(row: dict[str, Any]) -> float:
    if np.isfinite(row["theta_err"]) and row["theta_err"] > 0:
        return float(row["theta_err"])
    return float(max(np.degrees(_p_error(row) / max(row["p"], 1e-6)) / 2, THETA_FLOOR))
