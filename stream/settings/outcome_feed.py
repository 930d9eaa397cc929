"""The settings of outcomes that come in a feed of their own: plain values in, checked ones out."""

from __future__ import annotations

from typing import Any, Literal

from pydantic import Field, StrictBool, field_validator, model_validator

from stream.settings import checks
from stream.settings.value_types import DottedPath, Duration, Section, Topic

__all__ = ["Outcomes"]


class Outcomes(Section):
    """Where outcomes come from that are not in the messages, and how long messages wait for them."""

    kind: Literal["inline", "log", "topic"] = Field(
        default="inline",
        description="Where outcomes are: in the messages (message.label), in log files of their own, or in a "
        "topic of the brokers of [feed].",
    )
    paths: tuple[str, ...] = Field(
        default=(),
        description="Log files of outcomes, as feed.paths. One text counts as a list of one.",
    )
    topic: Topic | None = Field(default=None, description="Topic of outcomes; it is never made.")
    id: DottedPath | None = Field(
        default=None, description="Dotted path, in an outcome, of the id of its message."
    )
    label: DottedPath | None = Field(
        default=None, description="Dotted path, in an outcome, of the label: true, false, 1 or 0."
    )
    time: DottedPath | None = Field(
        default=None, description="Dotted path, in an outcome, of its event time, as message.time."
    )
    wait: Duration | None = Field(
        default=None, description="How long, in event time, a message waits for its outcome."
    )
    when_absent: Literal["negative", "drop"] = Field(
        default="negative",
        description="A message whose waiting time ends without outcome: learned as negative, or dropped.",
    )
    on_conflict: Literal["first", "last", "reject"] = Field(
        default="first",
        description="Of outcomes of one message that differ the first counts, or the last within the waiting "
        "time, or none and the message is not learned. With the latter two every message waits to the end.",
    )
    allow_early: StrictBool = Field(
        default=False,
        description="Keep an outcome whose event time is before that of its message; else it has no message.",
    )

    @field_validator("paths", mode="before")
    @classmethod
    def _one_is_a_list(cls, texts: Any) -> Any:
        return (texts,) if isinstance(texts, str) else texts

    @model_validator(mode="after")
    def _keys_fit(self) -> Outcomes:
        checks.refuse(checks.outcomes_problems(self))
        return self

    @property
    def wait_ms(self) -> int:
        """`wait` in milliseconds."""
        assert self.wait is not None  # checked where kind is not "inline"
        return checks.duration_ms(self.wait)
