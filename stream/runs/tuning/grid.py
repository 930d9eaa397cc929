"""What was asked for and what the log allows in, the candidates out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from stream.errors import BadData, BadSettings
from stream.runs.tuning.first_pass import LogFacts
from stream.runs.tuning.trial import Lane, Plan
from stream.settings.models import Learner

__all__ = ["BLOCKS", "Grid", "Over", "blocks_of", "candidates", "frozen_after"]

Over = Literal["l1_per_example", "l1"]
BLOCKS = 80
LAST_PART_FROM = 56
"""Time blocks of a log, and the one that its last part begins with: the last 30 %, in 24 blocks."""


@dataclass(frozen=True, slots=True)
class Grid:
    """Strengths to try: so many, log-spaced from the strongest useful one down over `span`, or those given.

    `rates`: learning rates; none: the one of the settings. `over`: which penalty is meant.
    """

    strengths: int | tuple[float, ...] = 32
    rates: tuple[float, ...] = ()
    span: float = 1000.0
    over: Over = "l1_per_example"

    @property
    def searched(self) -> bool:
        """Whether the strongest useful strength must be found first."""
        return isinstance(self.strengths, int)


def candidates(grid: Grid, learner: Learner, facts: LogFacts) -> list[Lane]:
    """A lane for each learning rate and strength, rates as given, strengths from strong to weak.

    Raises BadSettings for a grid that the method does not take, BadData for a log without an outcome that
    differs.
    """
    if grid.over == "l1" and learner.method != "ftrl":
        raise BadSettings(
            f"--over l1 is for ftrl; {learner.method} takes l1_per_example alone, since it draws weights "
            "towards zero at each example"
        )
    rates = dict.fromkeys(grid.rates or (learner.learning_rate,))
    strengths = _strengths(grid, facts)
    return [_lane(rate, strength, grid.over, learner) for rate in rates for strength in strengths]


def _lane(rate: float, strength: float, over: Over, learner: Learner) -> Lane:
    if over == "l1":
        return Lane(rate, learner.l1_per_example, strength)
    return Lane(rate, strength, learner.l1)


def _strengths(grid: Grid, facts: LogFacts) -> Sequence[float]:
    if not isinstance(grid.strengths, int):
        return sorted(set(grid.strengths), reverse=True)
    assert facts.strongest is not None and facts.weight is not None
    if not facts.strongest > 0:
        raise BadData(
            "no token of the log goes with the outcome: it has one label only, or no labels or tokens. Check "
            "message.label and the fields, or give --strengths"
        )
    top = facts.strongest * (facts.weight if grid.over == "l1" else 1.0)
    spread = np.geomspace(top, top / grid.span, grid.strengths).tolist()
    return list(dict.fromkeys([top, *map(_short, spread[1:])]))


def _short(strength: float) -> float:
    """To six digits, which people can read in a settings file."""
    return float(f"{strength:.6g}")


def blocks_of(messages: int, frozen_share: float | None = None) -> Plan:
    """Time blocks of equal message counts, to within one; `frozen_share`: see `frozen_after`.

    Raises BadData for a log that is too short for the blocks, and what `frozen_after` raises.
    """
    if messages < 5 * BLOCKS:
        raise BadData(
            f"the log has {messages:,} messages, too few to tell settings apart: it takes {5 * BLOCKS:,} for "
            f"{BLOCKS} time blocks"
        )
    ends = tuple(messages * block // BLOCKS for block in range(1, BLOCKS + 1))
    plan = Plan(ends, LAST_PART_FROM)
    return plan if frozen_share is None else frozen_after(plan, round(frozen_share * messages))


def frozen_after(plan: Plan, messages: int) -> Plan:
    """The plan that learns nothing after so many messages: the nearest end of a block moves there.

    Raises BadSettings where nothing would be left to learn, or to score.
    """
    if not 0 < messages < plan.ends[-1]:
        raise BadSettings(
            f"a forward test learns some messages and scores others: of {plan.ends[-1]:,} it would learn "
            f"{messages:,}. Set --forward-from to a share or time in between"
        )
    inner = np.array(plan.ends[:-1])
    nearest = int(np.argmin(np.abs(inner - messages)))
    ends = (*plan.ends[:nearest], messages, *plan.ends[nearest + 1 :])
    return Plan(ends, plan.last_from, nearest + 1)
