"""SIGINT and SIGTERM in, a list that a loop looks at out."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

__all__ = ["stop_on_signal"]


@contextmanager
def stop_on_signal() -> Iterator[list[int]]:
    """A list that holds the signal once SIGINT or SIGTERM came; a second one acts as it did before."""
    came: list[int] = []
    signals = (signal.SIGINT, signal.SIGTERM)
    before = {number: signal.getsignal(number) for number in signals}

    def as_before() -> None:
        for number, handler in before.items():
            signal.signal(number, handler)

    def note(number: int, frame: FrameType | None) -> None:
        came.append(number)
        as_before()

    if threading.current_thread() is not threading.main_thread():  # nobody could tell it
        yield came
        return
    for number in signals:
        signal.signal(number, note)
    try:
        yield came
    finally:
        as_before()
