"""Writers and readers of results: the only place that writes them."""

from hwpol.products.tables import FORMATS, make_table, read_results, read_table, write_table
from hwpol.products.visit_file import VisitFile, read_visit, write_visit
from hwpol.products.writing import whole, write_text

__all__ = [
    "FORMATS",
    "VisitFile",
    "make_table",
    "read_results",
    "read_table",
    "read_visit",
    "whole",
    "write_table",
    "write_text",
    "write_visit",
]
