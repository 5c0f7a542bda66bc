"""Fluxes to Stokes parameters: modulation rows, pair methods, the exact model on counts, nulls and limits."""

from hwpol.demodulation.demodulate import Solution, demodulate, fit_counts
from hwpol.demodulation.limits import photon_covariance
from hwpol.demodulation.modulation import modulation_rows
from hwpol.demodulation.nulls import half_turn_null, time_null
from hwpol.demodulation.plate import Suspect, plate_suspects
from hwpol.fluxes import register_solver

__all__ = [
    "Solution",
    "Suspect",
    "demodulate",
    "fit_counts",
    "half_turn_null",
    "modulation_rows",
    "photon_covariance",
    "plate_suspects",
    "time_null",
]

register_solver(demodulate)
