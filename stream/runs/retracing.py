"""A worker's journal and the feed that it read in; the same learned again, and whether bytes agree, out."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from stream.checkpoints import Checkpoints
from stream.errors import BadSettings, MessagesGone
from stream.journal import FILE_NAME
from stream.message import LiveSource
from stream.runs.feeds import live_source, refuse_other_kind
from stream.runs.learning import LearningRun
from stream.runs.loop import OnWindow, begin, learn, refuse_used
from stream.runs.pacing import Pacer
from stream.runs.result import RunResult, result_of
from stream.runs.stopping import stop_on_signal
from stream.settings import Settings
from stream.snapshots import Snapshots
from stream.sources import FollowedSource
from stream.state_folder import StateFolder

__all__ = ["Retraced", "retrace"]

IDLE_S = 0.05
LATER = (
    "Copy {checkpoint} of the worker into checkpoints/ of an empty folder, and its rejects/ beside it, name "
    "that folder with --state, and go on from there with --resume"
)


@dataclass(frozen=True, slots=True)
class Retraced:
    """What was learned again. `worker_checkpoint`: the worker's newest, None where it has none yet.

    `differences`: in what the checkpoint made here differs from that one; empty where they hold the same
    bytes, None where there was nothing to compare, as the worker has no checkpoint or this run was stopped
    before it.
    """

    run: RunResult
    worker_checkpoint: Path | None
    differences: list[str] | None

    def to_json(self) -> dict[str, Any]:
        """The keys of a replay, and what was compared."""
        compared = None if self.worker_checkpoint is None else str(self.worker_checkpoint)
        return {**self.run.to_json(), "worker_checkpoint": compared, "differences": self.differences}


def retrace(
    settings: Settings,
    folder: Path,
    worker: Path,
    *,
    resume: bool = False,
    fresh: bool = False,
    on_window: OnWindow = lambda row: None,
    source: LiveSource | None = None,
) -> Retraced:
    """Learns again, in `folder`, what the worker of the state folder `worker` learned, in the same order.

    It ends where the worker's newest checkpoint was made, or without one at the end of the journal, with a
    checkpoint to be compared. Nothing in `worker` is changed; its process may be alive. `source`: in place
    of the feed's own. Otherwise as stream.runs.replay.replay.
    """
    began = time.monotonic()
    if folder.resolve() == worker.resolve():
        raise BadSettings(f"{folder} is the worker's own state folder: name another with --state")
    found = Checkpoints(worker / "checkpoints", 1).newest_manifest()
    most = None if found is None else int(found[1]["messages"])
    stands_at = _source_position(found)
    if stands_at is not None:
        refuse_other_kind(settings, stands_at)
    with StateFolder(folder) as state, stop_on_signal() as stopping:
        checkpoints = Checkpoints(state.checkpoints, settings.state.keep_checkpoints)
        snapshots = Snapshots(state.snapshots, settings.state.keep_snapshots)
        refuse_used(state, snapshots, resume=resume, fresh=fresh)
        run, warnings, resumed_from = begin(settings, state, checkpoints, journalled=True)
        _refuse_changed(run, found)
        pacer = Pacer(run, settings, checkpoints, most)
        place = FollowedSource(source or live_source(settings, known=stands_at), worker / FILE_NAME)

        def over(read: bool) -> bool:
            if not read and not place.at_end():
                time.sleep(IDLE_S)
            return run.messages == most or place.at_end()

        try:
            if run.position is not None:
                place.seek(dict(run.position))
            if run.messages != most:
                learn(run, place, pacer, stopping, on_window, over)
            pacer.checkpoint()
            weights = run.model.weights()
            snapshot = snapshots.write(run.messages, weights, run.about_snapshot())
        except MessagesGone as error:
            raise BadSettings(
                f"{error.loss}, so that what the worker learned can no longer be learned again from its "
                f"beginning. {LATER.format(checkpoint='a checkpoint past that place')}"
            ) from None
        finally:
            place.close()
            run.rejects.close()
        result = result_of(
            run,
            [],
            nnz=len(weights),
            seconds=time.monotonic() - began,
            resumed_from=resumed_from,
            checkpoints=pacer.written,
            snapshot=snapshot,
            interrupted=bool(stopping),
            warnings=warnings,
        )
        if found is None or run.messages != most:
            return Retraced(result, None if found is None else found[0], None)
        own = checkpoints.newest_manifest()
        assert own is not None
        return Retraced(result, found[0], _differences(own[1], found[1]))


def _refuse_changed(run: LearningRun, found: tuple[Path, Mapping[str, Any]] | None) -> None:
    """What was learned under settings that changed on the way cannot be learned again under the last ones."""
    accepted = [] if found is None else found[1]["about"].get("accepted", [])
    if accepted != run.accepted:
        since = accepted[-1]["messages"] if accepted else 0
        raise BadSettings(
            f"the worker's settings changed last after {since:,} messages (--accept-settings), and what it "
            "learned before cannot be learned again under the present ones. "
            + LATER.format(checkpoint=f"checkpoint {since:015d} or a later one")
        )


def _source_position(found: tuple[Path, Mapping[str, Any]] | None) -> dict[str, Any] | None:
    """The feed's part of the position in a checkpoint."""
    position = None if found is None else found[1]["about"]["position"]
    if position is not None and "journal" not in position:
        assert found is not None
        raise BadSettings(f"{found[0]} was left by `bedload replay`, which keeps no order journal")
    return None if position is None else dict(position["source"])


def _differences(own: Mapping[str, Any], other: Mapping[str, Any]) -> list[str]:
    """Names of what differs in two checkpoints, but for the version of the program that wrote them."""
    facts = [f"about.{name}" for name in own["about"] if name != "program"]
    names = [name for name in facts if own["about"][name[6:]] != other["about"].get(name[6:])]
    files = own["files"].keys() | other["files"].keys()
    return names + sorted(name for name in files if own["files"].get(name) != other["files"].get(name))
