"""What learning and memory feel of a checkpoint that another thread writes."""

from __future__ import annotations

import os
import resource
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

Floats = npt.NDArray[np.float64]
ROW, ROWS = 256, 256  # so few examples that no sweep falls into a round, which takes memory by itself
SIZE = ROW * ROWS
NAME = np.frombuffer(b"note\x1fa name of 24 bytes.", np.uint8)
ROW_PTR, VALUES, WEIGHTS = np.arange(0, SIZE + 1, ROW), np.ones(SIZE, np.float32), np.ones(ROWS)
PLACES, LENGTHS = np.zeros(SIZE, np.int64), np.full(SIZE, len(NAME), np.int32)
WALL, CORE, LEFT = 0, 1, 2


def checkpoint(live: int, rounds: int) -> list[Figure]:
    """Pause and memory of a checkpoint of `live` coordinates, two cores in use; the best of `rounds`.

    One in seven tokens is any coordinate, the others are drawn as words are, the n-th with a chance of 1/n.
    """
    os.sched_setaffinity(0, range(os.cpu_count() or 1))
    learner = Learner(method="ftrl", learning_rate=0.1, l1=1.0, l1_per_example=1e-7)
    model = Model(Settings(learner=learner, space=Space(address_bits=40)))
    for start in range(0, live, SIZE):
        model.predict_then_update(_batch(np.arange(start, start + SIZE) % live))
    draw = np.random.default_rng(3)
    feed = [_batch(_tokens(draw, live)) for _ in range(40)]
    _learn(model, feed, 60)
    found = [_round(model, feed) for _ in range(1 + rounds)]
    least = min(found[1:], key=lambda one: one.pause_ms)
    details = {
        "to begin, ms": least.begin_ms,
        "longest wait of a block meanwhile, ms": least.longest_wait_ms,
        "mean wait of a block otherwise, ms": least.usual_wait_ms,
        "time of a block meanwhile, times the usual": least.slower,
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
    longest_wait_ms: float
    usual_wait_ms: float
    slower: float
    seconds: float
    before_mb: float
    memory: float


def _round(model: Model, feed: list[Batch]) -> _Round:
    usual = _learn(model, feed, 100)
    with tempfile.TemporaryDirectory() as folder:
        background = BackgroundCheckpoints(Checkpoints(Path(folder), 1))
        before = resident("VmRSS")
        Path("/proc/self/clear_refs").write_text("5")  # the peak starts again from here
        began = _clocks()
        background.begin(1, model.begin_saving(), {})
        begin = _clocks() - began
        blocks = []
        while background.done() is None:
            blocks.append(_learn(model, feed, 1)[0])
        seconds = (_clocks() - began)[WALL]
        peak = resident("VmHWM")
    meanwhile = np.array(blocks)
    waited_s = _waited_s(meanwhile)
    return _Round(
        pause_ms=1000 * (begin[WALL] + waited_s.sum()),
        begin_ms=1000 * begin[WALL],
        longest_wait_ms=1000 * waited_s.max(),
        usual_wait_ms=1000 * _waited_s(usual).mean(),
        slower=float(np.median(meanwhile[:, CORE]) / np.median(usual[:, CORE])),
        seconds=seconds,
        before_mb=before / 1e6,
        memory=peak / before,
    )


def _learn(model: Model, feed: list[Batch], blocks: int) -> Floats:
    """The clocks of each block: float64[blocks, 3]."""
    found = np.empty((blocks, 3))
    for i in range(blocks):
        began = _clocks()
        model.predict_then_update(feed[(model.learned // ROWS) % len(feed)])
        found[i] = _clocks() - began
    return found


def _clocks() -> Floats:
    """Seconds on the wall; seconds of this thread on a core; how often it has left one of itself, to wait."""
    left = resource.getrusage(resource.RUSAGE_THREAD).ru_nvcsw
    return np.array([time.perf_counter(), time.thread_time(), left])


def _waited_s(blocks: Floats) -> Floats:
    """Seconds off the core in blocks that that waited for a lock; others were pushed off it."""
    return np.where(blocks[:, LEFT] > 0, blocks[:, WALL] - blocks[:, CORE], 0.0)


def _tokens(draw: np.random.Generator, live: int) -> npt.NDArray[np.int64]:
    tokens = np.exp(draw.random(SIZE) * np.log(live)).astype(np.int64)
    tokens[::7] = draw.integers(0, live, len(tokens[::7]))
    return np.asarray(tokens)


def _batch(tokens: npt.NDArray[np.int64]) -> Batch:
    """Blocks whose label hangs on their tokens, so that weights leave zero; all names are equal."""
    addresses = tokens.astype(np.uint64) * np.uint64(ODD) & np.uint64(WIDTH)
    labels = ((tokens.reshape(ROWS, ROW) % 5 == 0).sum(axis=1) > ROW // 5).astype(np.int8)
    return Batch(ROW_PTR, addresses, VALUES, labels, WEIGHTS, NAME, PLACES, LENGTHS)
