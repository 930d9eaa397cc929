"""A view of the state at one moment in, a checkpoint written meanwhile out: learning goes on."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Generic, TypeVar

from stream.arrays_file import Arrays, Rows
from stream.checkpoints import Checkpoints
from stream.weights import Weights

__all__ = ["BackgroundCheckpoints", "BackgroundWriter", "View"]

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class View:
    """The state as it was at one moment, whatever is learned since.

    `rows`, and what `rest` makes of copies, are together what a checkpoint holds. `close` gives up what
    learning does to keep the rows; it may be called more than once. `weights`: the non-zero weights of that
    moment, once all rows have passed; None where nobody asked for them.
    """

    rows: Rows
    rest: Callable[[], Arrays]
    close: Callable[[], None]
    weights: Callable[[], Weights] | None = None


class BackgroundWriter(Generic[T]):
    """Writes one thing at a time on a thread of its own, called `name`.

    For one thread, that which learns. What goes wrong in the writing is raised by the next call, once.
    """

    def __init__(self, name: str) -> None:
        self._name = name
        self._thread: threading.Thread | None = None
        self._written: T | None = None
        self._trouble: BaseException | None = None

    @property
    def busy(self) -> bool:
        """Whether something is being written, or is written and nobody has asked yet."""
        return self._thread is not None

    def start(self, write: Callable[[], T]) -> None:
        """Begins to write, which gives what was written; not while `busy`."""
        assert not self.busy, f"one {self._name} at a time"
        self._written = self._trouble = None
        self._thread = threading.Thread(target=self._run, args=(write,), name=self._name, daemon=True)
        try:
            self._thread.start()
        except BaseException:
            self._thread = None
            raise

    def done(self) -> T | None:
        """What was written since the last call, if anything; raises what its writing raised."""
        return None if self._thread is not None and self._thread.is_alive() else self.wait()

    def wait(self) -> T | None:
        """`done`, once what is under way has come to its end."""
        if self._thread is None:
            return None
        self._thread.join()
        self._thread = None
        if self._trouble is not None:
            raise self._trouble
        return self._written

    def close(self) -> None:
        """Waits until nothing is under way: the folder may then be let go. What went wrong is not raised."""
        if self._thread is not None:
            self._thread.join()
            self._thread = None

    def _run(self, write: Callable[[], T]) -> None:
        try:
            self._written = write()
        except BaseException as error:
            self._trouble = error


class BackgroundCheckpoints(BackgroundWriter[Path]):
    """Writes checkpoints, the same bytes that `Checkpoints.write` gives at the moment of the view.

    Where the writing fails the older checkpoints are still there, and a later `begin` writes anew.
    """

    def __init__(self, checkpoints: Checkpoints) -> None:
        super().__init__("checkpoint")
        self._checkpoints = checkpoints

    def begin(self, messages: int, view: View, about: Mapping[str, Any]) -> None:
        """Begins to write the state after `messages` messages; not while `busy`. `about` must not change."""

        def write() -> Path:
            try:
                return self._checkpoints.write(messages, view.rest(), about, view.rows)
            finally:
                view.close()

        try:
            self.start(write)
        except BaseException:
            if not self.busy:
                view.close()
            raise
