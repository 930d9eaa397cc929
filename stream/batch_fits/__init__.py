"""Sparse rows in, batch fits of them by general libraries out: judges from outside."""

from stream.batch_fits.fits import BatchFit, batch_fit
from stream.batch_fits.rows import Rows

__all__ = ["BatchFit", "Rows", "batch_fit"]
