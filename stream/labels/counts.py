"""What a join has counted so far, as plain numbers in and out."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["JoinCounts"]


@dataclass(slots=True)
class JoinCounts:
    """Messages by what became of them, and outcomes that changed nothing or came at an odd time.

     Of messages: `joined` to an outcome, `expired` without one, `repeated_messages` whose id an earlier one
    had, `discarded` since their outcomes differ; the others wait. Of outcomes: `late`, the first one of a
    message after its waiting time; `repeated` with the label that was known, `conflicting` with the other
    one, `orphans` without a message, `early` before their message but taken.
    """

    messages: int = 0
    outcomes: int = 0
    joined: int = 0
    expired: int = 0
    repeated_messages: int = 0
    discarded: int = 0
    late: int = 0
    repeated: int = 0
    conflicting: int = 0
    orphans: int = 0
    early: int = 0

    @property
    def waiting(self) -> int:
        """Messages that are not decided."""
        return self.messages - self.joined - self.expired - self.repeated_messages - self.discarded
