"""What is to be simulated: the scenario file, its keys and the objects it becomes."""

from __future__ import annotations

from hwpol.simulate.scenario.reading import SAME_ANGLE, Scenario, known_keys, shipped_scenarios
from hwpol.simulate.scenario.scene import Array, Block, Target, in_filter

__all__ = ["SAME_ANGLE", "Array", "Block", "Scenario", "Target", "in_filter", "known_keys", "shipped_scenarios"]
