"""`hwpol plan`: how the frames of a night group, and what is missing."""

from __future__ import annotations

import argparse

from hwpol.commands import ASIDE, DONE


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument("night", help="night file (TOML)")


def run(options: argparse.Namespace) -> int:
    """Print visits, cycles, calibrations, roles and doubts."""
    from hwpol.commands.screen import notes, table
    from hwpol.correction.catalogue import Catalogue
    from hwpol.frames.summary import describe
    from hwpol.night import Night
    from hwpol.night.roles import role_of, targets_of

    night = Night.read(options.night)
    config = night.config
    frames = night.inventory()
    print(describe(frames, flat=config.detector.flat))
    catalogue = Catalogue.read(config.correction.catalogues)
    rows, doubts = [], []
    for visit in frames.science().visits():
        for target in targets_of(visit, config.targets):
            role = role_of(target, visit, catalogue, config.instrument)
            entry = role.entry
            value = "" if entry is None else f"p {100 * entry.p:.2f} %" + (
                f", theta {entry.theta:.1f} deg" if role.role == "polarised" else ""
            )  # fmt: skip
            rows.append(
                [str(int(visit.table["visit"][0])), target.name, str(visit.table["filter"][0]), role.role, value]
            )
            doubts += [role.note] if role.note else []
    if rows:
        print("\nRoles\n" + table(["visit", "target", "filter", "role", "catalogue"], rows, left=5))
    if doubts:
        print("\n" + notes(doubts, "Standards in doubt"))
    used = frames.column("status") == "used"
    return DONE if used.all() and len(rows) else ASIDE
