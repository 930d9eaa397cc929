"""The name of a scenario in, what it changes about the feed out: settings of its own and where they count."""

from __future__ import annotations

from dataclasses import dataclass, field

__all__ = ["SCENARIOS", "STEADY", "Scenario"]


@dataclass(frozen=True, slots=True)
class Scenario:
    """One kind of feed. `about`: what it is, in a line; `counts`: settings that do not count in all others;
    `usual`: its own defaults of settings that all have; `limits`: its own limits of them."""

    about: str
    counts: frozenset[str] = frozenset()
    usual: dict[str, float] = field(default_factory=dict)
    limits: dict[str, tuple[float, float]] = field(default_factory=dict)


STEADY = "steady"
SCENARIOS: dict[str, Scenario] = {
    STEADY: Scenario("the truth never changes"),
    "sudden-change": Scenario(
        "at one message part of the weights flip or go over to other tokens",
        frozenset({"moving", "change_at"}),
    ),
    "slow-drift": Scenario("the same weights go there in 32 small steps", frozenset({"moving"})),
    "base-rate-shift": Scenario(
        "at one message the intercept moves, and nothing else", frozenset({"change_at", "later_rate"})
    ),
    "seasonal": Scenario(
        "part of the weights swing there and back with the season", frozenset({"moving", "season_days"})
    ),
    "new-vocabulary": Scenario(
        "at one message new words break in, some of them with weights", frozenset({"change_at"})
    ),
    "rare-tokens": Scenario(
        "only rare words and senders have weights",
        usual={"planted_words": 1_200, "effect": 2.0},
        limits={"planted_words": (0, 2_400)},
    ),
    "label-noise": Scenario("a quarter of the outcomes are flipped", usual={"label_noise": 0.25}),
    "duplicated-tokens": Scenario("words with weights never stand without a companion that has none"),
    "collisions": Scenario(
        "at one message words break in that were made to share addresses with words that have weights",
        frozenset({"change_at"}),
    ),
}
"""In the order in which they are told."""
