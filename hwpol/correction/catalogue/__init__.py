"""Standard stars: the tables, search by name and position, values in any band, and which are up."""

from __future__ import annotations

from hwpol.correction.catalogue.search import Catalogue, Entry

__all__ = ["Catalogue", "Entry"]
