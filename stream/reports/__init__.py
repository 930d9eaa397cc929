"""The tuning document in, a page that explains it and tables for other programs out."""

from stream.reports.page import page, write_report
from stream.reports.spreadsheets import write_tables

__all__ = ["page", "write_report", "write_tables"]
