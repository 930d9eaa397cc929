"""What a worker takes in memory and on disk by live coordinates, and how long it takes to stop and resume."""

from __future__ import annotations

import json
import os
import resource
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from tests.bench.figures import Figure, Seconds

__all__ = ["sizing"]

TOKENS = 100
NEVER_S = 1e6
LONG_S = 1_800.0
SETTINGS = """
[message]
label = "late"
[[fields]]
path = "note"
kind = "words"
[learner]
l1_per_example = 0.0
[state]
checkpoint_every = 1_000_000_000_000
[worker]
log_format = "json"
log_every_s = 0.1
snapshot_every_s = 1e6
"""


def sizing(live: int) -> list[Figure]:
    """A worker on a log of `live` different tokens, stopped by SIGTERM with all of it unsaved; resumed and
    stopped again while checkpoint follows on checkpoint. Once with zero weights only, as it nearly is in
    life, once with every fifth token non-zero: those of messages whose outcome is yes.
    """
    return [_sized("no weight" if l1 > 1 else "every fifth a weight", live, l1) for l1 in (10.0, 0.5)]


def _sized(what: str, live: int, l1: float) -> Figure:
    with tempfile.TemporaryDirectory() as name:
        return _sized_in(Path(name), what, live, l1)


def _sized_in(folder: Path, what: str, live: int, l1: float) -> Figure:
    log = folder / "log.jsonl"
    messages = _write(log, live)
    with _worker(folder, l1, checkpoint_every_s=NEVER_S) as first:
        first.until(lambda line: line.get("messages") == messages)
        stop = first.stop()
    with _worker(folder, l1, checkpoint_every_s=0.1) as second:
        second.until(lambda line: line["event"] == "live")
        resume_s = time.monotonic() - second.began_s
        with log.open("a") as more:  # the last line waits for its end, so that each comes with the next
            for number in range(50):
                more.write(_line(number, 1))
                more.flush()
                time.sleep(0.02)
        busy_stop = second.stop()
    told = first.document()
    size, taken = told["live"] / 1e6, told["memory"]
    checkpoint = sorted((folder / "state" / "checkpoints").glob("0*"))[-1]
    snapshot = folder / told["snapshot"]
    details = {
        "live": told["live"],
        "non-zeros": told["nnz"],
        "of that processor time, s": stop.cpu,
        "stop while a checkpoint is under way, s": busy_stop.wall,
        "of that processor time then, s": busy_stop.cpu,
        "from start to learning again, s": resume_s,
        "most resident memory, MB": told["peak_rss_bytes"] / 1e6,
        "table, MB a million live": taken["table_bytes"] / 1e6 / size,
        "names, bytes a non-zero": taken["name_bytes"] / max(told["nnz"], 1),
        "checkpoint, MB a million live": _bytes(checkpoint) / 1e6 / size,
        "snapshot, bytes": _bytes(snapshot),
    }
    return Figure(
        f"{what}: SIGTERM to exit, {size:.3g} million live", stop.wall, "s", at_most=10, details=details
    )


class _Worker:
    def __init__(self, process: subprocess.Popen[str]) -> None:
        self.began_s = time.monotonic()
        self._process = process
        self._out = ""

    def until(self, holds: Any) -> None:
        """Reads lines of the log until one holds."""
        assert self._process.stderr is not None
        deadline_s = time.monotonic() + LONG_S
        for line in self._process.stderr:
            assert time.monotonic() < deadline_s, "the worker did not come so far"
            if line.startswith("{") and holds(json.loads(line)):
                return
        raise AssertionError(f"the worker ended with {self._process.wait()}")

    def stop(self) -> Seconds:
        """From SIGTERM to the end."""
        began_s, used_s = time.monotonic(), self._used_s()
        self._process.send_signal(signal.SIGTERM)
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        self._out, _ = self._process.communicate(timeout=LONG_S)
        took_s, after = time.monotonic() - began_s, resource.getrusage(resource.RUSAGE_CHILDREN)
        assert self._process.returncode == 0, self._process.returncode
        in_all_s = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
        return Seconds(took_s, in_all_s - used_s)

    def _used_s(self) -> float:
        """Of its cores, so far."""
        user, system = Path(f"/proc/{self._process.pid}/stat").read_text().rpartition(")")[2].split()[11:13]
        return (int(user) + int(system)) / os.sysconf("SC_CLK_TCK")

    def document(self) -> dict[str, Any]:
        found: dict[str, Any] = json.loads(self._out)
        return found


@contextmanager
def _worker(folder: Path, l1: float, checkpoint_every_s: float) -> Iterator[_Worker]:
    (folder / "bedload.toml").write_text(SETTINGS)
    command = [sys.executable, "-c", "from stream.cli.main import run; run()"]
    command += ["work", "--json", "--config", "bedload.toml"]
    changes = {
        "feed.paths": json.dumps(["log.jsonl"]),
        "learner.l1": l1,
        "worker.checkpoint_every_s": checkpoint_every_s,
    }
    for key, value in changes.items():
        command += ["--set", f"{key}={value}"]
    paths = os.pathsep.join([str(Path(__file__).parents[2]), os.environ.get("PYTHONPATH", "")])
    process = subprocess.Popen(
        command,
        cwd=folder,
        env={**os.environ, "PYTHONPATH": paths},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        yield _Worker(process)
    finally:
        process.kill()
        process.communicate()


def _write(log: Path, live: int) -> int:
    messages = live // TOKENS
    with log.open("w") as file:
        for number in range(messages):
            file.write(_line(number, TOKENS))
    return messages


def _line(number: int, tokens: int) -> str:
    note = " ".join(f"w{number * TOKENS + place}" for place in range(tokens))
    return json.dumps({"note": note, "late": number % 5 == 0}) + "\n"


def _bytes(folder: Path) -> int:
    return sum(path.stat().st_size for path in folder.iterdir())
