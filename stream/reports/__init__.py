"""The document of `tune` or `converge` in, a page that explains it, and tables for other programs, out."""

from stream.reports.curves import convergence_page, write_convergence
from stream.reports.page import page, write_report
from stream.reports.spreadsheets import write_tables

__all__ = ["convergence_page", "page", "write_convergence", "write_report", "write_tables"]
