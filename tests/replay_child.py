"""Replays in processes of their own that start at once: forked from a server that has every kernel in memory.

Each is a whole process with its own lock, files and memory in hand, so killing it loses all that it had not
made durable. `python -m tests.replay_child` is the server.
"""

import json
import os
import subprocess
import sys
import tempfile
import traceback
from pathlib import Path

from stream.runs.replay import replay
from stream.settings import Settings

ROOT = Path(__file__).parent.parent


class Children:
    """Starts replays, one after the other; `pid` is that of the latest."""

    module = "tests.replay_child"

    def __init__(self):
        self._server = subprocess.Popen(
            [sys.executable, "-m", self.module],
            cwd=ROOT,
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        self.pid = 0

    def start(self, settings, folder, **options):
        """Begins `replay(settings, folder, **options)`; the settings' paths must be absolute."""
        request = [settings.model_dump(mode="json"), str(folder), options]
        print(json.dumps(request), file=self._server.stdin, flush=True)
        self.pid = int(self._server.stdout.readline())

    def wait(self):
        """How the latest ended: 0, 1 with a traceback on standard error, or minus the signal.

        Until then its pid is its own, even when it has ended.
        """
        print("wait", file=self._server.stdin, flush=True)
        return int(self._server.stdout.readline())

    def close(self):
        self._server.stdin.close()
        self._server.wait(timeout=60)
        self._server.stdout.close()


def run_replay(settings, folder, **options):
    replay(Settings.model_validate(settings), Path(folder), **options)


def serve(run):
    """Forks a child for each request; what is in memory by now, it has."""
    child = 0
    for request in sys.stdin:
        if request == "wait\n":
            print(os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]), flush=True)
            continue
        settings, folder, options = json.loads(request)
        child = os.fork()
        if child == 0:
            try:
                run(settings, folder, **options)
            except BaseException:
                traceback.print_exc()
                os._exit(1)
            os._exit(0)
        print(child, flush=True)


def warm_up():
    """Loads the kernels of both methods, so that children inherit them."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        log = folder / "log.jsonl"
        log.write_text('{"note": "left with porter", "late": true}\n' * 3)
        for method in ("ftrl", "truncated-gradient"):
            settings = {
                "feed": {"paths": [str(log)]},
                "message": {"label": "late"},
                "fields": [{"path": "note", "kind": "words"}],
                "learner": {"method": method},
            }
            replay(Settings.model_validate(settings), folder / method)


if __name__ == "__main__":
    warm_up()
    serve(run_replay)
