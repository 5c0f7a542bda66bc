"""Flags in words, and how much each takes away from a value."""

from __future__ import annotations

from dataclasses import dataclass

from hwpol.flags import FLAG_TEXT, Flag

#: The value, or the angle, is not what its error says.
BROKEN = (
    Flag.UNDETERMINED
    | Flag.PLATE_SUSPECT
    | Flag.NULL_FAILED
    | Flag.UNCALIBRATED
    | Flag.ANGLE_UNCALIBRATED
    | Flag.IP_UNCALIBRATED
)
#: Something outside the error bar may be in the value.
CARE = (
    Flag.NEIGHBOUR
    | Flag.SKY_DOUBTFUL
    | Flag.EFFICIENCY_ASSUMED
    | Flag.OUTSIDE_CALIBRATION
    | Flag.ROTATION
    | Flag.POSITION_GUESSED
    | Flag.NOT_FOUND
    | Flag.NO_PLATEAU
    | Flag.NOISE_DOUBTFUL
    | Flag.FROM_MEMORY
    | Flag.FOREGROUND_DOMINATES
    | Flag.CYCLE_VARIABLE
)

#: Sign and word of each level: shape and word carry it, colour only helps.
LEVELS = {"broken": ("✕", "do not trust"), "care": ("▲", "take care"), "note": ("·", "note")}


@dataclass(frozen=True)
class FlagWords:
    """One flag for the page."""

    name: str
    level: str
    text: str

    @property
    def words(self) -> str:
        """The name as words."""
        return self.name.replace("_", " ")

    @property
    def sign(self) -> str:
        """A shape that says the level without colour."""
        return LEVELS[self.level][0]

    @property
    def level_words(self) -> str:
        """The level in words."""
        return LEVELS[self.level][1]


def flag_words(value: int) -> list[FlagWords]:
    """The flags of a value, the gravest first."""
    order = list(LEVELS)
    found = [
        FlagWords(flag.name.lower(), level_of(int(flag)), FLAG_TEXT[flag])
        for flag in Flag
        if flag.name and int(value) & flag
    ]
    return sorted(found, key=lambda flag: order.index(flag.level))


def level_of(value: int) -> str:
    """The gravest level among the bits: "broken", "care" or "note"; "" for none."""
    if not int(value):
        return ""
    if int(value) & int(BROKEN):
        return "broken"
    return "care" if int(value) & int(CARE) else "note"


def listed(items: list[str], most: int = 6) -> str:
    """Words joined for a sentence, the rest counted."""
    if len(items) > most:
        return ", ".join(items[:most]) + f" and {len(items) - most} more"
    return " and ".join([", ".join(items[:-1]), items[-1]]) if len(items) > 1 else "".join(items)


def counted(number: int, one: str, many: str = "") -> str:
    """A count with its noun."""
    return f"{number} {one if number == 1 else many or one + 's'}"
