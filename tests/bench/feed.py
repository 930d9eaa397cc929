"""Counts in; a log of 60-token messages on disk, settings that learn it and runs over it out."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from simulator.bench import bench_log
from stream.runs.learning import LearningRun
from stream.settings import Settings
from stream.sources import LogSource
from tests.bench.figures import Seconds, timed

__all__ = ["learn_log", "learning_settings", "log_of", "time_learning"]

TOKENS = 60
DISTINCT = 1_000_000


@contextmanager
def log_of(messages: int, distinct: int = DISTINCT) -> Iterator[Path]:
    """A folder that holds `log.jsonl`."""
    with tempfile.TemporaryDirectory() as folder:
        bench_log(Path(folder) / "log.jsonl", messages, distinct=distinct, tokens=TOKENS)
        yield Path(folder)


def learning_settings(folder: Path, address_bits: int = 40) -> Settings:
    """Settings for the log in `folder`, defaults but for the width."""
    settings = Settings.model_validate(
        {
            "feed": {"paths": ["log.jsonl"]},
            "message": {"id": "id", "label": "y"},
            "fields": [{"path": "note", "kind": "words"}],
            "space": {"address_bits": address_bits},
        }
    )
    return settings.placed_in(folder)


def learn_log(settings: Settings) -> LearningRun:
    """Learns the whole log by the steps that replay takes, metrics and windows included."""
    with tempfile.TemporaryDirectory() as rejects:
        run = LearningRun(settings, Path(rejects))
        source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
        while run.step(source, settings.state.checkpoint_every) is not False:
            pass
        source.close()
        run.rejects.close()
    return run


def time_learning(settings: Settings) -> Seconds:
    """How long `learn_log` takes."""
    return timed(learn_log, settings)
