"""What is to be compared, with what and when; and what is known of the stream."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from stream.batch_fits.fits import Solver
from stream.errors import BadSettings, UsageError
from stream.runs.tuning.truth import Planted
from stream.settings import Settings
from stream.settings.models import Learner

__all__ = ["Job", "Known", "Method", "Wanted", "cuts_of", "learner_settings"]

Method = Literal["ftrl", "truncated-gradient"]
FTRL_ALONE = ("damping", "horizon")
FIRST_CUT = 1_000
NEVER_HALVED = 10**15
"""`learner.averaging` that counts all messages of a pass alike."""


@dataclass(frozen=True, slots=True)
class Known:
    """What is known of a simulated stream.

    `shares`: float64[messages], each message's true share of yes, label noise included; `planted`: gives the
    tokens with a true weight at the time of a message, by its number from 0.
    """

    shares: npt.NDArray[np.float64]
    planted: Callable[[int], tuple[Planted, ...]]


@dataclass(frozen=True, slots=True)
class Wanted:
    """A learner to compare; `averaged`: with the weights that `learner.averaging` gives to readers."""

    method: Method
    learning_rate: float
    averaged: bool = False

    def to_json(self, others: tuple[Wanted, ...] = ()) -> dict[str, Any]:
        """As JSON types, with a name that none of the `others` has."""
        name = f"averaged {self.method}" if self.averaged else self.method
        alike = [one for one in others if (one.method, one.averaged) == (self.method, self.averaged)]
        if len(alike) > 1:
            name += f" {self.learning_rate:g}"
        return {
            "name": name,
            "method": self.method,
            "learning_rate": self.learning_rate,
            "averaged": self.averaged,
        }


@dataclass(frozen=True, slots=True)
class Job:
    """What to compare with what.

    `messages`: how many are learned; the `fresh` after them are only scored. `cuts`: after how many messages
    to look, ascending, the last of them all `messages`. `epochs`: passes of a second row for each learner, or
    1 for none. `windows`: parts of the messages for the table of a feed that shifts, or 0 for none.
    """

    learners: tuple[Wanted, ...]
    strengths: tuple[float, ...]
    messages: int
    fresh: int
    cuts: tuple[int, ...]
    epochs: int = 5
    solver: Solver = "liblinear"
    windows: int = 0
    memory_bytes: int = 4_000_000_000


def cuts_of(messages: int, asked: tuple[int, ...] = ()) -> tuple[int, ...]:
    """1,000, 3,000, 10,000, ... below `messages`, or those `asked` for, and `messages` itself.

    Raises UsageError for a cut past the end.
    """
    if asked:
        beyond = [cut for cut in asked if not 0 < cut <= messages]
        if beyond:
            raise UsageError(f"a look after {beyond[0]:,} messages, but {messages:,} are learned")
        return tuple(sorted({*asked, messages}))
    found, cut = [], FIRST_CUT
    while cut < messages:
        found.append(cut)
        cut = cut * 3 if str(cut).startswith("1") else cut // 3 * 10
    return (*found, messages)


def learner_settings(settings: Settings, wanted: Wanted, strength: float) -> Settings:
    """`settings` with this learner at this strength. Raises BadSettings where they press in other ways, too,
    than the batch fit does."""
    own = settings.learner
    for name in ("l1", "l2"):
        if getattr(own, name):
            raise BadSettings(
                f"learner.{name} = {getattr(own, name):g}: the batch fit is that of l1_per_example alone. "
                f"Leave it out, for example with --set learner.{name}=0"
            )
    if own.horizon is not None:
        raise BadSettings(
            f"learner.horizon = {own.horizon:,}: past it the strength per example is no longer that of the "
            "batch fit. Take it out of the settings for this"
        )
    keys: dict[str, Any] = own.model_dump()
    if wanted.method != "ftrl":
        keys = {name: keys[name] for name in Learner.model_fields if name not in FTRL_ALONE}
    keys |= {
        "method": wanted.method,
        "learning_rate": wanted.learning_rate,
        "l1_per_example": strength,
        "averaging": NEVER_HALVED if wanted.averaged else None,
    }
    return settings.model_copy(update={"learner": Learner.model_validate(keys)})
