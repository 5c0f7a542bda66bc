"""A night as a whole: its file, its plan, its run."""

from hwpol.night.photometer import photometer
from hwpol.night.run import Night

__all__ = ["Night", "photometer"]
