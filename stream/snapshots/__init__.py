"""Snapshots: the non-zero weights of a model in a documented format, for readers."""

from stream.snapshots.compare import Change, Comparison, compare
from stream.snapshots.export import ExportFormat, export
from stream.snapshots.layout import About, Snapshot, read_snapshot, write_snapshot
from stream.snapshots.store import SnapshotEntry, Snapshots

__all__ = [
    "About",
    "Change",
    "Comparison",
    "ExportFormat",
    "Snapshot",
    "SnapshotEntry",
    "Snapshots",
    "compare",
    "export",
    "read_snapshot",
    "write_snapshot",
]
