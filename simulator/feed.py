"""Settings of the simulated courier feed in, checked; ValueError out where one is not allowed."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from simulator.arithmetic import power

__all__ = ["BLOCK", "CourierFeed"]

BLOCK = 4_096
"""Messages drawn from one random stream; part of what the bytes of a log depend on."""

LIMITS: dict[str, tuple[float, float]] = {
    "seed": (0, 2**63 - 1),
    "messages": (1, 10**9),
    "words_per_note": (6, 200),
    "base_rate": (1e-4, 1 - 1e-4),
    "label_noise": (0, 0.5),
    "zipf_exponent": (0.5, 2),
    "first_words": (400, 1_000_000),
    "growth": (0, 1),
    "planted_words": (0, 600),
    "effect": (0, 8),
    "messages_per_day": (1, 10**9),
}
MOST_WORDS = 2_000_000
MOST_DAYS = 400 * 365


@dataclass(frozen=True, slots=True)
class CourierFeed:
    """What a log of the courier feed looks like. Same settings, same bytes.

    `words_per_note`: mean number of words of a note;
    `base_rate`: mean true probability that a parcel is redelivered;
    `label_noise`: share of outcomes that are flipped after they were drawn;
    `zipf_exponent`: the r-th street, code, shop or sender is drawn in proportion to r**-zipf_exponent;
    `first_words`: streets, codes and shops known at the start, of each;
    `growth`: of each there are first_words * (1 + t / 1000)**growth at message t (0: no new words);
    `planted_words`: note words with a true weight that is not zero;
    `effect`: typical size of a true weight, in log-odds (0: nothing can be learned);
    `messages_per_day`: sets the clock of the log.

    Raises ValueError with the setting, its value and what is allowed.
    """

    seed: int = 0
    messages: int = 100_000
    words_per_note: float = 12.0
    base_rate: float = 0.2
    label_noise: float = 0.02
    zipf_exponent: float = 1.05
    first_words: int = 2_000
    growth: float = 0.6
    planted_words: int = 120
    effect: float = 0.8
    messages_per_day: int = 2_000

    def __post_init__(self) -> None:
        for name, (low, high) in LIMITS.items():
            value = getattr(self, name)
            whole = CourierFeed.__annotations__[name] == "int"
            if isinstance(value, bool) or not isinstance(value, int if whole else (int, float)):
                raise ValueError(f"{name} is {value!r}; it must be a {'whole ' if whole else ''}number")
            if not (math.isfinite(value) and low <= value <= high):
                raise ValueError(f"{name} is {value}; allowed is {low:g} to {high:g}")
        if self.words_known(self.messages - 1) > MOST_WORDS:
            raise ValueError(
                f"growth {self.growth} over {self.messages} messages ends beyond {MOST_WORDS} words of a "
                "kind, more than memory should hold; lower growth, first_words or messages"
            )
        if self.messages // self.messages_per_day >= MOST_DAYS:
            raise ValueError(
                f"messages_per_day is {self.messages_per_day}, so {self.messages} messages last longer than "
                "400 years; raise messages_per_day"
            )

    @property
    def block_count(self) -> int:
        """Blocks of up to BLOCK messages in the log."""
        return -(-self.messages // BLOCK)

    def words_known(self, message: int) -> int:
        """Streets, codes and shops, of each, that may be drawn in the block of this message."""
        block_start = message // BLOCK * BLOCK
        factor = power(np.array([1.0 + block_start / 1000.0]), self.growth)
        return int(self.first_words * factor[0])
