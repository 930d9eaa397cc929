"""Weights of all lanes in, the tokens that say most by name, at one strength or along all of them, out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.runs.lane_model import LaneWeights
from stream.token_names import field_and_token

__all__ = ["NamedWeights"]

LARGEST = float(np.finfo(np.float32).max)


class NamedWeights:
    """The weights of a trial with names; a share is that of the `learned` messages.

    Ties go to the smaller address, so that the same weights give the same lists.
    """

    def __init__(self, weights: LaneWeights, learned: float) -> None:
        self._weights = weights
        self._share = np.minimum(weights.messages / max(learned, 1.0), 1.0)

    def towards(self, yes: bool, lane: int, most: int) -> list[dict[str, Any]]:
        """The tokens of one lane with the largest weights of one sign, the largest first."""
        values = self._weights.values[:, lane]
        signed = values if yes else -values
        here = np.flatnonzero(signed > 0)
        kept = self._weights.kept[:, lane]
        return [
            {**self._token(i), "weight": _finite(values[i]), "kept": round(float(kept[i]), 6)}
            for i in here[np.argsort(-signed[here], kind="stable")[:most]]
        ]

    def paths(self, lanes: Sequence[int], chosen: int, most: int) -> list[dict[str, Any]]:
        """Tokens with their weight in each of `lanes`, the most telling first.

        `lanes`: from the strongest to the weakest penalty, `chosen` among them. Telling is the largest
        |weight| * sqrt(share of messages), which grows as a token's part in the spread of the margins does,
        over the lanes down to the chosen one: what only weaker penalties let in comes after all others.
        """
        sizes = np.abs(self._weights.values[:, list(lanes)]) * np.sqrt(self._share)[:, np.newaxis]
        down_to = list(lanes).index(chosen) + 1
        early = sizes[:, :down_to].max(axis=1, initial=0.0)
        ever = sizes.max(axis=1, initial=0.0)
        order = np.lexsort((-ever, -early))
        return [
            {**self._token(i), "weights": [_finite(w) for w in self._weights.values[i, list(lanes)]]}
            for i in order[:most]
            if ever[i] > 0
        ]

    def _token(self, i: np.int64) -> dict[str, Any]:
        field, token = field_and_token(self._weights.names[i])
        return {"field": field, "token": token, "share": float(self._share[i])}


def _finite(weight: npt.NDArray[np.float32] | np.float32) -> float:
    return float(np.clip(weight, -LARGEST, LARGEST)) + 0.0  # no negative zero
