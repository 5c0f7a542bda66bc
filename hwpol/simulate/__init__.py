"""A sky, an optical train and a detector: raw frames with a known truth, by Mueller matrices alone."""

from __future__ import annotations

from hwpol.simulate.night import SimulatedNight, simulate
from hwpol.simulate.optics import Train, simulate_fluxes
from hwpol.simulate.scenario import Scenario, known_keys, shipped_scenarios

__all__ = ["Scenario", "SimulatedNight", "Train", "known_keys", "shipped_scenarios", "simulate", "simulate_fluxes"]
