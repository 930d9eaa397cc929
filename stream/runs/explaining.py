"""Messages and a snapshot in, the tokens that made each score out, adding up to the margin to the bit."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from typing import Any

from stream.batch import Batch
from stream.runs.scoring import Scorer
from stream.token_names import field_and_token

__all__ = ["Effect", "Explanation", "explain"]


@dataclass(frozen=True, slots=True)
class Effect:
    """What one token of a message adds to the margin: effect = weight * value, exact.

    `running`: the intercept and all effects up to this one, summed exactly and rounded once.
    """

    field: str
    token: str
    value: float
    weight: float
    effect: float
    running: float


@dataclass(frozen=True, slots=True)
class Explanation:
    """Why a message has its score, in the order of a table: intercept, towards yes, towards no, margin.

    The exactly rounded sum (`math.fsum`) of intercept and effects is `margin`, bit for bit what `score`
    gives. `tokens` counts all tokens of the message, `zero_or_unseen` those whose weight is zero or
    that were never learned: a snapshot holds non-zero weights only and cannot tell the two apart.
    """

    id: Any
    intercept: float
    towards_yes: tuple[Effect, ...]
    towards_no: tuple[Effect, ...]
    margin: float
    probability: float
    tokens: int
    zero_or_unseen: int

    def to_json(self) -> dict[str, Any]:
        """All of it as JSON types; numbers keep every digit."""
        return asdict(self)


def explain(scorer: Scorer, only: frozenset[str] = frozenset()) -> Iterator[Explanation]:
    """An explanation of each message of the scorer's log that is not rejected, in order.

    `only`: ids, as texts, of the messages to explain; all of them where it is empty.
    """
    for scored in scorer.blocks():
        for row, id_ in enumerate(scored.ids):
            if only and str(id_) not in only:
                continue
            yield _explained(scorer, scored.batch, row, id_, scored.margins[row], scored.probabilities[row])


def _explained(
    scorer: Scorer, batch: Batch, row: int, id_: Any, margin: float, probability: float
) -> Explanation:
    begin, end = int(batch.row_ptr[row]), int(batch.row_ptr[row + 1])
    weights = scorer.lookup.weights_of(batch.addresses[begin:end]).tolist()
    values = batch.values[begin:end].tolist()
    found = [
        (weight * value, weight, value, *field_and_token(batch.text(begin + i)))
        for i, (weight, value) in enumerate(zip(weights, values, strict=True))
        if weight != 0
    ]
    found.sort(key=lambda part: (-abs(part[0]), part[3], part[4]))
    so_far = [scorer.intercept]

    def block(towards_yes: bool) -> tuple[Effect, ...]:
        effects = []
        for effect, weight, value, field, token in found:
            if (effect > 0) == towards_yes:
                so_far.append(effect)
                effects.append(Effect(field, token, value, weight, effect, math.fsum(so_far)))
        return tuple(effects)

    yes, no = block(True), block(False)
    return Explanation(
        id=id_,
        intercept=scorer.intercept,
        towards_yes=yes,
        towards_no=no,
        margin=float(margin),
        probability=float(probability),
        tokens=end - begin,
        zero_or_unseen=end - begin - len(found),
    )
