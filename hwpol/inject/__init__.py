"""Artificial stars of known polarisation in a night's own frames: the proof of its errors on its own data."""

from hwpol.inject.run import Injection, inject

__all__ = ["Injection", "inject"]
