"""Learning speed from JSON Lines on disk, against the same work done with general libraries."""

from __future__ import annotations

import tempfile
import time
from collections import defaultdict
from pathlib import Path

from stream.decoding import Decoder
from stream.features import Batcher
from stream.learners import Learner
from stream.metrics import Progress
from stream.runs.replay import replay
from stream.settings import Settings
from stream.sources import LogSource
from stream.tables import NameLedger, Table
from tests.bench.feed import learn_log, learning_settings, log_of, time_learning
from tests.bench.figures import Figure, Seconds, alternating, best, timed
from tests.bench.peer import learn_by_peer

__all__ = ["learn", "parts_of_learning"]


def learn(messages: int, rounds: int, distinct: int = 1_000_000) -> list[Figure]:
    """Messages/s of the loop, and of replay with the checkpoint and snapshot at its end, over the peer's."""
    with log_of(messages, distinct) as folder:
        settings = learning_settings(folder)
        learn_log(settings)  # kernels compiled, file in the page cache
        loop, whole, peer = map(
            best,
            alternating(
                rounds,
                lambda: time_learning(settings),
                lambda: _time_replay(settings),
                lambda: timed(learn_by_peer, folder / "log.jsonl"),
            ),
        )
        parts = parts_of_learning(settings)
    each = 1e6 / messages
    details = {"learning, µs a message": loop.cpu * each, "the peer, µs a message": peer.cpu * each}
    details["ratio by the clock"] = peer.wall / loop.wall
    details |= {f"{name}, µs a message": seconds * each for name, seconds in parts.items()}
    return [
        Figure("messages/s against the peer", peer.cpu / loop.cpu, "times", at_least=6, details=details),
        Figure("the same with a checkpoint at the end", peer.cpu / whole.cpu, "times"),
    ]


def _time_replay(settings: Settings) -> Seconds:
    with tempfile.TemporaryDirectory() as state:
        return timed(replay, settings, Path(state))


class _Split:
    """Adds up seconds by name: each `mark` gives those since the last one to a name."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = defaultdict(float)
        self._last = time.process_time()

    def mark(self, name: str) -> None:
        now = time.process_time()
        self.seconds[name] += now - self._last
        self._last = now


def parts_of_learning(settings: Settings, block: int = 1024) -> dict[str, float]:
    """Seconds of each stage over the whole log, the stages called as the loop calls them."""
    source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
    decoder, batcher = Decoder(settings), Batcher(settings)
    table, learner, names = Table(settings.state), Learner(settings.learner), NameLedger()
    progress = Progress(settings.metrics.window)
    split = _Split()
    while len(lines := source.read(min(block, progress.window_left))):
        split.mark("read")
        examples, _ = decoder.decode(lines)
        split.mark("decode")
        batch, _ = batcher.batch(examples)
        split.mark("batch")
        first = 0
        while first < len(batch):
            slots, stopped = table.admit(batch, first, len(batch))
            split.mark("admit")
            margins, named = learner.predict_then_update(table.cells, batch, slots, first, stopped)
            split.mark("learn")
            names.record(batch, named)
            split.mark("names")
            first = stopped
        progress.observe(margins[: len(batch)], batch.labels, batch.weights)
        if progress.window_left == 0:
            progress.close_window(int, table.live)
        split.mark("metrics")
    source.close()
    return dict(split.seconds)
