"""A state folder and the name of an older checkpoint in, the state folder gone back to it out."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from stream.checkpoints import Checkpoints
from stream.errors import InputMissing
from stream.snapshots import Snapshots
from stream.state_folder import StateFolder

__all__ = ["Rollback", "held", "restore"]


@dataclass(frozen=True, slots=True)
class Rollback:
    """What going back did: the checkpoint that is the newest now, later ones moved, snapshots renamed."""

    checkpoint: Path
    moved: tuple[Path, ...]
    renamed: tuple[tuple[str, str], ...]


def held(folder: Path) -> StateFolder:
    """The state folder `folder`, locked. Raises InputMissing without one, and what StateFolder raises."""
    if not folder.is_dir():
        raise InputMissing(f"{folder}: no such state folder")
    return StateFolder(folder)


def restore(folder: Path, name: str) -> Rollback:
    """Makes checkpoint `name` the newest; what came after it is set aside under other names, not removed.

    `bedload work` and `replay --resume` then go on from there. Raises InputMissing, BadData for a broken one,
    TryLater while the folder is in use.
    """
    with held(folder) as state:
        checkpoint, moved = Checkpoints(state.checkpoints, keep=1).restore(name)
        renamed = Snapshots(state.snapshots, keep=1).retire_after(int(checkpoint.name))
    return Rollback(checkpoint, moved, renamed)
