"""The truth file of a simulated log in; true probabilities, and where its planted tokens lie in a space, out.

The file is that of docs/simulator.md: its tokens are case-folded words for the note, values as texts for
all other fields.
"""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import dataclass
from functools import reduce
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.decoding import Decoder
from stream.durable import os_errors
from stream.errors import BadData
from stream.features import Batcher
from stream.message import Block
from stream.settings import Settings
from stream.settings.models import Category, Cross, FieldSettings, Space, Words
from stream.tables.lookup import Lookup
from stream.weights import Weights

__all__ = ["Planted", "TrueRates", "Truth", "planted_at", "read_truth"]

NOTE = "note"


@dataclass(frozen=True, slots=True)
class Planted:
    """A token whose true weight is not zero: of one field, or of several taken together."""

    fields: tuple[str, ...]
    tokens: tuple[str, ...]
    weight: float


@dataclass(frozen=True, slots=True)
class Truth:
    """What the outcomes of a simulated log were drawn from; `label_noise`: share of them that was flipped."""

    intercept: float
    planted: tuple[Planted, ...]
    label_noise: float


def read_truth(path: Path) -> Truth:
    """Raises InputMissing without the file, BadData where it is no truth file, or where its truth moves."""
    with os_errors("read", path):
        text = path.read_bytes()
    try:
        found = json.loads(text)
        single = [Planted((w["field"],), (w["token"],), float(w["weight"])) for w in found["weights"]]
        crosses = [Planted((*c["fields"],), (*c["tokens"],), float(c["weight"])) for c in found["crosses"]]
        noise = float(found["settings"]["label_noise"])
        steps = len(found.get("course", "1"))
        intercept = float(found["intercept"])
    except (ValueError, KeyError, TypeError) as error:
        raise BadData(
            f"{path} is no truth file: expected intercept, weights, crosses and settings as "
            f"`bedload simulate` writes them ({type(error).__name__}: {error})"
        ) from error
    if steps > 1:
        raise BadData(
            f"{path} tells a truth of {steps} steps (scenario {found['settings']['scenario']}), and a "
            "comparison needs one that stands: tune without --truth, or simulate a scenario in which nothing "
            "moves"
        )
    return Truth(intercept, (*single, *crosses), noise)


class TrueRates:
    """True shares of yes of the messages of a log, whatever fields `settings` make tokens of.

    Margins are the exactly rounded sums of true weights; label noise e turns a true probability p into a
    share e + (1 - 2 e) p of yes answers. Raises BadData for a planted token that is none.
    """

    def __init__(self, settings: Settings, truth: Truth) -> None:
        own = _true_space(settings, truth)
        self._decoder, self._batcher, self._noise = Decoder(own), Batcher(own), truth.label_noise
        places = planted_at(own, truth)
        for planted, place in zip(truth.planted, places, strict=True):
            if len(place) != 1:
                raise BadData(
                    f"the truth file plants {planted.tokens} in {planted.fields}, which is no token"
                )
        addresses = np.array([min(place) for place in places], np.uint64)
        order = np.argsort(addresses)
        self._lookup = Lookup(
            Weights(
                addresses[order],
                np.array([planted.weight for planted in truth.planted], np.float32)[order],
                (b"",) * len(addresses),
                np.zeros(len(addresses)),
                truth.intercept,
                0,
                own.fingerprint(),
            )
        )

    def of(self, block: Block) -> tuple[npt.NDArray[np.int64], Batch, npt.NDArray[np.float64]]:
        """int64[m] rows of the block that could be read; their batch (until the next call), and float64[m]
        true shares of yes."""
        examples, _ = self._decoder.decode(block)
        batch, over = self._batcher.batch(examples)
        rows = examples.rows[~np.isin(examples.rows, [reject.row for reject in over])]
        return rows, batch, self._noise + (1 - 2 * self._noise) * self._lookup.score(batch)[1]


def planted_at(settings: Settings, truth: Truth) -> list[frozenset[int]]:
    """For each planted token, the addresses that it has in the space of `settings`: by their own fields,
    crosses and hash. None where no field or cross makes a token of its own of it, as a quantity does not.
    """
    decoder, batcher = Decoder(settings, labels=False), Batcher(settings)

    def found(planted: Planted) -> frozenset[int]:
        examples, _ = decoder.decode(_with_nothing_but(planted))
        batch, _ = batcher.batch(examples)
        held = [batch.text(i).partition(b"\x1f")[0].decode() for i in range(len(batch.addresses))]
        alone = [name for name in _names(settings, planted.fields) if held.count(name) == 1]
        return frozenset(int(batch.addresses[held.index(name)]) for name in alone)

    return [found(planted) for planted in truth.planted]


def _with_nothing_but(planted: Planted) -> Block:
    message: dict[str, Any] = {}
    for path, token in zip(planted.fields, planted.tokens, strict=True):
        *above, last = path.split(".")
        reduce(lambda inner, key: inner.setdefault(key, {}), above, message)[last] = token
    line = json.dumps(message, ensure_ascii=False).encode()
    start, end = np.zeros(1, np.int64), np.array([len(line)], np.int64)
    return Block("truth", 0, line, start, end, start)


def _names(settings: Settings, paths: Iterable[str]) -> list[str]:
    """Names of fields, or of crosses, that make tokens of exactly these paths."""
    path_of = {field.name: field.path for field in settings.fields if field.kind != "quantity"}
    wanted = sorted(paths)
    if len(wanted) == 1:
        return [name for name, path in path_of.items() if path == wanted[0]]
    return [
        "&".join(cross.paths)
        for cross in settings.crosses
        if sorted(path_of.get(name, "") for name in cross.paths) == wanted
    ]


def _true_space(settings: Settings, truth: Truth) -> Settings:
    """Settings that make a token of each planted one and read outcomes and weights as `settings` do."""
    paths = sorted({path for planted in truth.planted for path in planted.fields})
    fields: list[FieldSettings] = [
        Words(path=path) if path == NOTE else Category(path=path) for path in paths
    ]
    crosses = sorted({planted.fields for planted in truth.planted if len(planted.fields) > 1})
    return Settings(
        feed=settings.feed,
        message=settings.message,
        fields=tuple(fields),
        crosses=tuple(Cross(paths=paths) for paths in crosses),
        space=Space(address_bits=63),
    )
