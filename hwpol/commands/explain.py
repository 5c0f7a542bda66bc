"""`hwpol explain`: what a column, flag or setting means."""

from __future__ import annotations

import argparse
import difflib
import textwrap

from hwpol.commands import DONE
from hwpol.errors import MissingError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("name", help="column, flag or setting, such as p_debiased, saturated or photometry.radius")


def run(options: argparse.Namespace) -> int:
    """Print everything of that name."""
    print("\n\n".join(explain(options.name)))
    return DONE


def explain(name: str) -> list[str]:
    """Explanations of everything called `name` (any case; a setting also by its last part).

    Raises
    ------
    MissingError
        When nothing has that name; names the nearest.
    """
    wanted = name.strip().casefold()
    if " " in wanted:
        wanted = wanted.replace(" ", "_")
    found: list[str] = []
    known: dict[str, list[str]] = {}
    for label, text in _everything():
        known.setdefault(label.casefold(), []).append(text)
    found = known.get(wanted, [])
    if not found:
        found = [t for label, texts in known.items() if label.rsplit(".", 1)[-1] == wanted for t in texts]
    if not found:
        near = difflib.get_close_matches(wanted, known, n=3, cutoff=0.5)
        raise MissingError(f"{name}: no column, flag or setting of that name; nearest: {', '.join(near) or 'none'}")
    return [textwrap.fill(text, 100, subsequent_indent="  ", break_on_hyphens=False) for text in found]


def _everything() -> list[tuple[str, str]]:
    from hwpol.flags import FLAG_TEXT
    from hwpol.instrument import reading
    from hwpol.night import config
    from hwpol.schema import TABLES

    entries: list[tuple[str, str]] = []
    columns: dict[tuple[str, str], list[str]] = {}
    texts = {}
    for table, listed in TABLES.items():
        for column in listed:
            columns.setdefault((column.name, column.text), []).append(f"{table}.ecsv")
            texts[column.name, column.text] = column
    for (label, text), where in columns.items():
        column = texts[label, text]
        unit = f", {column.unit}" if column.unit else ""
        entries.append((label, f"column {label} of {', '.join(where)} ({column.kind}{unit}): {text}."))
    for flag, text in FLAG_TEXT.items():
        assert flag.name is not None
        entries.append((flag.name, f"flag {flag.name.lower()} (bit value {int(flag)}): {text}."))
    for place, keys in (("instrument file", reading.known_keys()), ("night file", config.known_keys())):
        for label, info in keys.items():
            default = "" if info.default is None else f" Default: {info.default!r}."
            needed = " Required." if info.required else ""
            said = f"setting {label} of the {place}: {info.help} Expected: {info.expected}.{default}{needed}"
            entries.append((label, said))
    return entries
