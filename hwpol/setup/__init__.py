"""From the headers of a folder of raw frames to a commented instrument file and night file."""

from __future__ import annotations

from hwpol.setup.findings import Finding
from hwpol.setup.proposal import Proposal, propose

__all__ = ["Finding", "Proposal", "propose"]
