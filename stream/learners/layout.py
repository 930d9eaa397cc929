"""Places in the small arrays that learner kernels take beside the table: `sums`, `counts`, `options`."""

from __future__ import annotations

import numpy as np

__all__: list[str] = []

# sums, float64[3]: state
STRENGTH, INTERCEPT_FIRST, INTERCEPT_SECOND = 0, 1, 2
# counts, int64[2]: state
LEARNED, REFUSED = 0, 1
# options, float64[6]: settings
RATE, DAMPING, L1, PER_EXAMPLE, L2, HORIZON = 0, 1, 2, 3, 4, 5

LIMIT = 1e300
"""A margin or sum beyond this is not used: the update is refused, so that no weight stops being finite."""

AHEAD = np.uint64(64)
"""How many entries before its turn a row is prefetched (measured)."""

SCRATCH = 5
"""Numbers that a kernel keeps of each entry while it is at a row."""
