"""A log, settings and a grid in; the choice, and the document that shows why, out."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.errors import BadData, BadSettings
from stream.runs.presence import refuse_late_outcomes
from stream.runs.tuning.choosing import Rule
from stream.runs.tuning.document import Tuned, document
from stream.runs.tuning.excess import expected_excess
from stream.runs.tuning.first_pass import LogFacts, count, digest_of_log, find_strongest
from stream.runs.tuning.grid import Grid, blocks_of, candidates, frozen_after
from stream.runs.tuning.keeping import KeptTrials
from stream.runs.tuning.merging import merge
from stream.runs.tuning.passes import Pool, run_passes, workers_on_this_machine
from stream.runs.tuning.trial import Plan, Trial
from stream.runs.tuning.truth import Truth, read_truth
from stream.settings import Settings

__all__ = ["Job", "tune"]

Tell = Callable[[float, str], None]


@dataclass(frozen=True, slots=True)
class Job:
    """What is to be tuned, and where.

    `forward_share`: share of the messages after which a forward test freezes the weights; `forward_ms`: or
    the time, epoch milliseconds; both None: no such test.
    `workers`: processes on this machine; `cluster`: address of a Dask scheduler instead.
    `memory_bytes`: for tables and lanes of all passes that run at once.
    """

    grid: Grid = field(default_factory=Grid)
    rule: Rule = field(default_factory=Rule)
    forward_share: float | None = None
    forward_ms: int | None = None
    truth: Path | None = None
    workers: int = 1
    cluster: str | None = None
    memory_bytes: int = 4_000_000_000


def tune(
    settings: Settings,
    trials: Path,
    job: Job,
    *,
    command: str = "",
    tell: Tell = lambda share, text: None,
    say: Callable[[str], None] = lambda text: None,
) -> dict[str, Any]:
    """Tries all candidates of the grid over the log of `settings`, and chooses; see docs/tuning.md.

    `trials`: the folder where finished trials stay, so that an interrupted run goes on. `tell` is given the
    share done of the present stage and its name; `say` what a person should know. Returns the document
    of docs/tuning.md. Raises what a replay raises; BadSettings and BadData for what cannot be tuned.
    """
    refuse_late_outcomes(settings)
    if settings.feed.kind != "log":
        raise BadSettings('tune reads logs: set feed.kind = "log" with feed.paths')
    if job.forward_ms is not None and settings.message.time is None:
        raise BadSettings("a forward test from a time on needs message.time; or give a share, such as 70%")
    began, passes = time.monotonic(), []

    def note(text: str) -> None:
        passes.append(text)
        say(text)

    truth = None if job.truth is None else read_truth(job.truth)
    files, digest = digest_of_log(settings)
    with _pool(job) as (pool, workers):
        facts = _first_pass(settings, job, tell, note)
        lanes = candidates(job.grid, settings.learner, facts)

        def tried(plan: Plan) -> Trial:
            kept = KeptTrials(trials, settings, digest, plan)
            return merge(run_passes(settings, lanes, plan, kept, job.memory_bytes, pool, workers, tell, note))

        plan, frozen_plan, frozen = blocks_of(facts.messages), _frozen_plan(job, facts), None
        trial = tried(plan)
        if frozen_plan is not None and frozen_plan.frozen_from is not None:
            learned = frozen_plan.ends[frozen_plan.frozen_from - 1]
            note(f"forward test: learned {learned:,} of {facts.messages:,} messages, then only scored")
            frozen = tried(frozen_plan)
    return document(
        Tuned(
            settings,
            command,
            files,
            digest,
            facts,
            job.grid,
            plan,
            trial,
            job.rule,
            frozen,
            frozen_plan,
            truth=None if truth is None else _compared(settings, job, plan, trial, truth, tell),
            passes=passes,
            seconds=time.monotonic() - began,
        )
    )


def _compared(
    settings: Settings, job: Job, plan: Plan, trial: Trial, truth: Truth, tell: Tell
) -> tuple[Truth, npt.NDArray[np.float64]]:
    def progress(fraction: float | None, messages: int) -> None:
        tell(fraction or 0.0, "comparing with the truth")

    return truth, expected_excess(settings, trial.lanes, plan, truth, job.memory_bytes, progress)


def _frozen_plan(job: Job, facts: LogFacts) -> Plan | None:
    if job.forward_share is not None:
        return blocks_of(facts.messages, job.forward_share)
    if job.forward_ms is None:
        return None
    if facts.reached_after is None:
        raise BadData("no message of the log has the time of the forward test or a later one")
    return frozen_after(blocks_of(facts.messages), facts.reached_after)


def _first_pass(settings: Settings, job: Job, tell: Tell, note: Callable[[str], None]) -> LogFacts:
    if not job.grid.searched:

        def counting(fraction: float | None, messages: int) -> None:
            tell(fraction or 0.0, "counting messages")

        return count(settings, counting, job.forward_ms)

    def looking(fraction: float | None, messages: int) -> None:
        tell(fraction or 0.0, "looking for the strongest useful penalty")

    facts = find_strongest(settings, looking, job.forward_ms)
    note(
        f"first pass: {facts.messages:,} messages, {facts.coordinates:,} tokens; from l1_per_example = "
        f"{facts.strongest:.6g} on a batch fit of the log has no weight"
    )
    return facts


@contextmanager
def _pool(job: Job) -> Iterator[tuple[Pool | None, int]]:
    if job.cluster is None:
        with workers_on_this_machine(job.workers) as pool:
            yield pool, job.workers
        return
    from stream.runs.tuning.cluster import workers_of_cluster

    with workers_of_cluster(job.cluster) as (pool, threads):
        yield pool, threads
