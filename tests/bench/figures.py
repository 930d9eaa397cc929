"""Works to be timed against each other come in; figures with their targets go out."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass, field
from typing import Any, NamedTuple, TypeVar

__all__ = ["Figure", "Seconds", "alternating", "best", "timed"]

T = TypeVar("T")


@dataclass(frozen=True)
class Figure:
    """One line of the table; `details` are figures without a target that explain it."""

    what: str
    value: float
    unit: str
    at_least: float | None = None
    at_most: float | None = None
    details: Mapping[str, float] = field(default_factory=dict)

    @property
    def met(self) -> bool | None:
        """None without a target."""
        if self.at_least is not None:
            return bool(self.value >= self.at_least)
        return None if self.at_most is None else bool(self.value <= self.at_most)

    @property
    def target(self) -> str:
        if self.at_least is not None:
            return f">= {self.at_least:g}"
        return "" if self.at_most is None else f"<= {self.at_most:g}"

    def to_json(self) -> dict[str, Any]:
        details = {name: float(number) for name, number in self.details.items()}
        return {**asdict(self), "details": details, "met": self.met}


class Seconds(NamedTuple):
    """Of the clock on the wall and of this process's cores."""

    wall: float
    cpu: float


def timed(work: Callable[..., object], *arguments: Any) -> Seconds:
    """How long one call takes."""
    wall, cpu = time.perf_counter(), time.process_time()
    work(*arguments)
    return Seconds(time.perf_counter() - wall, time.process_time() - cpu)


def alternating(rounds: int, *works: Callable[[], T]) -> list[list[T]]:
    """Times of each work over `rounds` rounds in turn, so that a slow spell meets all of them."""
    times: list[list[T]] = [[] for _ in works]
    for _ in range(rounds):
        for work, found in zip(works, times, strict=True):
            found.append(work())
    return times


def best(times: list[Seconds]) -> Seconds:
    """The least of each clock: what the work costs when nobody else wants the machine."""
    return Seconds(min(t.wall for t in times), min(t.cpu for t in times))
