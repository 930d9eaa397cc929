"""What the candidates lost over the last part of a log in, the one to take out, with what that gives up.

Two candidates are compared block by block: they met the same messages, so most of what makes one block harder
than another cancels in the difference, and only the rest counts as error.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from stream.errors import BadData, BadSettings
from stream.runs.tuning.grid import Over
from stream.runs.tuning.trial import Lane, Plan, Trial

__all__ = ["Candidates", "Choice", "Difference", "Pick", "Rule", "choose"]

Floats = npt.NDArray[np.float64]
Int64s = npt.NDArray[np.int64]
Pick = Literal["lowest_loss", "sparsest_within_one_se", "max_weights", "max_bytes"]


@dataclass(frozen=True, slots=True)
class Rule:
    """How one candidate is picked; `limit` is the most weights or bytes under the last two."""

    pick: Pick = "lowest_loss"
    limit: int = 0


@dataclass(frozen=True, slots=True)
class Difference:
    """A difference of log losses, nats a message, and its standard error: None where it takes more blocks."""

    nats: float
    error: float | None


@dataclass(frozen=True, slots=True)
class Candidates:
    """K candidates over the m time blocks of the last part that have example weight.

    `loss`: float64[m, K], sums of weight * log loss; `weight`: float64[m], all above 0; `nnz`, `size`:
    int64[K], non-zero weights and bytes of a snapshot; `over`: which penalty differs.
    """

    lanes: tuple[Lane, ...]
    loss: Floats
    weight: Floats
    nnz: Int64s
    size: Int64s
    over: Over = "l1_per_example"

    @classmethod
    def of(cls, trial: Trial, plan: Plan, size: Int64s, over: Over) -> Candidates:
        """Those of a trial. Raises BadData where nothing with a label is in the last part."""
        weight = trial.block_totals[plan.last_from :, 2]
        there = weight > 0
        if not there.any():
            raise BadData(
                "no message in the last part of the log has a label with weight, so nothing can be compared: "
                "check message.label, or leave out the messages whose outcome is not known yet"
            )
        loss = trial.block_loss[plan.last_from :][there]
        return cls(trial.lanes, loss, weight[there], trial.nnz, size, over)

    def strength(self, index: int) -> float:
        """Of the penalty that differs."""
        return float(getattr(self.lanes[index], self.over))

    @property
    def log_loss(self) -> Floats:
        """Nats a message over the last part: float64[K]."""
        return np.asarray(self.loss.sum(axis=0) / self.weight.sum())

    def against(self, other: int) -> tuple[Floats, Floats]:
        """Difference of each log loss to that of `other`, and its standard error: float64[K] each.

        The difference is a ratio of two sums over blocks; its standard error is that of the ratio estimator
        (Cochran, Sampling Techniques, third edition, chapter 6; from memory), with blocks taken as
        independent. NaN with a single block; 0 for `other` itself.
        """
        total, blocks = self.weight.sum(), len(self.weight)
        with np.errstate(invalid="ignore", over="ignore"):
            d = self.loss - self.loss[:, other : other + 1]
            mean = d.sum(axis=0) / total
            rest = ((d - mean * self.weight[:, np.newaxis]) ** 2).sum(axis=0)
            error = (
                np.sqrt(blocks / (blocks - 1) * rest) / total if blocks > 1 else np.full(len(mean), np.nan)
            )
        mean[other] = error[other] = 0.0
        return mean, error

    def difference(self, index: int, other: int) -> Difference:
        """Of two candidates: above 0 where `index` loses more."""
        mean, error = self.against(other)
        return Difference(float(mean[index]), float(error[index]) if np.isfinite(error[index]) else None)

    def ranked(self, *first: npt.NDArray[np.float64] | Int64s) -> Int64s:
        """Candidates in order: by the arrays of `first`, then fewer non-zeros, stronger, smaller steps."""
        strengths = np.array([self.strength(i) for i in range(len(self.lanes))])
        rates = np.array([lane.learning_rate for lane in self.lanes])
        return np.lexsort((rates, -strengths, self.nnz, *first[::-1]))


@dataclass(frozen=True, slots=True)
class Choice:
    """The candidate to take, by its index.

    `best`: the one with the lowest log loss of all; `runner_up`: what the rule would take without the choice;
    `qualified`: how many the rule allows; `given_up`: what the choice loses more than the best; `halved`: the
    best candidate with at most half its non-zeros, and `halved_costs` what that one loses more.
    """

    rule: Rule
    index: int
    best: int
    runner_up: int | None
    qualified: int
    given_up: Difference
    halved: int | None
    halved_costs: Difference | None


def choose(candidates: Candidates, rule: Rule) -> Choice:
    """Picks by `rule`; the same candidates always give the same choice.

    The sparsest within one standard error (Breiman, Friedman, Olshen and Stone, 1984, from memory, there for
    the size of trees) is that with the fewest non-zeros whose difference to the best is at most the
    standard error of that difference. Raises BadSettings where no candidate keeps the limit.
    """
    log_loss = candidates.log_loss
    finite = np.isfinite(log_loss)
    if not finite.any():
        raise BadData(
            "no candidate has a log loss that is a number: its margins are too large. Take smaller learning "
            "rates, or scale the quantities among the fields"
        )
    by_loss = candidates.ranked(np.where(finite, log_loss, np.inf))
    best = int(by_loss[0])
    allowed = finite & _allowed(candidates, rule, best)
    if not allowed.any():
        raise _nothing_fits(candidates, rule, finite)
    order = by_loss
    if rule.pick == "sparsest_within_one_se":
        order = candidates.ranked(candidates.nnz, log_loss)
    order = order[allowed[order]]
    index = int(order[0])
    halved = next(
        (int(i) for i in by_loss if finite[i] and 2 * candidates.nnz[i] <= candidates.nnz[index]), None
    )
    if halved == index:  # nothing to halve
        halved = None
    return Choice(
        rule,
        index,
        best,
        int(order[1]) if len(order) > 1 else None,
        int(allowed.sum()),
        candidates.difference(index, best),
        halved,
        None if halved is None else candidates.difference(halved, index),
    )


def _allowed(candidates: Candidates, rule: Rule, best: int) -> npt.NDArray[np.bool_]:
    """bool[K]: which of them the rule chooses among."""
    if rule.pick == "max_weights":
        return np.asarray(candidates.nnz <= rule.limit)
    if rule.pick == "max_bytes":
        return np.asarray(candidates.size <= rule.limit)
    if rule.pick == "sparsest_within_one_se":
        mean, error = candidates.against(best)
        sparser = candidates.nnz < candidates.nnz[best]
        within = sparser & (mean <= error)  # an error that is not known allows nothing
        within[best] = True
        return np.asarray(within)
    return np.ones(len(candidates.lanes), np.bool_)


def _nothing_fits(candidates: Candidates, rule: Rule, finite: npt.NDArray[np.bool_]) -> BadSettings:
    sizes, unit = (
        (candidates.nnz, "non-zero weights") if rule.pick == "max_weights" else (candidates.size, "bytes")
    )
    least = int(np.argmin(np.where(finite, sizes, np.iinfo(np.int64).max)))
    lane = candidates.lanes[least]
    return BadSettings(
        f"no candidate keeps to a limit of {rule.limit:,} on {unit}: the smallest has {sizes[least]:,} "
        f"({candidates.over} {candidates.strength(least):.3g}, learning rate {lane.learning_rate:g}). "
        "Allow as many, or give stronger strengths"
    )
