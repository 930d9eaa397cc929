"""Workers in processes of their own that start at once, as tests/replay_child.py has replays.

A feed is a log to follow or a topic in memory, of which each process knows the same messages and has an
order of its own between partitions. `python -m tests.work_child` is the server.
"""

import json
import tempfile
from pathlib import Path

from stream.runs.work import work
from stream.settings import Settings
from tests.memory_topic import MemoryTopic
from tests.replay_child import Children, serve, warm_up

__all__ = ["Workers", "topic_from"]


class Workers(Children):
    """Starts workers: `start(settings, folder, topic=FILE, seed=..., until_end=...)`."""

    module = "tests.work_child"


def topic_from(path, seed=0):
    """The topic in a file of JSON: a list of lists of texts, each character one byte."""
    partitions = json.loads(Path(path).read_text())
    return MemoryTopic([[value.encode("latin-1") for value in values] for values in partitions], seed)


def run_work(settings, folder, topic=None, seed=0, **options):
    source = None if topic is None else topic_from(topic, seed)
    work(Settings.model_validate(settings), Path(folder), source=source, **options)


def warm_up_worker():
    """Loads what only workers run: a checkpoint in the background."""
    with tempfile.TemporaryDirectory() as name:
        settings = {
            "message": {"label": "late"},
            "fields": [{"path": "note", "kind": "words"}],
            "state": {"checkpoint_every": 10},
        }
        values = [json.dumps({"note": f"left with porter {n}", "late": True}) for n in range(50)]
        topic = Path(name, "topic.json")
        topic.write_text(json.dumps([values]))
        run_work(settings, Path(name, "state"), topic, until_end=True)


if __name__ == "__main__":
    warm_up()
    warm_up_worker()
    serve(run_work)
