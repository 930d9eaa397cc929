"""Figures of a worker in; metrics, answers to health checks and log lines out."""

from stream.operating.exposition import Exposition
from stream.operating.figures import FeedHealth, Figures, HasHealth, not_ready, stuck
from stream.operating.lines import log_lines, progress_fields
from stream.operating.port import Port

__all__ = [
    "Exposition",
    "FeedHealth",
    "Figures",
    "HasHealth",
    "Port",
    "log_lines",
    "not_ready",
    "progress_fields",
    "stuck",
]
