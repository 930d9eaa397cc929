"""Messages and a snapshot in, margin and probability of each out; nothing of the learning state is read."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.decoding import Decoder
from stream.errors import BadData, BadSettings
from stream.features.batcher import Batcher
from stream.fingerprint import fingerprint_difference
from stream.message import Block, Reject
from stream.settings import Settings
from stream.snapshots import Snapshot
from stream.sources import LogSource
from stream.tables.lookup import Lookup

__all__ = ["Scored", "ScoredBlock", "Scorer", "json_lines", "must_match", "score", "settings_of"]

BLOCK = 4_096
"""Messages read at once."""


class Scored(msgspec.Struct, omit_defaults=True, gc=False):
    """One line of `score --json`: a message's score, or why it has none."""

    id: Any
    probability: float | None
    margin: float | None
    rejected: str | None = None
    detail: str | None = None


@dataclass(frozen=True, slots=True)
class ScoredBlock:
    """A block of messages with the scores of those that are not rejected.

    `rows`: int64[m], which message of `block` each example is; `ids`: m values, or none where the
    settings name no id; `margins`, `probabilities`: float64[m].
    """

    block: Block
    rejects: list[Reject]
    rows: npt.NDArray[np.int64]
    ids: list[Any]
    batch: Batch
    margins: npt.NDArray[np.float64]
    probabilities: npt.NDArray[np.float64]


class Scorer:
    """A snapshot ready to score a log. Settings come from the snapshot, or from a file that must match it.

    Raises BadSettings with the difference where `settings` have another feature space, or where the
    snapshot's own settings are not known here.
    """

    def __init__(self, snapshot: Snapshot, paths: Sequence[str], settings: Settings | None = None) -> None:
        self.settings = settings or settings_of(snapshot)
        must_match(self.settings, snapshot)
        self.lookup = Lookup(snapshot.weights)
        self.intercept = float(snapshot.weights.intercept)
        self.messages = 0
        self.rejected = 0
        self.first_reject = ""
        self._paths = paths

    def blocks(self) -> Iterator[ScoredBlock]:
        """Scores the log in order, one block at a time, whatever labels it may hold."""
        decoder = Decoder(self.settings, ids=True, labels=False)
        batcher = Batcher(self.settings)
        source = LogSource(self._paths, Path(), self.settings.feed.max_line_bytes)
        try:
            while len(block := source.read(BLOCK)):
                yield self._scored(block, decoder, batcher)
        finally:
            source.close()

    def check_rejects(self) -> None:
        """Raises BadData where more messages were rejected than `message.max_reject_share` allows."""
        allowed = self.settings.message.max_reject_share
        if self.rejected > allowed * self.messages:
            raise BadData(
                f"{self.rejects_told()}, more than message.max_reject_share = {allowed:g} allows. Rejected "
                "messages have no score; their lines in `score --json` say why"
            )

    def rejects_told(self) -> str:
        """How many messages were rejected so far, and why the first was; nothing where none was."""
        if not self.rejected:
            return ""
        were = "was" if self.rejected == 1 else "were"
        messages = "message" if self.messages == 1 else "messages"
        why = self.first_reject if self.rejected == 1 else f"the first: {self.first_reject}"
        return f"{self.rejected:,} of {self.messages:,} {messages} {were} rejected ({why})"

    def _scored(self, block: Block, decoder: Decoder, batcher: Batcher) -> ScoredBlock:
        examples, rejects = decoder.decode(block)
        batch, too_long = batcher.batch(examples)
        rows, ids = examples.rows, examples.ids
        if too_long:
            left_out = {reject.row for reject in too_long}
            kept = [i for i, row in enumerate(rows.tolist()) if row not in left_out]
            rows, ids = rows[kept], [ids[i] for i in kept]
        margins, probabilities = self.lookup.score(batch)
        self.messages += len(block)
        self.rejected += len(rejects) + len(too_long)
        if not self.first_reject and (rejects or too_long):
            first = min([*rejects, *too_long], key=lambda reject: reject.row)
            self.first_reject = _detail(block, first)
        return ScoredBlock(block, [*rejects, *too_long], rows, ids, batch, margins, probabilities)


def score(scorer: Scorer) -> Iterator[list[Scored]]:
    """A line for each message in the order of the log, block by block; rejected ones say why."""
    for found in scorer.blocks():
        lines = list(map(Scored, found.ids, found.probabilities.tolist(), found.margins.tolist()))
        if found.rejects:
            lines = _in_order(found, lines)
        yield lines


def _in_order(found: ScoredBlock, lines: list[Scored]) -> list[Scored]:
    by_row = dict(zip(found.rows.tolist(), lines, strict=True))
    for reject in found.rejects:
        by_row[reject.row] = Scored(None, None, None, reject.reason, _detail(found.block, reject))
    return [by_row[row] for row in sorted(by_row)]


def _detail(block: Block, reject: Reject) -> str:
    topic = "standard input" if block.topic == "-" else block.topic
    return f"{topic}, byte {block.offsets[reject.row]}: {reject.detail}"


def json_lines(lines: list[Scored]) -> bytes:
    """The lines as JSON Lines; numbers have the shortest digits that read back to the same float64."""
    return msgspec.json.Encoder().encode_lines(lines)


def settings_of(snapshot: Snapshot) -> Settings:
    """The settings stored in a snapshot. Raises BadSettings where they are not known here."""
    try:
        return Settings.model_validate(snapshot.about.settings)
    except ValueError as error:
        raise BadSettings(
            f"{snapshot.path}: the settings stored in it are not known here; give --config, and to certify "
            f"--strength: {error}"
        ) from None


def must_match(settings: Settings, snapshot: Snapshot) -> None:
    """Raises BadSettings with the difference where `settings` have another feature space."""
    lines = fingerprint_difference(settings.fingerprint(), snapshot.weights.fingerprint)
    if lines:
        raise BadSettings(
            f"{snapshot.path}: learned in another feature space than these settings describe "
            "(here: settings; there: snapshot):\n  "
            + "\n  ".join(lines)
            + "\nset them back, or leave --config out: a snapshot has the settings that it was learned with"
        )
