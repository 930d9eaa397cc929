"""Workers on a topic of a broker, in processes of their own that start at once and can be told where to die.

`python -m tests.chaos.worker` is the server that they are forked from.
"""

import logging
import os
import tempfile
from pathlib import Path

from stream.runs.work import work
from stream.settings import Settings
from stream.topics.records import Single, chunk_of
from tests.chaos.places import Strike, lie_in_wait
from tests.memory_topic import MemoryTopic
from tests.replay_child import Children, serve
from tests.replays import BOUNDED, UNLABELLED, settings_for

__all__ = ["DoomedWorkers"]


class DoomedWorkers(Children):
    """Starts workers: `start(settings, folder, log=FILE, strike={...} or None, outward=..., until_end=...)`.

    `log`: what they say on standard error is added to it.
    """

    module = "tests.chaos.worker"


def run_doomed(settings, folder, log, strike=None, outward="files", **options):
    said = os.open(log, os.O_WRONLY | os.O_CREAT | os.O_APPEND)
    os.dup2(said, 2)
    if strike is not None:
        lie_in_wait(Strike(**strike), outward)
    work(Settings.model_validate(settings), Path(folder), **options)


def warm_up():
    """Loads what a worker runs, kernels and all, so that those forked from here have it."""
    logging.disable(logging.INFO)
    chunk_of("none", 0, [Single(0, 0, None, b"{}")], 0, 1, 64)
    for variant in ({}, BOUNDED):
        with tempfile.TemporaryDirectory() as folder:
            settings = settings_for([], variant, learner={"horizon": 1_000}, state={"checkpoint_every": 10})
            work(settings, Path(folder), source=MemoryTopic([[UNLABELLED] * 50]), until_end=True)
    logging.disable(logging.NOTSET)


if __name__ == "__main__":
    warm_up()
    serve(run_doomed)
