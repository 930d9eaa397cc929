"""Scoring speed, JSON Lines in and out, against learning the same log."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

from stream.runs.replay import replay
from stream.runs.scoring import Scorer, json_lines
from stream.runs.scoring import score as score_lines
from stream.snapshots import Snapshot, read_snapshot
from tests.bench.feed import learning_settings, log_of, time_learning
from tests.bench.figures import Figure, Seconds, alternating, best, timed

__all__ = ["score"]


def score(messages: int, rounds: int, distinct: int = 1_000_000) -> list[Figure]:
    """Messages/s of scoring, each score written as a line, over those of learning."""
    with log_of(messages, distinct) as folder, tempfile.TemporaryDirectory() as state:
        settings = learning_settings(folder)
        snapshot = read_snapshot(replay(settings, Path(state)).snapshot)
        log = str(folder / "log.jsonl")
        _score_all(snapshot, log)
        times = alternating(rounds, lambda: _time_scoring(snapshot, log), lambda: time_learning(settings))
    ours, learning = map(best, times)
    details = {"scoring, µs a message": ours.cpu * 1e6 / messages, "non-zero": len(snapshot.weights)}
    details["ratio by the clock"] = learning.wall / ours.wall
    return [
        Figure("messages/s against learning", learning.cpu / ours.cpu, "times", at_least=1, details=details)
    ]


def _time_scoring(snapshot: Snapshot, log: str) -> Seconds:
    return timed(_score_all, snapshot, log)


def _score_all(snapshot: Snapshot, log: str) -> None:
    with open(os.devnull, "wb") as out:
        for lines in score_lines(Scorer(snapshot, [log])):
            out.write(json_lines(lines))
