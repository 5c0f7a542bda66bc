"""The page of a night, drawn from its stored products alone."""

from hwpol.report.page import write_report

__all__ = ["write_report"]
