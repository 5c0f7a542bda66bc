"""The exceptions of the package: one root, a few children that are also built-in kinds.

Every message names the place, the value found and what was expected. All of
them pickle, so they cross process boundaries.
"""

from __future__ import annotations


class HwpolError(Exception):
    """Root of everything the package raises on purpose."""


class ConfigError(HwpolError, ValueError):
    """A description file (instrument, night, scenario) cannot be used.

    Parameters
    ----------
    problems : list of str or str
        One line for each problem: place, what was found, what is allowed.
    source : str
        The file or object that holds them.
    """

    def __init__(self, problems: list[str] | str, source: str = "") -> None:
        self.problems = [problems] if isinstance(problems, str) else list(problems)
        self.source = source
        super().__init__(self.problems, source)

    def __str__(self) -> str:
        if len(self.problems) == 1:
            return f"{self.source}: {self.problems[0]}" if self.source else self.problems[0]
        head = f"{len(self.problems)} problems" + (f" in {self.source}" if self.source else "")
        return "\n".join([head + ":", *(f"  {line}" for line in self.problems)])


class InputError(HwpolError, ValueError):
    """Data handed in by the user cannot be used: shape, unit, value or content."""


class MissingError(HwpolError, KeyError):
    """A name (star, band, column, file, target) is not known."""

    def __str__(self) -> str:
        return str(self.args[0]) if self.args else ""


class HwpolWarning(UserWarning):
    """A doubt about the set-up that does not stop the work."""
