"""What became of a waiting row, as the byte that is kept for it."""

from __future__ import annotations

import numpy as np

__all__ = [
    "AHEAD",
    "CAME_LATE",
    "CONTRADICTED",
    "DISCARDED",
    "ENDED",
    "EXPIRED",
    "HELD",
    "JOINED",
    "KIND",
    "POSITIVE",
    "REMEMBERED",
    "REPEATED",
    "WAITING",
]

AHEAD, WAITING, HELD, CONTRADICTED, JOINED, EXPIRED, REPEATED, DISCARDED = range(8)
"""What became of a row, in the lowest three bits of its byte: its event time was not reached yet; it waits;
it has an outcome that may still be replaced or contradicted; it has outcomes that differ (on_conflict =
"reject"); it was released with its outcome; it was released or dropped without; another message had its id
before; it had outcomes that differ when its time was over. The first four are not settled."""
KIND = 7
POSITIVE = 8
"""Added to the byte where the outcome that counts, or the late one, is positive."""
CAME_LATE = 16
"""Added where an outcome came after the waiting time."""
ENDED = np.array([AHEAD, EXPIRED, JOINED, DISCARDED], np.uint8)
"""What becomes of unsettled rows when their time is over."""
REMEMBERED = np.array([kind not in (AHEAD, REPEATED) for kind in range(8)])
"""Whether a row is the one that its id stands for."""
