"""The command `bedload` with a leak: memory with every block, and files and threads now and then."""

import threading

from stream.cli.main import run
from stream.message import Source
from stream.metrics import WindowRow
from stream.runs.learning import LearningRun

KEPT: list[object] = []
EVERY = 16
BYTES = 1 << 20
step = LearningRun.step


def leaking(self: LearningRun, source: Source, limit: int) -> WindowRow | bool:
    KEPT.append(b"x" * BYTES)
    if len(KEPT) % EVERY == 0:
        KEPT.append(open("/dev/null"))  # noqa: SIM115
        threading.Thread(target=threading.Event().wait, daemon=True).start()
    return step(self, source, limit)


if __name__ == "__main__":
    LearningRun.step = leaking  # type: ignore[method-assign]
    run()
