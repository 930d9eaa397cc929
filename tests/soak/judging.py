"""Samples and counts of a soak come in; what is not as it should be goes out, in plain words."""

from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median_low

import numpy as np

from tests.soak.sampling import Sample

__all__ = ["Outcome", "complaints", "growth_bytes", "most_bytes"]

MOST_GROWTH = 1.05
MOST_STOP_S = 10.0


@dataclass(frozen=True)
class Outcome:
    """What a soak saw: `learned` and `rejected` by the worker's last document, `dead_letters` and `scores` in
    their topics; no scores where none were wanted."""

    samples: Sequence[Sample]
    sent: int
    bad: int
    learned: int
    rejected: int
    dead_letters: int
    scores: int | None
    exit_code: int
    stop_s: float
    checkpoints: int
    refused_coordinates: int
    broker_bytes: int


def complaints(found: Outcome) -> list[str]:
    """Each thing that is wrong; nothing where all is well."""
    counts = (
        ("messages learned", found.learned, found.sent),
        ("messages rejected", found.rejected, found.bad),
        ("dead letters", found.dead_letters, found.bad),
        ("scores", found.scores, None if found.scores is None else found.sent - found.bad),
        ("exit code", found.exit_code, 0),
        ("lag at the end", found.samples[-1].lag, 0),
    )
    wrong = [f"{what}: {is_now}, not {wanted}" for what, is_now, wanted in counts if is_now != wanted]
    if found.stop_s > MOST_STOP_S:
        wrong.append(f"SIGTERM to the end took {found.stop_s:.1f} s, more than {MOST_STOP_S:g}")
    return wrong + unsteady(found.samples)


def unsteady(samples: Sequence[Sample]) -> list[str]:
    """What grew after warm-up, the first quarter of the messages.

    Memory: the most in the last half is at most 1.05 times the most in the second quarter. Files and threads:
    the median of the last quarter is at most that of the second. They come and go with checkpoints, lost
    connections and those who ask for metrics, but what leaks stays, and lifts the median.
    """
    if min(len(part(samples, quarter, quarter)) for quarter in (2, 3, 4)) < 3:
        return ["too few samples to say whether anything grew"]
    wrong = []
    before, after = most_bytes(samples, 2, 2), most_bytes(samples, 3, 4)
    if after > MOST_GROWTH * before:
        wrong.append(f"memory grew from {before / 1e6:,.0f} to {after / 1e6:,.0f} MB")
    for what in ("open_files", "threads"):
        few, many = (median_low(getattr(s, what) for s in part(samples, q, q)) for q in (2, 4))
        if many > few:
            wrong.append(f"{what.replace('_', ' ')} went from {few} to {many}")
    return wrong


def part(samples: Sequence[Sample], first: int, last: int) -> list[Sample]:
    """Those of quarters `first` to `last` of the messages: 1 to 4."""
    end = samples[-1].messages
    return [s for s in samples if first <= min(1 + 4 * s.messages // end, 4) <= last]


def most_bytes(samples: Sequence[Sample], first: int, last: int) -> int:
    """The most memory in those quarters."""
    return max((s.resident_bytes for s in part(samples, first, last)), default=0)


def growth_bytes(samples: Sequence[Sample]) -> float:
    """Bytes of memory that a message added after warm-up, by a straight line through the samples."""
    warm = part(samples, 2, 4)
    slope, _ = np.polyfit([s.messages for s in warm], [s.resident_bytes for s in warm], 1)
    return float(slope)
