"""The usual kinds of values in TOML files: numbers within bounds, integers, texts, choices."""

from __future__ import annotations

import math
import re
from typing import Any

from hwpol.instrument.toml_check import Single, Unfit, nearest, shown


def number(
    *,
    above: float = -math.inf,
    at_least: float = -math.inf,
    below: float = math.inf,
    at_most: float = math.inf,
    what: str = "a number",
) -> Single:
    """Return a kind: a finite number (not a truth value, not a text) within bounds, as float."""
    text = what + _bounds(above, at_least, below, at_most)

    def parse(value: Any) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise Unfit
        if isinstance(value, int) and abs(value) > 10**300:
            raise Unfit
        if not (math.isfinite(value) and above < value < below and at_least <= value <= at_most):
            raise Unfit
        return float(value)

    return Single(text, parse)


def integer(*, at_least: int | None = None, at_most: int | None = None, what: str = "a whole number") -> Single:
    """Return a kind: an integer within bounds."""
    low = -math.inf if at_least is None else at_least
    high = math.inf if at_most is None else at_most

    def parse(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise Unfit
        return value

    return Single(what + _bounds(-math.inf, low, math.inf, high), parse)


def _bounds(above: float, at_least: float, below: float, at_most: float) -> str:
    limits = ((">", above), (">=", at_least), ("<", below), ("<=", at_most))
    said = [f"{sign} {limit:g}" for sign, limit in limits if math.isfinite(limit)]
    return " " + " and ".join(said) if said else ""


def truth() -> Single:
    """Return a kind: true or false."""

    def parse(value: Any) -> bool:
        if not isinstance(value, bool):
            raise Unfit
        return value

    return Single("true or false", parse)


def words(what: str = "a text", *, empty: bool = False, pattern: str = "") -> Single:
    """Return a kind: a text, not blank unless `empty`, that matches `pattern` as a whole where given."""

    def parse(value: Any) -> str:
        if not isinstance(value, str) or not (empty or value.strip()):
            raise Unfit
        if pattern and not re.fullmatch(pattern, value):
            raise Unfit
        return value

    return Single(what, parse)


def choice(*options: str | int) -> Single:
    """Return a kind: one of a few texts or integers."""
    texts = [option for option in options if isinstance(option, str)]

    def parse(value: Any) -> str | int:
        for option in options:
            if type(value) is type(option) and value == option:
                return option
        raise Unfit(near=nearest(value, texts) if isinstance(value, str) else "")

    said = [shown(option) for option in options]
    return Single(f"{', '.join(said[:-1])} or {said[-1]}" if len(said) > 1 else said[0], parse)
