"""Finished trials as folders: a trial and the digest of what made it in, the same trial out another time."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Sequence
from dataclasses import asdict, astuple
from importlib.metadata import version
from itertools import pairwise
from pathlib import Path

import numpy as np

from stream.arrays_file import read_array_folder, write_array_folder
from stream.durable import make_folder, move_folder
from stream.errors import BadData, InputMissing
from stream.runs.lane_model import LaneWeights
from stream.runs.learning import pinned
from stream.runs.tuning.trial import Lane, Plan, Trial
from stream.settings import Settings

__all__ = ["KeptTrials"]

FORMAT, FORMAT_VERSION = "bedload trial", 1
_TRIAL = (
    "loss", "block_loss", "block_totals", "block_nnz", "bins", "slice_loss", "slice_totals", "refused"
)  # fmt: skip
_WEIGHTS = ("addresses", "values", "kept", "messages", "intercepts")


class KeptTrials:
    """Trials over one log and plan, by their lanes. Anything that changes a result changes their names."""

    def __init__(self, folder: Path, settings: Settings, log_digest: str, plan: Plan) -> None:
        self._folder = folder
        self._of = {
            "program": version("bedload"),
            "fingerprint": settings.fingerprint(),
            "pinned": pinned(settings),
            "message": settings.message.model_dump(mode="json"),
            "max_line_bytes": settings.feed.max_line_bytes,
            "log": log_digest,
            "plan": asdict(plan),
        }

    def name(self, lanes: Sequence[Lane]) -> str:
        """Name of the folder of a trial of these lanes."""
        text = json.dumps({**self._of, "lanes": [astuple(lane) for lane in lanes]}, sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()[:32]

    def load(self, lanes: Sequence[Lane]) -> Trial | None:
        """The trial of these lanes, if it was finished before; a broken one is moved aside and made again."""
        path = self._folder / self.name(lanes)
        try:
            manifest, arrays = read_array_folder(path)
        except InputMissing:
            return None
        except BadData:
            move_folder(path, self._folder / "broken", path.name)
            return None
        about = manifest["about"]
        text, offsets = arrays["names"].tobytes(), arrays["name_offsets"].tolist()
        weights = LaneWeights(
            names=tuple(text[start:end] for start, end in pairwise(offsets)),
            **{name: arrays[f"weights.{name}"] for name in _WEIGHTS},
        )
        return Trial(
            lanes=tuple(lanes),
            weights=weights,
            slice_names=tuple(about["slice_names"]),
            rejected=about["rejected"],
            **{name: arrays[name] for name in _TRIAL},
        )

    def keep(self, trial: Trial) -> Path:
        """Writes a finished trial. Raises CannotCreate, NoPermission, FileTrouble."""
        make_folder(self._folder)
        lengths = [0, *map(len, trial.weights.names)]
        arrays = {
            **{name: getattr(trial, name) for name in _TRIAL},
            **{f"weights.{name}": getattr(trial.weights, name) for name in _WEIGHTS},
            "names": np.frombuffer(b"".join(trial.weights.names), np.uint8),
            "name_offsets": np.cumsum(lengths, dtype=np.int64),
        }
        about = {"slice_names": list(trial.slice_names), "rejected": trial.rejected}
        manifest = {"format": FORMAT, "format_version": FORMAT_VERSION, "of": self._of, "about": about}
        return write_array_folder(self._folder, self.name(trial.lanes), arrays, manifest)
