"""A view of the state at one moment in, a checkpoint written meanwhile out: learning goes on."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from stream.arrays_file import Arrays, Rows
from stream.checkpoints import Checkpoints

__all__ = ["BackgroundCheckpoints", "View"]


@dataclass(frozen=True, slots=True)
class View:
    """The state as it was at one moment, whatever is learned since.

    `rows`, and what `rest` makes of copies, are together what a checkpoint holds. `close` gives up what
    learning does to keep the rows; it may be called more than once.
    """

    rows: Rows
    rest: Callable[[], Arrays]
    close: Callable[[], None]


class BackgroundCheckpoints:
    """Writes one checkpoint at a time, the same bytes that `Checkpoints.write` gives at that moment.

    For one thread, that which learns. What goes wrong in the writing is raised by the next call, once; the
    older checkpoints are then still there, and a later `begin` writes anew.
    """

    def __init__(self, checkpoints: Checkpoints) -> None:
        self._checkpoints = checkpoints
        self._thread: threading.Thread | None = None
        self._path: Path | None = None
        self._trouble: BaseException | None = None

    @property
    def busy(self) -> bool:
        """Whether a checkpoint is under way, or has ended and nobody has asked yet."""
        return self._thread is not None

    def begin(self, messages: int, view: View, about: Mapping[str, Any]) -> None:
        """Begins to write the state after `messages` messages; not while `busy`. `about` must not change."""
        assert not self.busy, "one checkpoint at a time"
        self._path = self._trouble = None
        self._thread = threading.Thread(
            target=self._write, args=(messages, view, about), name="checkpoint", daemon=True
        )
        try:
            self._thread.start()
        except BaseException:
            self._thread = None
            view.close()
            raise

    def done(self) -> Path | None:
        """The checkpoint that became durable since the last call, if any; raises what its writing raised."""
        return None if self._thread is not None and self._thread.is_alive() else self.wait()

    def wait(self) -> Path | None:
        """`done`, once the checkpoint under way has come to its end."""
        if self._thread is None:
            return None
        self._thread.join()
        self._thread = None
        if self._trouble is not None:
            raise self._trouble
        return self._path

    def close(self) -> None:
        """Waits until nothing is under way: the folder may then be let go. What went wrong is not raised."""
        if self._thread is not None:
            self._thread.join()
            self._thread = None

    def _write(self, messages: int, view: View, about: Mapping[str, Any]) -> None:
        try:
            self._path = self._checkpoints.write(messages, view.rest(), about, view.rows)
        except BaseException as error:
            self._trouble = error
        finally:
            view.close()
