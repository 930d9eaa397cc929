"""Bedload as a library: settings, a log, rows of hashed tokens, a model, snapshots.

Importing this loads nothing else; each name below is loaded when it is first asked for.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from stream.batch import Batch
    from stream.decoding import Decoder
    from stream.errors import BedloadError
    from stream.features import Batcher
    from stream.metrics import Progress
    from stream.runs.model import Model
    from stream.runs.replay import replay
    from stream.runs.result import RunResult
    from stream.runs.scoring import Scorer, score
    from stream.settings import Settings, load
    from stream.snapshots import Snapshot, Snapshots, read_snapshot, write_snapshot
    from stream.sources import LogSource
    from stream.token_names import readable
    from stream.weights import Weights

__all__ = [
    "Batch",
    "Batcher",
    "BedloadError",
    "Decoder",
    "LogSource",
    "Model",
    "Progress",
    "RunResult",
    "Scorer",
    "Settings",
    "Snapshot",
    "Snapshots",
    "Weights",
    "load",
    "read_snapshot",
    "readable",
    "replay",
    "score",
    "write_snapshot",
]

_HOMES = {
    "stream.batch": ("Batch",),
    "stream.decoding": ("Decoder",),
    "stream.errors": ("BedloadError",),
    "stream.features": ("Batcher",),
    "stream.metrics": ("Progress",),
    "stream.runs.model": ("Model",),
    "stream.runs.replay": ("replay",),
    "stream.runs.result": ("RunResult",),
    "stream.runs.scoring": ("Scorer", "score"),
    "stream.settings": ("Settings", "load"),
    "stream.snapshots": ("Snapshot", "Snapshots", "read_snapshot", "write_snapshot"),
    "stream.sources": ("LogSource",),
    "stream.token_names": ("readable",),
    "stream.weights": ("Weights",),
}
_HOME_OF = {name: home for home, names in _HOMES.items() for name in names}


def __getattr__(name: str) -> Any:
    if name not in _HOME_OF:
        raise AttributeError(f"module 'stream' has no attribute {name!r}")
    return getattr(import_module(_HOME_OF[name]), name)
