"""The document of `converge` in, a page with its curves out."""

from stream.reports.curves.convergence import convergence_page, write_convergence

__all__ = ["convergence_page", "write_convergence"]
