"""Start-up of the command line against importing what it is made of."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from collections.abc import Sequence
from pathlib import Path

from tests.bench.figures import Figure, Seconds, alternating, timed

__all__ = ["start"]

SETTINGS = """
[feed]
paths = ["empty.jsonl"]
[message]
label = "y"
[[fields]]
path = "note"
kind = "words"
"""

CACHED_KERNEL = """
import numpy, numba, pydantic, typer

@numba.njit(cache=True)
def total(values):
    found = 0.0
    for value in values:
        found += value
    return found

if __name__ == "__main__":
    assert total(numpy.ones(3)) == 3.0
"""


def start(rounds: int) -> list[Figure]:
    """`bedload --help` over `import typer`; replay of an empty log over its imports and one kernel."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "bedload.toml").write_text(SETTINGS)
        (folder / "empty.jsonl").touch()
        (folder / "kernel.py").write_text(CACHED_KERNEL)
        bedload = str(Path(sys.executable).with_name("bedload"))
        commands: list[Sequence[str]] = [
            [bedload, "--help"],
            [sys.executable, "-c", "import typer"],
            [bedload, "replay", "--fresh"],
            [sys.executable, "kernel.py"],
        ]
        works = [lambda command=command: timed(lambda: _run(command, folder)) for command in commands]
        alternating(1, *works)
        times = [_median(found) for found in alternating(rounds, *works)]
    help_s, typer_s, replay_s, imports_s = times
    return [
        Figure(
            "--help against import typer", help_s / typer_s, "times", at_most=2, details={"seconds": help_s}
        ),
        Figure(
            "replay of an empty log against its imports",
            replay_s / imports_s,
            "times",
            at_most=2.5,
            details={"replay, s": replay_s, "imports and one kernel, s": imports_s},
        ),
    ]


def _run(command: Sequence[str], folder: Path) -> None:
    subprocess.run(
        command, cwd=folder, check=True, stdout=subprocess.DEVNULL, env={**os.environ, "TERM": "dumb"}
    )


def _median(times: list[Seconds]) -> float:
    return sorted(found.wall for found in times)[len(times) // 2]
