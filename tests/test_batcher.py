"""The compiled batcher gives the rows that the plain twin gives, whatever the text and the cuts."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as options

from stream.features.batcher import Batcher
from stream.message import Examples
from stream.settings.models import Category, Cross, ListOf, MessagePaths, Quantity, Settings, Space, Words
from tests.strategies import settings_and_messages
from tests.twins import features_twin


def examples_of(messages: list[dict[str, Any]], settings: Settings) -> Examples:
    """Messages as a decoder would hand them on."""

    def value(message: Any, path: str) -> Any:
        for key in path.split("."):
            message = message.get(key) if isinstance(message, dict) else None
        return message

    count = len(messages)
    columns = {field.path: [value(m, field.path) for m in messages] for field in settings.fields}
    return Examples(np.arange(count), columns, np.ones(count, np.int8), np.ones(count))


def compiled(messages: list[dict[str, Any]], settings: Settings, cut: int = 1000) -> list[list[Any] | None]:
    """Rows by the kernel, None for one that was rejected."""
    batcher = Batcher(settings)
    out: list[list[Any] | None] = []
    for first in range(0, len(messages), cut):
        piece = messages[first : first + cut]
        batch, rejects = batcher.batch(examples_of(piece, settings))
        made = iter(range(len(batch)))
        rejected = {reject.row for reject in rejects}
        assert len(rejected) + len(batch) == len(piece)
        for i in range(len(piece)):
            if i in rejected:
                out.append(None)
                continue
            row = next(made)
            out.append(
                [
                    (batch.text(e), int(batch.addresses[e]), np.float32(batch.values[e]))
                    for e in range(batch.row_ptr[row], batch.row_ptr[row + 1])
                ]
            )
    return out


def plain(message: dict[str, Any], settings: Settings) -> list[Any] | None:
    """Row by the twin, None where it rejects."""
    try:
        return features_twin.row(message, settings)
    except features_twin.Rejected:
        return None


@given(settings_and_messages(wrong=False))
@options(max_examples=300, deadline=None)
def test_kernel_rows_are_the_twins_rows(drawn: tuple[Settings, list[dict[str, Any]]]) -> None:
    settings, messages = drawn
    expected = [plain(message, settings) for message in messages]
    assert compiled(messages, settings) == expected
    assert compiled(messages, settings, cut=1) == expected


def test_every_vector_is_reproduced() -> None:
    cases = json.loads((Path(__file__).parent / "vectors" / "addresses.json").read_text("utf-8"))["cases"]
    checked = 0
    for case in cases:
        settings = Settings.model_validate(case["settings"])
        if case.get("rejected") not in (None, "too_many_tokens"):
            continue
        (row,) = compiled([case["message"]], settings)
        if "rejected" in case:
            assert row is None
        else:
            assert row is not None
            assert [(t.decode(), a, v) for t, a, v in row] == [
                (e["text"], int(e["address"], 16), np.float32(e["value"])) for e in case["row"]
            ]
        checked += 1
    assert checked > 80


def test_long_rows_grow_every_array() -> None:
    settings = Settings(
        fields=(Words(path="note", value="count", pairs=True), ListOf(path="tags", value="log_count")),
        message=MessagePaths(max_tokens=100_000),
    )
    message = {
        "note": " ".join(f"word{i % 7000}" for i in range(20_000)) + " é漢字" * 3000,
        "tags": [f"tag {i % 500}" for i in range(9000)],
    }
    assert compiled([message, message], settings) == [plain(message, settings)] * 2


def test_row_over_the_cap_is_rejected_and_its_neighbours_are_not() -> None:
    settings = Settings(fields=(Words(path="note"),), message=MessagePaths(max_tokens=3))
    rows = compiled([{"note": "a b c"}, {"note": "a b c d"}, {"note": "e"}], settings)
    assert [row if row is None else len(row) for row in rows] == [3, None, 1]


def test_crosses_over_the_cap_are_rejected_before_they_are_made() -> None:
    settings = Settings(
        fields=(ListOf(path="a"), ListOf(path="b"), ListOf(path="c")),
        crosses=(Cross(paths=("a", "b", "c")),),
        message=MessagePaths(max_tokens=10_000),
    )
    items = [str(i) for i in range(3000)]
    assert compiled([{"a": items, "b": items, "c": items}], settings) == [None]


@pytest.mark.parametrize("bits", [20, 40, 63])
def test_addresses_meeting_across_fields_are_merged(bits: int) -> None:
    fields = tuple(Words(path=name) for name in ("a", "b"))
    settings = Settings(
        fields=fields, space=Space(address_bits=bits), message=MessagePaths(max_tokens=20_000)
    )
    message = {name: " ".join(f"{name}{i}" for i in range(6000)) for name in ("a", "b")}
    (row,) = compiled([message], settings)
    assert row is not None and row == plain(message, settings)
    addresses = [address for _, address, _ in row]
    assert len(set(addresses)) == len(addresses)
    assert (len(addresses) < 12_000) == (bits == 20)


def test_empty_block_gives_an_empty_batch() -> None:
    settings = Settings(fields=(Category(path="route"), Quantity(path="weight")))
    batch, rejects = Batcher(settings).batch(examples_of([], settings))
    assert len(batch) == 0 and rejects == [] and list(batch.row_ptr) == [0]


def test_rows_are_right_past_two_billion_rows() -> None:
    settings = Settings(fields=(Words(path="note", value="count"), Category(path="route")))
    messages = [{"note": f"left at gate {i} gate", "route": "gate"} for i in range(8)]
    batcher = Batcher(settings)
    batcher._index_state[1] = (1 << 31) - 3
    batch, _ = batcher.batch(examples_of(messages, settings))
    assert batcher._index_state[1] == 5
    rows = [
        [(batch.text(e), int(batch.addresses[e]), batch.values[e]) for e in range(*batch.row_ptr[i : i + 2])]
        for i in range(len(batch))
    ]
    assert rows == [plain(message, settings) for message in messages]
