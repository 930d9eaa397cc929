"""Many strengths at once against one replay of the same log, and against the peer run for each of them."""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np

from stream.runs.replay import replay
from stream.runs.tuning.grid import Grid
from stream.runs.tuning.tune import Job
from stream.runs.tuning.tune import tune as run_tune
from stream.settings import Settings
from tests.bench.feed import learning_settings, log_of
from tests.bench.figures import Figure, Seconds, alternating, best, timed
from tests.bench.peer import learn_by_peer

__all__ = ["tune"]

STRENGTHS = 32
GIVEN = tuple(float(strength) for strength in np.geomspace(2e-2, 2e-5, STRENGTHS))
"""About what is found for this log: non-zeros from none to several thousand."""
PEERS = 2


def tune(messages: int, rounds: int, distinct: int = 1_000_000) -> list[Figure]:
    """Seconds of `tune` with its document over those of `replay`; the peer's 32 runs over those of `tune`."""
    with log_of(messages, distinct) as folder:
        settings = learning_settings(folder)
        for grid in (Grid(GIVEN), Grid(STRENGTHS)):  # kernels compiled, file in the page cache
            _time_tuning(settings, grid)
        _time_replay(settings)
        given, searched, one, peers = map(
            best,
            alternating(
                rounds,
                lambda: _time_tuning(settings, Grid(GIVEN)),
                lambda: _time_tuning(settings, Grid(STRENGTHS)),
                lambda: _time_replay(settings),
                lambda: _time_peers(folder / "log.jsonl"),
            ),
        )
    each = 1e6 / messages
    details = {
        "ratio in processor time": given.cpu / one.cpu,
        "tuning, µs a message": given.wall * each,
        "one replay, µs a message": one.wall * each,
    }
    searching = {"ratio in processor time": searched.cpu / one.cpu}
    peer = {f"seconds of {PEERS} runs of the peer, scaled to {STRENGTHS}": peers.wall}
    return [
        Figure("32 given strengths against one replay", given.wall / one.wall, "times", at_most=3,
               details=details),
        Figure("32 strengths, the strongest searched", searched.wall / one.wall, "times", at_most=4,
               details=searching),
        Figure("32 runs of the peer against tuning", STRENGTHS / PEERS * peers.wall / given.wall, "times",
               at_least=40, details=peer),
    ]  # fmt: skip


def _time_tuning(settings: Settings, grid: Grid) -> Seconds:
    with tempfile.TemporaryDirectory() as kept:
        return timed(run_tune, settings, Path(kept), Job(grid))


def _time_replay(settings: Settings) -> Seconds:
    with tempfile.TemporaryDirectory() as state:
        return timed(replay, settings, Path(state))


def _time_peers(log: Path) -> Seconds:
    return timed(lambda: [learn_by_peer(log) for _ in range(PEERS)])
