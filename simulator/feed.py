"""Settings of the simulated courier feed in, checked; ValueError out where one is not allowed."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields

import numpy as np

from simulator.arithmetic import power
from simulator.scenarios import SCENARIOS, STEADY

__all__ = ["BLOCK", "CourierFeed", "NotAllowed"]

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
    "moving": (0, 1),
    "change_at": (0, 1),
    "later_rate": (1e-4, 1 - 1e-4),
    "season_days": (1e-3, 3_660),
}
MOST_WORDS = 2_000_000
MOST_DAYS = 400 * 365
SEASON_STEPS = 16
MOST_STEPS = 100_000


class NotAllowed(ValueError):
    """One setting is not what it may be, whatever the others are; `setting`: its name."""

    def __init__(self, setting: str, text: str) -> None:
        super().__init__(text)
        self.setting = setting


class _Usual(float):
    """A default that a scenario may have another one for."""


class _UsualCount(int):
    """The same of a whole number."""


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
    `messages_per_day`: sets the clock of the log;
    `scenario`: what moves, a name of simulator.scenarios.SCENARIOS. It may have defaults of its own;
    `moving`: share of the weights that move;
    `change_at`: share of the messages after which a sudden change comes;
    `later_rate`: the base rate from then on;
    `season_days`: days of a season.

    Raises ValueError with the setting, its value and what is allowed; NotAllowed where no other setting has
    a part in it.
    """

    seed: int = 0
    messages: int = 100_000
    words_per_note: float = 12.0
    base_rate: float = 0.2
    label_noise: float = _Usual(0.02)
    zipf_exponent: float = 1.05
    first_words: int = 2_000
    growth: float = 0.6
    planted_words: int = _UsualCount(120)
    effect: float = _Usual(0.8)
    messages_per_day: int = 2_000
    scenario: str = STEADY
    moving: float = 0.5
    change_at: float = 0.5
    later_rate: float = 0.4
    season_days: float = 7.0

    def __post_init__(self) -> None:
        if self.scenario not in SCENARIOS:
            there_are = ", ".join(SCENARIOS)
            raise NotAllowed("scenario", f"scenario is {self.scenario!r}; there are {there_are}")
        self._take_usual_values()
        self._check_limits()
        self._check_scenario()
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

    def _take_usual_values(self) -> None:
        """Settings that were not given get the scenario's default, or else that of all."""
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, _Usual | _UsualCount):
                usual = SCENARIOS[self.scenario].usual.get(field.name, value)
                plain = float(usual) if isinstance(value, _Usual) else int(usual)
                object.__setattr__(self, field.name, plain)

    def _check_limits(self) -> None:
        for name, (low, high) in (LIMITS | SCENARIOS[self.scenario].limits).items():
            value = getattr(self, name)
            whole = CourierFeed.__annotations__[name] == "int"
            if isinstance(value, bool) or not isinstance(value, int if whole else (int, float)):
                kind = "whole number" if whole else "number"
                raise NotAllowed(name, f"{name} is {value!r}; it must be a {kind}")
            if not (math.isfinite(value) and low <= value <= high):
                raise NotAllowed(name, f"{name} is {value}; allowed is {low:g} to {high:g}")

    def _check_scenario(self) -> None:
        """A setting that another scenario looks at may not be given, since nothing would come of it."""
        for field in fields(self):
            heeding = [name for name, scenario in SCENARIOS.items() if field.name in scenario.counts]
            if heeding and self.scenario not in heeding and getattr(self, field.name) != field.default:
                raise ValueError(
                    f"{field.name} is {getattr(self, field.name)}, but nothing comes of it in scenario "
                    f"{self.scenario}; it counts in {', '.join(heeding)}"
                )
        season = self.season_days * self.messages_per_day
        if self.scenario == "seasonal" and season < max(1, self.messages / MOST_STEPS) * SEASON_STEPS:
            raise ValueError(
                f"season_days is {self.season_days}, which is {season:g} messages; a season needs "
                f"{SEASON_STEPS}, and a log has at most {MOST_STEPS // SEASON_STEPS} seasons; raise "
                "season_days or messages_per_day"
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

    @property
    def turning_point(self) -> int:
        """The message from which on a sudden change holds."""
        return int(self.change_at * self.messages)
