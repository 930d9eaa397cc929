"""What every run that learns does in the same way: begin at the newest checkpoint, learn until it is over."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from stream.checkpoints import Checkpoints
from stream.errors import BadSettings, CannotCreate
from stream.message import Source
from stream.metrics import WindowRow
from stream.runs.accepting import accept_settings
from stream.runs.feeds import refuse_other_kind
from stream.runs.learning import LearningRun
from stream.runs.pacing import Pacer
from stream.settings import Settings
from stream.snapshots import Snapshots
from stream.state_folder import StateFolder

__all__ = ["OnWindow", "begin", "learn", "refuse_used"]

OnWindow = Callable[[WindowRow], None]


def refuse_used(state: StateFolder, snapshots: Snapshots, *, resume: bool, fresh: bool) -> None:
    """Raises CannotCreate where the state folder holds a state that nobody said what to do with; clears it
    where a fresh one is wanted."""
    if state.used() and not (resume or fresh):
        raise CannotCreate(
            f"{state.path} holds a state already: go on from it with --resume, start anew with --fresh, "
            "or give another state.folder"
        )
    if fresh:
        state.clear()
        snapshots.retire_after(-1)


def begin(
    settings: Settings,
    state: StateFolder,
    checkpoints: Checkpoints,
    *,
    journalled: bool,
    accept: bool = False,
    **options: Any,
) -> tuple[LearningRun, list[str], int | None]:
    """A run, gone on with from the newest checkpoint where there is one; warnings; messages it had then.

    `journalled`: whether the run keeps or follows an order journal; BadSettings where the checkpoint is of
    the other kind. `accept`: whether the settings may differ from the checkpoint's; it is then written anew
    as one of these. `options`: for LearningRun.
    """
    saved = checkpoints.newest()
    if saved is None:
        return LearningRun(settings, state.rejects, **options), [], None
    position = saved.about["position"]
    if position is not None and ("journal" in position) != journalled:
        by = "replay" if journalled else "work"
        raise BadSettings(
            f"{saved.path} was left by `bedload {by}`, and only that goes on from it: who else reads the "
            "feed keeps the place in another way. Give another state.folder"
        )
    if position is not None and journalled:
        refuse_other_kind(settings, position["source"])
    found, changes = accept_settings(settings, saved) if accept else (saved, [])
    run = LearningRun(settings, state.rejects, found.about, **options)
    run.restore(found.arrays)
    if changes:
        checkpoints.write(run.messages, run.state(), run.about())
    return run, [*saved.moved_aside, *changes], run.messages


def learn(
    run: LearningRun,
    source: Source,
    pacer: Pacer,
    stopping: list[int],
    on_window: OnWindow,
    over: Callable[[bool], bool],
) -> None:
    """Learns block after block, until a signal came or it is `over`, which is told whether messages came."""
    while not stopping:
        done = run.step(source, pacer.left())
        pacer.keep_up()
        if isinstance(done, WindowRow):
            on_window(done)
        if over(done is not False):
            return
