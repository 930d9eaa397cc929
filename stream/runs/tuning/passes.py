"""Lanes and a log in; a trial of each group of lanes out, in as many passes as memory and workers ask for."""

from __future__ import annotations

import multiprocessing
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, Protocol

from stream.errors import BadSettings
from stream.learners.eight import LANES
from stream.runs.tuning.keeping import KeptTrials
from stream.runs.tuning.merging import part_of
from stream.runs.tuning.trial import Lane, OutOfMemory, Plan, Trial, run_trial
from stream.settings import Settings

__all__ = ["Pool", "groups_of", "run_passes", "workers_on_this_machine"]

MOST_GROUPS = 8
"""Groups in one pass: more would be faster, but what is interrupted within a pass is tried again."""
Group = tuple[Lane, ...]
Tell = Callable[[float, str], None]


class Pool(Protocol):
    """Where passes run: a process pool of this machine, or a cluster's client."""

    def submit(self, function: Callable[..., Any], /, *args: Any) -> Any:
        """A future of the call."""
        ...


@dataclass(frozen=True, slots=True)
class _Pass:
    groups: tuple[Group, ...]

    @property
    def lanes(self) -> tuple[Lane, ...]:
        return tuple(lane for group in self.groups for lane in group)

    def halves(self) -> tuple[_Pass, _Pass]:
        if len(self.groups) == 1:
            raise BadSettings(
                f"even {len(self.groups[0])} settings side by side take more memory than --memory allows: "
                "allow more, or bound the table (state.admit_after, state.idle_after)"
            )
        middle = len(self.groups) // 2
        return _Pass(self.groups[:middle]), _Pass(self.groups[middle:])


_Split = Callable[[_Pass], tuple[_Pass, _Pass]]


def groups_of(lanes: Sequence[Lane]) -> list[Group]:
    """Lanes in groups that one vector instruction takes; a trial of each is kept by itself."""
    return [tuple(lanes[first : first + LANES]) for first in range(0, len(lanes), LANES)]


def run_passes(
    settings: Settings,
    lanes: Sequence[Lane],
    plan: Plan,
    kept: KeptTrials,
    memory_bytes: int,
    pool: Pool | None,
    workers: int,
    tell: Tell,
    say: Callable[[str], None],
) -> list[Trial]:
    """A trial of each group of the lanes, in order; those that were kept are not tried again.

    `memory_bytes` is for all workers together. `tell` is given the share done, of 1, and a word on it; `say`
    what a person should know about how it was split. Each result is the same however it is split.
    """
    found = {group: kept.load(group) for group in groups_of(lanes)}
    missing = [group for group, trial in found.items() if trial is None]
    if done := len(found) - len(missing):
        say(f"{done} of {len(found)} groups of settings were tried before, with the same settings and data")
    share = min(MOST_GROUPS, max(1, -(-len(missing) // workers)))
    queue = [_Pass(tuple(missing[i : i + share])) for i in range(0, len(missing), share)]
    budget = memory_bytes // max(1, min(workers, len(queue)))
    for one, trial in _run_all(settings, plan, queue, budget, pool, tell, say):
        first = 0
        for group in one.groups:
            part = part_of(trial, first, first + len(group))
            kept.keep(part)
            found[group] = part
            first += len(group)
    return [trial for trial in found.values() if trial is not None]


def _run_all(
    settings: Settings,
    plan: Plan,
    queue: list[_Pass],
    memory_bytes: int,
    pool: Pool | None,
    tell: Tell,
    say: Callable[[str], None],
) -> Iterator[tuple[_Pass, Trial]]:
    """Each pass with its trial, as they end; those that take too much memory are halved."""

    def split(one: _Pass) -> tuple[_Pass, _Pass]:
        halves = one.halves()
        say(
            f"{len(one.lanes)} settings side by side would take more than {memory_bytes / 1e6:,.0f} MB: the "
            "log is gone through twice for them"
        )
        return halves

    if pool is None:
        return _one_by_one(settings, plan, queue, memory_bytes, tell, split)
    return _side_by_side(settings, plan, queue, memory_bytes, pool, tell, split)


def _one_by_one(
    settings: Settings, plan: Plan, queue: list[_Pass], memory_bytes: int, tell: Tell, split: _Split
) -> Iterator[tuple[_Pass, Trial]]:
    total, done = sum(len(one.groups) for one in queue), 0
    while queue:
        one = queue.pop(0)

        def progress(fraction: float | None, messages: int, one: _Pass = one, done: int = done) -> None:
            share = (done + (fraction or 0.0) * len(one.groups)) / total
            tell(share, f"{len(one.lanes)} settings side by side")

        try:
            trial = run_trial(settings, one.lanes, plan, memory_bytes, progress)
        except OutOfMemory:
            queue[:0] = split(one)
            continue
        yield one, trial
        done += len(one.groups)


def _side_by_side(
    settings: Settings,
    plan: Plan,
    queue: list[_Pass],
    memory_bytes: int,
    pool: Pool,
    tell: Tell,
    split: _Split,
) -> Iterator[tuple[_Pass, Trial]]:
    total, done = sum(len(one.groups) for one in queue), 0
    running: dict[Future[Trial], _Pass] = {}
    while queue or running:
        for one in queue:
            running[pool.submit(run_trial, settings, one.lanes, plan, memory_bytes)] = one
        queue = []
        tell(done / total, f"{len(running)} passes under way or waiting")
        for future in wait(running, return_when=FIRST_COMPLETED).done:
            one = running.pop(future)
            try:
                trial = future.result()
            except OutOfMemory:
                queue += split(one)
                continue
            yield one, trial
            done += len(one.groups)


@contextmanager
def workers_on_this_machine(workers: int) -> Iterator[Pool | None]:
    """A pool of so many processes, started afresh; None where one is enough: then passes run in this one."""
    if workers == 1:
        yield None
        return
    with ProcessPoolExecutor(workers, multiprocessing.get_context("spawn")) as pool:
        try:
            yield pool
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            raise
