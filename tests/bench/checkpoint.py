"""What learning and memory feel of a checkpoint that another thread writes."""

from __future__ import annotations

import os
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.background import BackgroundCheckpoints
from stream.batch import Batch
from stream.checkpoints import Checkpoints
from stream.runs.model import Model
from stream.settings.models import Learner, Settings, Space
from tests.bench.figures import Figure
from tests.bench.memory import ODD, WIDTH, resident

__all__ = ["checkpoint"]

ROW, ROWS = 64, 1024
NAME = np.frombuffer(b"note\x1fa name of 24 bytes.", np.uint8)


def checkpoint(live: int, rounds: int) -> list[Figure]:
    """Pause and memory of a checkpoint of `live` coordinates; one in seven tokens is any of them, the
    others are drawn as words are, the n-th with a chance of 1/n. The best of `rounds`, both cores in use.
    """
    os.sched_setaffinity(0, range(os.cpu_count() or 1))
    learner = Learner(method="ftrl", learning_rate=0.1, l1=1.0, l1_per_example=1e-7)
    model = Model(Settings(learner=learner, space=Space(address_bits=40)))
    for start in range(0, live, ROW * ROWS):
        model.predict_then_update(_batch(np.arange(start, start + ROW * ROWS) % live))
    draw = np.random.default_rng(3)
    feed = [_batch(_tokens(draw, live)) for _ in range(40)]
    _learn(model, feed, 60)
    found = [_round(model, feed) for _ in range(1 + rounds)][1:]  # the first one compiles
    least = min(found, key=lambda one: one.pause_ms)
    details = {
        "to begin, ms": least.begin_ms,
        "longest block meanwhile, ms": least.longest_ms,
        "longest block otherwise, ms": least.usual_longest_ms,
        "learning rate meanwhile, share of the usual": least.rate,
        "seconds until durable": least.seconds,
        "live": model.live,
        "non-zeros, all named": model.nnz(),
        "resident before, MB": least.before_mb,
    }
    return [
        Figure("pause of learning by a checkpoint", least.pause_ms, "ms", at_most=150, details=details),
        Figure("memory meanwhile, of that before", max(one.memory for one in found), "times", at_most=1.6),
    ]


@dataclass(frozen=True)
class _Round:
    pause_ms: float
    begin_ms: float
    longest_ms: float
    usual_longest_ms: float
    rate: float
    seconds: float
    before_mb: float
    memory: float


def _round(model: Model, feed: list[Batch]) -> _Round:
    usual = _learn(model, feed, 100)
    with tempfile.TemporaryDirectory() as folder:
        background = BackgroundCheckpoints(Checkpoints(Path(folder), 1))
        before = resident("VmRSS")
        Path("/proc/self/clear_refs").write_text("5")  # the peak starts again from here
        began = time.perf_counter()
        background.begin(1, model.begin_saving(), {})
        begin_s = time.perf_counter() - began
        meanwhile = []
        while background.done() is None:
            meanwhile.append(_learn(model, feed, 1)[0])
        seconds = time.perf_counter() - began
        peak = resident("VmHWM")
    walls, waits = np.array(meanwhile).T
    waited_s = waits.sum() - len(waits) * usual[:, 1].mean()  # beyond what other processes make it wait
    return _Round(
        pause_ms=1000 * (begin_s + max(0.0, waited_s)),
        begin_ms=1000 * begin_s,
        longest_ms=1000 * walls.max(),
        usual_longest_ms=1000 * usual[:, 0].max(),
        rate=usual[:, 0].mean() / walls.mean(),
        seconds=seconds,
        before_mb=before / 1e6,
        memory=peak / before,
    )


def _learn(model: Model, feed: list[Batch], blocks: int) -> npt.NDArray[np.float64]:
    """Seconds on the wall, and of these off the core, of each block: float64[blocks, 2]."""
    times = np.empty((blocks, 2))
    for i in range(blocks):
        wall, cpu = time.perf_counter(), time.thread_time()
        model.predict_then_update(feed[(model.learned // ROWS) % len(feed)])
        times[i, 0] = time.perf_counter() - wall
        times[i, 1] = times[i, 0] - (time.thread_time() - cpu)
    return times


def _tokens(draw: np.random.Generator, live: int) -> npt.NDArray[np.int64]:
    tokens = np.exp(draw.random(ROW * ROWS) * np.log(live)).astype(np.int64)
    tokens[::7] = draw.integers(0, live, len(tokens[::7]))
    return tokens


def _batch(tokens: npt.NDArray[np.int64]) -> Batch:
    """Blocks whose label hangs on their tokens, so that weights leave zero; all names are equal."""
    size = ROW * ROWS
    addresses = tokens.astype(np.uint64) * np.uint64(ODD) & np.uint64(WIDTH)
    labels = ((tokens.reshape(ROWS, ROW) % 5 == 0).sum(axis=1) > ROW // 5).astype(np.int8)
    return Batch(
        np.arange(0, size + 1, ROW),
        addresses,
        np.ones(size, np.float32),
        labels,
        np.ones(ROWS),
        NAME,
        np.zeros(size, np.int64),
        np.full(size, len(NAME), np.int32),
    )
