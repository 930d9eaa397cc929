"""Lines in; examples or rejects of `Decoder` out, by kind of field."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stream.decoding import REASONS, Decoder
from stream.decoding.times import epoch_ms
from stream.errors import BadSettings
from stream.message import Block, Examples, Reject
from stream.settings.models import Category, Feed, ListOf, MessagePaths, Quantity, Settings, Words

COURIER = Settings(
    feed=Feed(max_line_bytes=2000),
    message=MessagePaths(id="id", time="at", label="redelivered", weight="weight"),
    fields=(
        Words(path="note"),
        Category(path="route"),
        Quantity(path="weight_kg"),
        ListOf(path="tags"),
        Category(path="depot.bank.code"),
    ),
)


def block_of(lines: list[bytes]) -> Block:
    """The lines one after the other in a block."""
    lengths = np.array([len(line) for line in lines], np.int64)
    ends = np.cumsum(lengths + 1) - 1
    return Block("log", 0, b"".join(line + b"\n" for line in lines), ends - lengths, ends, ends - lengths)


def decode(*lines: bytes, settings: Settings = COURIER, **asked: bool) -> tuple[Examples, list[Reject]]:
    return Decoder(settings, **asked).decode(block_of(list(lines)))


def reject_of(line: bytes, settings: Settings = COURIER, **asked: bool) -> Reject:
    """The reject of the middle one of three lines, of which the others are fine."""
    examples, rejects = decode(b"{}", line, b"{}", settings=settings, **asked)
    assert examples.rows.tolist() == [0, 2]
    assert [reject.row for reject in rejects] == [1]
    assert rejects[0].reason in REASONS
    return rejects[0]


def value_of(path: str, line: bytes, **asked: bool) -> Any:
    examples, rejects = decode(line, **asked)
    assert not rejects
    return examples.columns[path][0]


# what is read


def test_a_message_becomes_an_example_with_its_fields_label_and_weight() -> None:
    line = {
        "id": "h1",
        "at": "2024-03-01T00:00:00Z",
        "note": "café 包裹",
        "route": "R7",
        "weight_kg": 2.5,
        "tags": ["a", 3],
        "depot": {"bank": {"code": 12, "else": []}},
        "redelivered": True,
        "weight": 2,
        "unused": {"deep": [1, {"x": None}]},
    }
    examples, rejects = decode(json.dumps(line).encode(), ids=True, times=True)
    assert not rejects
    assert examples.columns == {
        "note": ["café 包裹"],
        "route": ["R7"],
        "weight_kg": [2.5],
        "tags": [["a", 3]],
        "depot.bank.code": [12],
    }
    assert examples.rows.dtype == np.int64
    assert (examples.labels.tolist(), examples.labels.dtype) == ([1], np.int8)
    assert (examples.weights.tolist(), examples.weights.dtype) == ([2.0], np.float64)
    assert examples.ids == ["h1"]
    assert examples.times == [1_709_251_200_000]


def test_missing_and_null_are_nothing_and_no_error() -> None:
    examples, rejects = decode(
        b"{}",
        b'{"note":null,"route":null,"weight_kg":null,"tags":null,"depot":null,"redelivered":null,"weight":null}',
        b'{"depot":{}}',
        b'{"depot":{"bank":null}}',
        b'{"depot":{"bank":{"code":null}}}',
        ids=True,
        times=True,
    )
    assert not rejects
    assert {path: set(column) for path, column in examples.columns.items()} == {
        path: {None} for path in ("note", "route", "weight_kg", "tags", "depot.bank.code")
    }
    assert examples.labels.tolist() == [-1] * 5
    assert examples.weights.tolist() == [1.0] * 5
    assert examples.ids == examples.times == [None] * 5


@pytest.mark.parametrize(
    ("text", "label"), [(b"true", 1), (b"false", 0), (b"1", 1), (b"0", 0), (b"-0", 0), (b"null", -1)]
)
def test_labels_are_yes_or_no_or_none(text: bytes, label: int) -> None:
    examples, rejects = decode(b'{"redelivered":%s}' % text, b'{"redelivered":true}')
    assert not rejects
    assert examples.labels.tolist() == [label, 1]


@pytest.mark.parametrize(
    ("path", "text", "value"),
    [
        ("note", b'"\\u0041\\n\\ud83d\\ude00"', "A\n😀"),
        ("route", b"true", True),
        ("route", b"-17", -17),
        ("route", b"123456789012345678901234567890", 123456789012345678901234567890),
        ("route", b'""', ""),
        ("weight_kg", b"3", 3.0),
        ("weight_kg", b"-1.5e3", -1500.0),
        ("weight_kg", b"3.4028234663852886e38", 3.4028234663852886e38),
        ("weight_kg", b"1e-400", 0.0),
        ("tags", b"[]", []),
        ("tags", b'["", "x", -3]', ["", "x", -3]),
    ],
)
def test_values_keep_their_json_type(path: str, text: bytes, value: object) -> None:
    found = value_of(path, b'{"%s":%s}' % (path.encode(), text))
    assert found == value
    assert type(found) is type(value)


def test_keys_may_hold_any_characters() -> None:
    paths = ["a-b", "ключ", "with space", "class", "f0", "$x.ⅷ.0", "'"]
    settings = Settings(fields=tuple(Category(path=path) for path in paths))
    message: dict[str, Any] = {path: path for path in paths if "." not in path}
    message["$x"] = {"ⅷ": {"0": "$x.ⅷ.0"}}
    for text in (json.dumps(message), json.dumps(message, ensure_ascii=False)):
        examples, rejects = decode(text.encode(), settings=settings)
        assert not rejects
        assert examples.columns == {path: [path] for path in paths}


def test_one_path_may_serve_two_kinds_that_share_values() -> None:
    settings = Settings(
        fields=(
            Category(path="hour"),
            Quantity(path="hour", name="hours", bins=(6.0, 18.0)),
            Words(path="id"),
        ),
        message=MessagePaths(id="id"),
    )
    examples, rejects = decode(b'{"hour":13,"id":"a b"}', settings=settings, ids=True)
    assert not rejects
    assert examples.columns == {"hour": [13], "id": ["a b"]}
    assert examples.ids == ["a b"]
    assert reject_of(b'{"hour":13.5}', settings).reason == "wrong_type"
    assert reject_of(b'{"hour":9223372036854775808}', settings).reason == "not_finite"
    assert reject_of(b'{"id":7}', settings, ids=True).detail == "id is a whole number; allowed: text"


@pytest.mark.parametrize(
    "fields",
    [
        (Words(path="a"), Quantity(path="a", name="b")),
        (Words(path="a"), ListOf(path="a", name="b")),
        (Category(path="a"), Category(path="a.b")),
        (Category(path="a.b"), Category(path="a")),
    ],
)
def test_paths_that_no_message_can_satisfy_are_refused(fields: tuple[Any, ...]) -> None:
    with pytest.raises(BadSettings, match="path 'a"):
        Decoder(Settings(fields=fields))


def test_labels_and_weights_are_left_alone_when_only_scores_are_wanted() -> None:
    examples, rejects = decode(b'{"redelivered":"maybe","weight":-1}', labels=False)
    assert not rejects
    assert examples.labels.tolist() == [-1]
    assert examples.weights.tolist() == [1.0]


def test_ids_and_times_are_left_alone_when_nobody_asks() -> None:
    examples, rejects = decode(b'{"id":[],"at":"never"}')
    assert not rejects
    assert examples.ids == examples.times == []


def test_an_empty_block_gives_nothing() -> None:
    examples, rejects = Decoder(COURIER, ids=True).decode(block_of([]))
    assert (len(examples), rejects, examples.ids) == (0, [], [])
    assert examples.labels.dtype == np.int8
    assert set(examples.columns) == {"note", "route", "weight_kg", "tags", "depot.bank.code"}


# what is rejected


@pytest.mark.parametrize(
    ("line", "reason", "said"),
    [
        (b"oops", "bad_json", "not JSON"),
        (b'{"note":"x"', "bad_json", "truncated"),
        (b'{"note":"x"} {}', "bad_json", "trailing"),
        (b"{}{}", "bad_json", "trailing"),
        (b'{"note":', "bad_json", "not JSON"),
        (b'{"note":"a\tb"}', "bad_json", "not JSON"),
        (b'{"x":01}', "bad_json", "not JSON"),
        (b"{'note':1}", "bad_json", "not JSON"),
        (b'{"x":%s}' % (b"[" * 200 + b"]" * 200), "bad_json", "nested more than 100 deep"),
        (b"[]", "not_an_object", "a list"),
        (b'"text"', "not_an_object", "text"),
        (b"null", "not_an_object", "null"),
        (b"12", "not_an_object", "a whole number"),
        (b'{"x":"\xff"}', "bad_utf8", "not UTF-8"),
        (b'{"note":"\xed\xa0\x80"}', "bad_utf8", "not UTF-8"),
        (b'{"note":"\\ud800"}', "bad_utf8", "surrogate"),
        (b'{"x":NaN}', "not_finite", "NaN is no JSON number"),
        (b'{"weight_kg":-Infinity}', "not_finite", "-Infinity is no JSON number"),
        (b'{"weight_kg":1e999}', "not_finite", "weight_kg is a number too large"),
        (b'{"weight_kg":3.5e38}', "not_finite", "at most 3.4028235e+38"),
        (b'{"weight_kg":-%s}' % (b"9" * 1900), "not_finite", "weight_kg is a number too large"),
        (b'{"note":5}', "wrong_type", "note is a whole number; allowed: text"),
        (b'{"route":1.0}', "wrong_type", "route is a number with a decimal point"),
        (b'{"route":{}}', "wrong_type", "route is an object"),
        (b'{"weight_kg":"5"}', "wrong_type", "weight_kg is text; allowed: a number"),
        (b'{"weight_kg":true}', "wrong_type", "weight_kg is true or false"),
        (b'{"tags":"a"}', "wrong_type", "tags is text; allowed: a list of texts and whole numbers"),
        (b'{"tags":["a",1.5]}', "wrong_type", "tags has a number with a decimal point or exponent as item 2"),
        (b'{"tags":[null]}', "wrong_type", "tags has null as item 1"),
        (b'{"tags":[true]}', "wrong_type", "tags has true or false as item 1"),
        (b'{"depot":"d"}', "wrong_type", "depot is text; allowed: an object"),
        (b'{"depot":{"bank":[]}}', "wrong_type", "depot.bank is a list; allowed: an object"),
        (b'{"note":1,"note":"x"}', "wrong_type", "stands twice"),
        (b'{"redelivered":"yes"}', "bad_label", "redelivered is text; allowed: true, false, 1 or 0"),
        (b'{"redelivered":2}', "bad_label", "out of range"),
        (b'{"redelivered":-1}', "bad_label", "out of range"),
        (b'{"redelivered":1.0}', "bad_label", "decimal point"),
        (b'{"weight":-0.5}', "bad_weight", "a number from 0 to 1,000,000"),
        (b'{"weight":1000001}', "bad_weight", "out of range"),
        (b'{"weight":"1"}', "bad_weight", "weight is text"),
        (b'{"note":"%s"}' % (b"x" * 2000), "line_too_long", "feed.max_line_bytes (2,000 bytes)"),
    ],
)
def test_a_bad_line_is_rejected_with_its_reason_and_the_others_are_kept(
    line: bytes, reason: str, said: str
) -> None:
    reject = reject_of(line)
    assert reject.reason == reason
    assert said in reject.detail


def test_a_whole_number_with_too_many_digits_is_rejected() -> None:
    settings = Settings(fields=(Category(path="a"), ListOf(path="b")))
    for line in (b'{"a":-%s}' % (b"9" * 4301), b'{"b":["x",%s]}' % (b"9" * 5000)):
        assert "more than 4,300 digits" in reject_of(line, settings).detail
    assert decode(b'{"a":%s}' % (b"9" * 4300), settings=settings)[1] == []


def test_nesting_is_counted_outside_texts_and_up_to_its_limit() -> None:
    brackets = b'{"note":"%s","x":%s}' % (b"[{" * 150, b"[" * 99 + b"]" * 99)
    shallow = b'{"x":[%s]}' % b",".join([b'{"y":[]}'] * 100)
    examples, rejects = decode(brackets, shallow)
    assert (len(examples), rejects) == (2, [])
    assert "nested" in reject_of(b'{"x":%s}' % (b"[" * 100 + b"]" * 100)).detail


def test_what_a_message_says_never_stands_in_a_reject() -> None:
    for line in (
        b'{"note":{"secret":"secret"}}',
        b'{"redelivered":"secret"}',
        b'{"tags":["secret",["secret"]]}',
        b'{"at":"secret"}',
        b'secret{"note":"secret"',
        b'{"note":"secret\xff"}',
    ):
        assert "secret" not in reject_of(line, ids=True, times=True).detail


def test_lines_that_only_add_up_to_as_many_objects_are_not_mistaken() -> None:
    examples, rejects = decode(b'{"route":1}{"route":2}', b'{"tags":["x"', b'], "note":"{}"}', b'{"route":3}')
    assert [reject.reason for reject in rejects] == ["bad_json"] * 3
    assert examples.rows.tolist() == [3]
    assert examples.columns["route"] == [3]


@pytest.mark.parametrize(
    ("first", "second"), [(b'{"x":[{}', b']}{"route":1}'), (b'{"x":[', b'{}]}{"route":1}')]
)
def test_an_object_over_two_lines_beside_two_in_one_is_not_mistaken(first: bytes, second: bytes) -> None:
    examples, rejects = decode(first, second)
    assert len(examples) == 0
    assert [reject.reason for reject in rejects] == ["bad_json"] * 2


def test_blanks_around_an_object_are_allowed() -> None:
    examples, rejects = decode(b' {"route":"a"}\t', b"{}")
    assert not rejects
    assert examples.columns["route"] == ["a", None]


# times


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        # Examples of RFC 3339 section 5.8, https://www.rfc-editor.org/rfc/rfc3339
        ("1985-04-12T23:20:50.52Z", 482_196_050_520),
        ("1996-12-19T16:39:57-08:00", 851_042_397_000),
        ("1990-12-31T23:59:60Z", 662_688_000_000),
        ("1990-12-31T15:59:60-08:00", 662_688_000_000),
        ("1937-01-01T12:00:27.87+00:20", -1_041_337_172_130),
        ("2024-02-29t00:00:00.123987654z", 1_709_164_800_123),
        ("2024-02-29 00:00:00+00:00", 1_709_164_800_000),
        (1_709_164_800.0, 1_709_164_800_000),
        (1_709_164_800.125, 1_709_164_800_125),
        (1_709_164_800_123.0, 1_709_164_800_123),
        (-1.0, -1000),
        (None, None),
    ],
)
def test_times_are_epoch_milliseconds(value: str | float | None, expected: int | None) -> None:
    assert epoch_ms(value) == expected


@pytest.mark.parametrize(
    "text",
    [
        "",
        "2024-02-30T00:00:00Z",
        "2024-02-29",
        "2024-02-29T00:00:00",
        "2024-02-29T24:00:00Z",
        "2024-02-29T00:60:00Z",
        "2024-02-29T00:00:61Z",
        "2024-02-29T00:00:00+24:00",
        "2024-02-29T00:00:00Z ",
        "٢٠٢٤-02-29T00:00:00Z",
        "0000-01-01T00:00:00Z",
        "1709164800",
    ],
)
def test_a_text_that_is_no_time_is_rejected_where_times_are_asked_for(text: str) -> None:
    line = json.dumps({"at": text}).encode()
    reject = reject_of(line, times=True)
    assert reject.reason == "bad_time"
    assert "RFC 3339 text" in reject.detail


@pytest.mark.parametrize("text", [b"true", b"[]", b"1e16", b"-1e16"])
def test_a_value_that_is_no_time_is_rejected_where_times_are_asked_for(text: bytes) -> None:
    assert reject_of(b'{"at":%s}' % text, times=True).reason == "bad_time"


# documentation


def test_the_documentation_names_every_reason_with_a_line_that_is_rejected_for_it() -> None:
    page = (Path(__file__).parent.parent / "docs/message-format.md").read_text()
    rows = dict(re.findall(r"^\| `(\w+)` \| (.*) \|$", page.split("\n## Rejects")[1], re.MULTILINE))
    assert set(rows) == {*REASONS, "too_many_tokens"}
    for reason, cell in rows.items():
        for line in re.findall(r"`([{\[].*?)`(?=,| |$)", cell):
            assert reject_of(line.encode(), times=True).reason == reason


def test_the_example_of_the_documentation_is_a_good_message() -> None:
    page = (Path(__file__).parent.parent / "docs/message-format.md").read_text()
    example = page.split("```json\n")[1].split("\n```")[0]
    assert decode(example.encode(), ids=True, times=True)[1] == []
