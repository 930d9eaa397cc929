"""Rejected messages of blocks come in; they are counted and handed on, and stop a run where they are many."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Literal, Protocol

from stream.errors import BadData
from stream.message import Block, Reject
from stream.reject_file import RejectFile
from stream.settings.models import MessagePaths

__all__ = ["RejectLog", "RejectSink"]


class RejectSink(Protocol):
    """Where rejected messages go; `where` names it for people."""

    where: str

    def put(self, number: int, block: Block, reject: Reject) -> None:
        """Takes reject `number` (1, 2, ... over the run), a message of `block`."""
        ...

    def sync(self) -> None:
        """Returns when all that was put is safe; raises where it is not, and for good from then on."""
        ...

    def close(self) -> None:
        """Releases what is open."""
        ...


class RejectLog:
    """Counts the rejects of one run, hands them on, and stops the run where they are too many.

    `limits`: settings.message, for the share of rejects that stops a run; `window`: messages in a window that
    is judged by itself too (none: no windows). `action`: keep them, in `sink` or else in
    `folder`/rejects.jsonl; only count them; or stop at the first. `state`: what `state()` gave when the
    checkpoint was written that the run goes on from; the file is cut back to it. `count`: rejects so far;
    `by_reason`: the same by reason code. Raises CannotCreate, NoPermission, FileTrouble.
    """

    def __init__(
        self,
        folder: Path,
        limits: MessagePaths,
        state: Mapping[str, Any] | None = None,
        *,
        action: Literal["keep", "skip", "halt"] = "keep",
        window: int | None = None,
        sink: RejectSink | None = None,
    ) -> None:
        self.by_reason: dict[str, int] = dict(state["by_reason"]) if state else {}
        self.count = sum(self.by_reason.values())
        self._limits = limits
        self._halt = action == "halt"
        self._span = max(window, limits.rejects_allowed_before) if window is not None else None
        self._in_span = int(state["in_window"]) if state else 0
        self._span_of: int | None = None
        self._sink: RejectSink | None = None
        if action == "keep":
            self._sink = sink or RejectFile(folder, self.count)

    def add(self, block: Block, rejects: Iterable[Reject], messages_before: int) -> None:
        """Records the rejects of a block and judges their share; for every block, in order, rejects or not.

        `messages_before`: messages of the run before the block. The share of the whole run is judged at the
        message `rejects_allowed_before` and at each reject after it, that of a window at each reject, so
        where a run stops does not depend on how its messages are cut into blocks. Raises BadData at the
        message where the share is over the limit.
        """
        first = max(self._limits.rejects_allowed_before, 1)
        through = messages_before
        self._enter_span(messages_before)
        for reject in sorted(rejects, key=lambda reject: reject.row):
            number = messages_before + reject.row + 1
            if through < first < number:
                self._judge(block, first - messages_before - 1, first)
            self._enter_span(number - 1)
            self._take(block, reject)
            if number >= first:
                self._judge(block, reject.row, number)
            self._judge_span(block, reject.row, number)
            through = number
        if through < first <= messages_before + len(block):
            self._judge(block, first - messages_before - 1, first)
        self._enter_span(messages_before + len(block))

    def sync(self) -> None:
        """Returns when everything added is safe. Once it failed it fails for good."""
        if self._sink is not None:
            self._sink.sync()

    def state(self) -> dict[str, Any]:
        """What a checkpoint keeps, after `sync`: JSON types."""
        return {"by_reason": dict(sorted(self.by_reason.items())), "in_window": self._in_span}

    def close(self) -> None:
        """Releases what is open."""
        if self._sink is not None:
            self._sink.close()

    def _take(self, block: Block, reject: Reject) -> None:
        self.count += 1
        self._in_span += 1
        self.by_reason[reject.reason] = self.by_reason.get(reject.reason, 0) + 1
        if self._halt:
            raise BadData(
                f"{_place(block, reject.row)}: rejected as {reject.reason} ({reject.detail}), and "
                'rejects.action = "halt" stops at the first. Repair the feed or the settings, or take '
                'action = "keep"'
            )
        if self._sink is not None:
            self._sink.put(self.count, block, reject)

    def _enter_span(self, messages: int) -> None:
        """A new window begins where message number `messages` + 1 lies past the present one."""
        if self._span is None:
            return
        if self._span_of not in (None, messages // self._span):
            self._in_span = 0
        self._span_of = messages // self._span

    def _judge(self, block: Block, row: int, messages: int) -> None:
        """Raises BadData where too large a share of the first `messages` was rejected; `row` is the last."""
        if self.count > self._limits.max_reject_share * messages:
            share = f"{self.count:,} of {messages:,} messages were rejected ({self.count / messages:.2%})"
            self._stop(share, block, row)

    def _judge_span(self, block: Block, row: int, messages: int) -> None:
        """Raises BadData where the window of message number `messages` has more rejects than it may have."""
        if self._span is not None and self._in_span > self._limits.max_reject_share * self._span:
            since = (messages - 1) // self._span * self._span
            share = f"{self._in_span:,} of the {messages - since:,} messages after message {since:,} were"
            self._stop(f"{share} rejected, too many for a window of {self._span:,}", block, row)

    def _stop(self, share: str, block: Block, row: int) -> None:
        self.sync()
        often, reason = max((count, reason) for reason, count in self.by_reason.items())
        where = "" if self._sink is None else f"See the lines and reasons in {self._sink.where}; "
        raise BadData(
            f"{share}, over message.max_reject_share = {self._limits.max_reject_share:g}, at "
            f"{_place(block, row)}; most often {reason} ({often:,}). {where}repair the feed or the settings, "
            "or raise the share"
        )


def _place(block: Block, row: int) -> str:
    return f"{block.topic}, partition {block.partition}, offset {int(block.offsets[row]):,}"
