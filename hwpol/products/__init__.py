"""Writers and readers of results: the only place that writes them."""

from hwpol.products.tables import FORMATS, make_table, read_results, read_table, write_table
from hwpol.products.writing import whole, write_text

__all__ = ["FORMATS", "make_table", "read_results", "read_table", "whole", "write_table", "write_text"]
