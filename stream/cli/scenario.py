"""Options that name an invented stream in; its log in a folder, with what is known of it, out."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from simulator import CourierFeed
    from simulator.courier import Courier
    from stream.runs.converging.job import Known
    from stream.runs.tuning.truth import Planted
    from stream.settings import Settings

__all__ = ["courier_settings", "write_stream"]

CATEGORIES = ("route", "stop", "hour", "sender", "locker")


def courier_settings(log: Path, changes: list[str]) -> Settings:
    """Settings that can say all that a courier feed's truth says: a token for each of its tokens."""
    from stream.settings import load

    fields = [{"path": "note", "kind": "words"}, *({"path": p, "kind": "category"} for p in CATEGORIES)]
    tables = ", ".join(f'{{path = "{field["path"]}", kind = "{field["kind"]}"}}' for field in fields)
    own = [
        f"feed.paths={json.dumps([str(log)])}",
        'message.label="redelivered"',
        f"fields=[{tables}]",
        'crosses=[{paths = ["route", "hour"]}]',
    ]
    return load(None, [*own, *changes])


def write_stream(feed: CourierFeed, log: Path, tell: Callable[[float, str], None]) -> Known:
    """Writes the feed's messages; their true shares of yes, and the tokens that are planted when."""
    import numpy as np

    from simulator.courier import Courier
    from stream.runs.converging.job import Known

    courier, shares = Courier(feed), []
    with log.open("wb") as out:
        for number in range(feed.block_count):
            block = courier.block(number)
            out.write(block.lines)
            shares.append(feed.label_noise + (1.0 - 2.0 * feed.label_noise) * block.probability)
            tell((number + 1) / feed.block_count, "simulating")

    def planted(message: int) -> tuple[Planted, ...]:
        return _planted(courier, message)

    return Known(np.concatenate(shares), planted)


def _planted(courier: Courier, message: int) -> tuple[Planted, ...]:
    from stream.runs.tuning.truth import Planted

    truth = courier.truth_at(message)
    single = [Planted((w["field"],), (w["token"],), w["weight"]) for w in truth.tokens()]
    crossed = [Planted((*c["fields"],), (*c["tokens"],), c["weight"]) for c in truth.crosses()]
    return (*single, *crossed)
