"""A rate in; how many messages to write at a time, and a wait until they are due, out."""

from __future__ import annotations

import time
from collections.abc import Callable

__all__ = ["MOST_PER_S", "Pace"]

MOST_PER_S = 10_000_000
LEAST_S = 1e-6
TURN_S = 0.05
"""Messages are written so often, and a stop is heeded within it."""


class Pace:
    """At most `rate` messages a second (None: flat out), and an ear for `stopped`."""

    def __init__(
        self,
        rate: float | None = None,
        stopped: Callable[[], bool] = lambda: False,
        clock: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        if rate is not None and not 0 < rate <= MOST_PER_S:
            raise ValueError(
                f"rate is {rate}; allowed is above 0 and at most {MOST_PER_S:g} messages a second"
            )
        self.rate, self.stopped = rate, stopped
        self._clock, self._sleep = clock, sleep
        self._begun: float | None = None

    def at_once(self, most: int) -> int:
        """Messages to write together, 1 to `most`."""
        return most if self.rate is None else max(1, min(most, int(self.rate * TURN_S)))

    def wait(self, done: int) -> bool:
        """Returns when more than `done` messages may be out, or as soon as a stop is asked for; whether to go
        on. The time counts from the first call."""
        if self._begun is None:
            self._begun = self._clock()
        while not self.stopped():
            early = 0.0 if self.rate is None else done / self.rate - (self._clock() - self._begun)
            if early < LEAST_S:
                return True
            self._sleep(min(early, TURN_S))
        return False
