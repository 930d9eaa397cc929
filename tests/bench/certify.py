"""Certifying a snapshot on a log of a million messages against learning that log by one replay."""

from __future__ import annotations

import tempfile
from pathlib import Path

from stream.runs.certifying.certify import certify as run_certify
from stream.runs.replay import replay
from stream.settings import Settings
from stream.snapshots import Snapshot, read_snapshot
from tests.bench.feed import learning_settings, log_of
from tests.bench.figures import Figure, Seconds, alternating, best, timed

__all__ = ["certify"]


def certify(messages: int, rounds: int, distinct: int = 1_000_000) -> list[Figure]:
    """Seconds of `certify` over those of the whole `replay` that left the snapshot."""
    with log_of(messages, distinct) as folder, tempfile.TemporaryDirectory() as state:
        settings = learning_settings(folder)
        snapshot = read_snapshot(replay(settings, Path(state)).snapshot)
        log = str(folder / "log.jsonl")
        found = run_certify(snapshot, [log])  # kernels compiled, file in the page cache
        ours, learning = map(
            best, alternating(rounds, lambda: _time_certifying(snapshot, log), lambda: _time_replay(settings))
        )
    details = {
        "ratio in processor time": ours.cpu / learning.cpu,
        "certifying, µs a message": ours.wall * 1e6 / messages,
        "one replay, µs a message": learning.wall * 1e6 / messages,
        "gap, % of the objective": 100 * found.findings.gap / found.findings.objective,
    }
    return [
        Figure("certify against one replay", ours.wall / learning.wall, "times", at_most=3, details=details)
    ]


def _time_certifying(snapshot: Snapshot, log: str) -> Seconds:
    return timed(run_certify, snapshot, [log])


def _time_replay(settings: Settings) -> Seconds:
    with tempfile.TemporaryDirectory() as state:
        return timed(replay, settings, Path(state))
