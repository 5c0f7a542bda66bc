"""Groups the rows of star tables into stars, and finds contradictions among them."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from hwpol.correction.catalogue.tables import StarTable, star_key

#: Separation (arcsec) below which two names are taken for one star.
SAME_PLACE = 5.0
#: p (fraction) below which a star without an angle is taken for zero-polarised.
WEAK = 0.005


@dataclass
class Star:
    """A star with its rows: users' first."""

    name: str
    role: str
    table: Path
    users: bool
    aliases: list[str] = field(default_factory=list)
    rows: list[dict[str, Any]] = field(default_factory=list)
    curves: list[dict[str, Any]] = field(default_factory=list)

    def first(self, key: str) -> Any:
        """First known value of a column; NaN (or no text) where there is none."""
        values = (row.get(key) for row in self.rows + self.curves)
        return next((v for v in values if v not in (None, "") and v == v), "" if key == "variable" else float("nan"))


def separation(ra: float, dec: float, ra2: float, dec2: float) -> float:
    """Angle (arcsec) between two positions in deg."""
    a, d, a2, d2 = np.radians([ra, dec, ra2, dec2])
    haversine = np.sin((d2 - d) / 2) ** 2 + np.cos(d) * np.cos(d2) * np.sin((a2 - a) / 2) ** 2
    return float(np.degrees(2 * np.arcsin(np.sqrt(min(1.0, haversine)))) * 3600)


def enter(
    stars: list[Star], index: dict[str, Star], table: StarTable, number: int, row: dict[str, Any], users: bool
) -> list[str]:
    """Add a row to its star; the problems it makes."""
    names = [row["name"], *(n.strip() for n in row.get("aliases", "").split(";") if n.strip())]
    keys = [star_key(n) for n in names]
    own = [other for other in table.rows if other["name"] == row["name"]]
    blank = table.kind == "polarised" and not any(np.isfinite(other.get("theta", float("nan"))) for other in own)
    # A user's table may hold both kinds: a star of next to no p and no angle serves as zero-polarised.
    weak = all(other.get("p", float("nan")) < WEAK for other in own)
    zero = table.kind == "zero-polarised" or (users and blank and weak)
    role = "zero-polarised" if zero else "polarised"
    known = list({id(index[k]): index[k] for k in keys if k in index}.values())
    place = f"{table.path.name}, row {number} ({row['name']})"
    if len(known) > 1:
        return [f"{place}: its names belong to {' and '.join(s.name for s in known)}; a name stands for one star"]
    if known:
        star = known[0]
        if star.role != role:
            if star.users and not users:
                return []
            return [f"{place}: listed as {role}, but {star.table.name} lists it as {star.role}; remove one of them"]
    else:
        star = Star(row["name"], role, table.path, users)
        stars.append(star)
    star.aliases += [n for n, k in zip(names, keys, strict=True) if k not in index and n != star.name]
    index.update(dict.fromkeys(keys, star))
    (star.curves if table.kind == "curves" else star.rows).append(row)
    return []


def close_pairs(stars: list[Star]) -> list[str]:
    """Find stars of two roles at one place under different names."""
    zero = [s for s in stars if s.role == "zero-polarised"]
    problems = []
    for star in stars:
        if star.role == "polarised":
            for other in zero:
                if abs(star.first("dec") - other.first("dec")) < 0.01 and star.users == other.users:
                    gap = separation(star.first("ra"), star.first("dec"), other.first("ra"), other.first("dec"))
                    if gap < SAME_PLACE:
                        problems.append(
                            f"{star.name} ({star.table.name}, polarised) and {other.name} ({other.table.name}, "
                            f"zero-polarised) are {gap:.1f} arcsec apart; remove one of them"
                        )
    return problems
