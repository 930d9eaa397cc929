"""Arbitrary and mutated lines in; the decoder neither crashes nor hangs, and its two ways agree."""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from stream.decoding import REASONS, Decoder
from stream.message import Block
from stream.settings.models import Category, Feed, ListOf, MessagePaths, Quantity, Settings, Words

SETTINGS = Settings(
    feed=Feed(max_line_bytes=5000),
    message=MessagePaths(id="id", time="at", label="yes", weight="w"),
    fields=(
        Words(path="note"),
        Category(path="o.route"),
        Quantity(path="kg"),
        ListOf(path="o.tags"),
        Category(path="hour"),
        Quantity(path="hour", name="hours"),
    ),
)
DECODER = Decoder(SETTINGS, ids=True, times=True)
LINE = (
    '{"id":"h1","at":"2024-03-01T10:00:00Z","note":"ß \\u00e9 包","o":{"route":7,"tags":["a",3],"z":[[{}]]},'
    '"kg":1.5e0,"hour":13,"yes":true,"w":0.5,"skipped":[{"a":null},"\\"}{"]}'
).encode()
BITS = [
    *(bytes([byte]) for byte in b'{}[]",:\\0123456789.eE+-tfnu \t\r\xff\x00\xc3'),
    *(
        b"NaN",
        b"Infinity",
        b"1e999",
        b"null",
        b"true",
        b'"note":',
        b'"o":',
        b"\\ud800",
        b"9" * 400,
        b"{}",
        b"{}{}",
    ),
    *(b"[" * 150, b"]" * 150, b"\xed\xa0\x80", b"\xef\xbb\xbf", b'{"yes":1}', b'"}', b'{"'),
]

lines = st.one_of(
    st.binary(max_size=60),
    st.lists(st.sampled_from(BITS), max_size=12).map(b"".join),
    st.just(LINE),
    st.tuples(st.integers(0, len(LINE)), st.integers(0, 12), st.sampled_from([*BITS, b""])).map(
        lambda cut: LINE[: cut[0]] + cut[2] + LINE[cut[0] + cut[1] :]
    ),
    st.recursive(
        st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
        lambda inner: (
            st.lists(inner, max_size=3)
            | st.dictionaries(st.sampled_from(["note", "o", "route", "tags", "kg", "yes", "w", "at"]), inner)
        ),
        max_leaves=12,
    ).map(lambda value: json.dumps(value).encode()),
).map(lambda line: line.replace(b"\n", b""))
"""Lines as a source gives them: without a line feed."""


def outcomes(block: Block) -> list[Any]:
    """For each row its reject, or its example as a tuple."""
    examples, rejects = DECODER.decode(block)
    found: dict[int, Any] = {reject.row: reject for reject in rejects}
    assert len(found) == len(rejects)
    for at, row in enumerate(examples.rows.tolist()):
        assert row not in found
        values = tuple(column[at] for column in examples.columns.values())
        found[row] = (
            repr(values),
            int(examples.labels[at]),
            float(examples.weights[at]),
            examples.ids[at],
            examples.times[at],
        )
    assert sorted(found) == list(range(len(block)))
    return [found[row] for row in range(len(block))]


def block_of(several: list[bytes]) -> Block:
    """A block as LogSource gives it: no blank line."""
    buffer = b"".join(line + b"\n" for line in several)
    ends = np.flatnonzero(np.frombuffer(buffer, np.uint8) == ord("\n"))
    starts = np.concatenate(([0], ends[:-1] + 1)) if len(ends) else ends
    return Block("log", 0, buffer, starts, ends, starts)


@settings(max_examples=400, deadline=2000)
@given(st.lists(lines.filter(lambda line: line.strip(b" \t\r")), max_size=8))
def test_every_line_is_an_example_or_a_reject_whatever_its_neighbours(several: list[bytes]) -> None:
    together = outcomes(block_of(several))
    for line, outcome in zip(several, together, strict=True):
        alone = outcomes(block_of([line]))[0]
        if isinstance(outcome, tuple):
            assert alone == outcome
        else:
            assert outcome.reason in REASONS
            assert (alone.reason, alone.detail) == (outcome.reason, outcome.detail)


@settings(max_examples=400, deadline=2000)
@given(lines.filter(lambda line: line.strip(b" \t\r")))
def test_what_is_accepted_is_json_that_means_what_was_read(line: bytes) -> None:
    examples, rejects = DECODER.decode(block_of([line]))
    if rejects:
        return
    message = json.loads(line.decode(), parse_constant=lambda text: 1 / 0)
    assert isinstance(message, dict)
    inner = message.get("o") or {}
    assert examples.columns["note"] == [message.get("note")]
    assert examples.columns["o.route"] == [inner.get("route")]
    assert examples.columns["o.tags"] == [inner.get("tags")]
    assert examples.columns["kg"] == [message.get("kg")]
    label = message.get("yes")
    assert examples.labels.tolist() == [-1 if label is None else int(label)]
    assert 0 <= examples.weights[0] <= 1e6
    kg = examples.columns["kg"][0]
    assert kg is None or math.isfinite(np.float32(kg))
    assert type(examples.columns["hour"][0]) in (int, type(None))


@settings(max_examples=100, deadline=2000)
@given(depth=st.integers(1, 2400), kind=st.sampled_from(["[", '{"o":']), closed=st.booleans())
def test_deep_nesting_neither_crashes_nor_depends_on_who_calls(depth: int, kind: str, closed: bool) -> None:
    closing = {"[": "]", '{"o":': "}"}[kind]
    line = ('{"x":' + kind * depth + "null" + closing * (depth if closed else 0) + "}").encode()
    if len(line) > SETTINGS.feed.max_line_bytes:
        line = line[:5000]

    def called_from(frames: int) -> Any:
        return called_from(frames - 1) if frames else outcomes(block_of([line]))[0]

    shallow, deep = called_from(0), called_from(400)
    assert shallow == deep
    assert isinstance(shallow, tuple) == (closed and depth < 100 and len(line) <= 5000)


def test_texts_made_to_be_slow_are_not() -> None:
    wide = Decoder(SETTINGS.model_copy(update={"feed": Feed(max_line_bytes=1 << 20)}))
    for line in (
        b'{"x":"' + b'\\"' * 250_000 + b"[" * 200,
        b'{"x":' + b"[" * 500_000,
        b'{"x":' + b"9" * 500_000 + b",NaN}",
        b'{"x":[' + b"{}," * 150_000 + b"NaN]}",
        b'{"note":"' + b"\\u0041" * 150_000 + b'",',
    ):
        examples, rejects = wide.decode(block_of([line]))
        assert len(examples) == 0
        assert len(rejects) == 1
