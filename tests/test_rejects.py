"""Rejects in; the file to repair them from, counts, and the stop past the allowed share out of RejectLog."""

from __future__ import annotations

import base64
import errno
import json
import os
import stat
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stream.errors import BadData, CannotCreate, FileTrouble
from stream.message import Block, Reject
from stream.rejects import RejectLog
from stream.settings.models import MessagePaths

PATIENT = MessagePaths(max_reject_share=1.0)


def block_of(lines: list[bytes], first: int = 0) -> Block:
    """The lines in a block whose messages begin at offset `first` and go on."""
    lengths = np.array([len(line) for line in lines], np.int64)
    ends = np.cumsum(lengths + 1) - 1
    starts = ends - lengths
    return Block("day1.jsonl", 0, b"".join(line + b"\n" for line in lines), starts, ends, starts + first)


def records(folder: Path) -> list[dict[str, Any]]:
    return [json.loads(line) for line in (folder / "rejects.jsonl").read_bytes().splitlines()]


def test_a_rejected_line_is_kept_so_that_it_can_be_repaired(tmp_path: Path) -> None:
    log = RejectLog(tmp_path / "rejects", PATIENT)
    block = block_of([b"{}", '{"note":é'.encode(), b"\xff", b"x" * 70_000], first=100)
    rejects = [
        Reject(3, "line_too_long", "the line is over the limit"),
        Reject(1, "bad_json", "not JSON: byte 9"),
        Reject(2, "bad_utf8", "the line is not UTF-8"),
    ]
    log.add(block, rejects, 0)
    log.sync()
    assert records(tmp_path / "rejects") == [
        {
            "number": 1,
            "file": "day1.jsonl",
            "partition": 0,
            "offset": 103,
            "reason": "bad_json",
            "detail": "not JSON: byte 9",
            "line": '{"note":é',
        },
        {
            "number": 2,
            "file": "day1.jsonl",
            "partition": 0,
            "offset": 114,
            "reason": "bad_utf8",
            "detail": "the line is not UTF-8",
            "line_base64": base64.b64encode(b"\xff").decode(),
        },
        {
            "number": 3,
            "file": "day1.jsonl",
            "partition": 0,
            "offset": 116,
            "reason": "line_too_long",
            "detail": "the line is over the limit",
            "line": "x" * 65_536,
            "cut": True,
        },
    ]
    assert log.count == 3
    assert log.by_reason == {"bad_json": 1, "bad_utf8": 1, "line_too_long": 1}
    log.close()


def test_only_the_owner_may_read_rejects_and_none_means_no_file(tmp_path: Path) -> None:
    log = RejectLog(tmp_path / "state" / "rejects", PATIENT)
    log.add(block_of([b"{}"]), [], 0)
    log.sync()
    assert not (tmp_path / "state").exists()
    log.add(block_of([b"x"]), [Reject(0, "bad_json", "")], 1)
    log.sync()
    log.close()
    assert stat.S_IMODE((tmp_path / "state/rejects").stat().st_mode) == 0o700
    assert stat.S_IMODE((tmp_path / "state/rejects/rejects.jsonl").stat().st_mode) == 0o600


def add_numbered(log: RejectLog, begin: int, end: int) -> None:
    for n in range(begin, end):
        log.add(
            block_of([b"%d" % n], first=n * 10), [Reject(0, "bad_json" if n % 3 else "wrong_type", "")], n
        )


@pytest.mark.parametrize("at_checkpoint", [0, 1, 7, 20])
@pytest.mark.parametrize("torn", [b"", b'{"number":21,"fi', b"\0\0\0\0\n"])
def test_a_resumed_run_leaves_the_file_that_an_uninterrupted_one_leaves(
    tmp_path: Path, at_checkpoint: int, torn: bytes
) -> None:
    whole = RejectLog(tmp_path / "whole", PATIENT)
    add_numbered(whole, 0, 30)
    whole.close()
    killed = RejectLog(tmp_path / "killed", PATIENT)
    add_numbered(killed, 0, at_checkpoint)
    killed.sync()
    state = json.loads(json.dumps(killed.state()))
    add_numbered(killed, at_checkpoint, 20)
    killed.close()
    with (tmp_path / "killed/rejects.jsonl").open("ab") as file:
        file.write(torn)
    resumed = RejectLog(tmp_path / "killed", PATIENT, state)
    assert resumed.count == at_checkpoint
    add_numbered(resumed, at_checkpoint, 30)
    resumed.sync()
    assert resumed.state() == whole.state()
    assert list(resumed.state()["by_reason"]) == ["bad_json", "wrong_type"]
    resumed.close()
    assert (tmp_path / "killed/rejects.jsonl").read_bytes() == (tmp_path / "whole/rejects.jsonl").read_bytes()


def test_a_file_that_the_user_took_away_is_begun_anew_with_the_count_going_on(tmp_path: Path) -> None:
    log = RejectLog(tmp_path, PATIENT)
    add_numbered(log, 0, 5)
    log.close()
    (tmp_path / "rejects.jsonl").unlink()
    resumed = RejectLog(tmp_path, PATIENT, log.state())
    add_numbered(resumed, 5, 8)
    resumed.close()
    assert [record["number"] for record in records(tmp_path)] == [6, 7, 8]
    again = RejectLog(tmp_path, PATIENT, {"by_reason": {"bad_json": 6}, "in_window": 0})
    again.close()
    assert [record["number"] for record in records(tmp_path)] == [6]


def stopped_at(rejected: list[int], cuts: list[int], limits: MessagePaths, folder: Path) -> str | None:
    """What the run says as it stops, for rejected message numbers (from 1) and block lengths."""
    log = RejectLog(folder, limits)
    before = 0
    try:
        for length in cuts:
            rows = [number - before - 1 for number in rejected if before < number <= before + length]
            block = block_of([b"1234"] * length, first=before * 5)
            log.add(block, [Reject(row, "bad_json", "") for row in rows], before)
            before += length
    except BadData as error:
        return str(error)
    finally:
        log.close()
    return None


def test_a_run_stops_when_too_large_a_share_is_rejected_and_says_where_to_look(tmp_path: Path) -> None:
    limits = MessagePaths(max_reject_share=0.01, rejects_allowed_before=1000)
    early = list(range(1, 11))
    assert stopped_at(early, [1200], limits, tmp_path / "a") is None
    said = stopped_at([*early, 1050], [1200], limits, tmp_path / "b")
    assert said is not None
    for part in (
        "11 of 1,050 messages were rejected (1.05%)",
        "max_reject_share = 0.01",
        "day1.jsonl, partition 0, offset 5,245",
        "bad_json (11)",
        str(tmp_path / "b" / "rejects.jsonl"),
    ):
        assert part in said
    assert len(records(tmp_path / "b")) == 11


def test_the_first_look_is_at_the_message_named_even_when_that_one_is_fine(tmp_path: Path) -> None:
    limits = MessagePaths(max_reject_share=0.01, rejects_allowed_before=1000)
    assert stopped_at(list(range(1, 12)), [999], limits, tmp_path / "a") is None
    said = stopped_at(list(range(1, 12)), [999, 1], limits, tmp_path / "b")
    assert said is not None
    assert said.startswith("11 of 1,000 messages")


def test_at_no_allowance_the_first_reject_stops_the_run(tmp_path: Path) -> None:
    limits = MessagePaths(max_reject_share=0.0, rejects_allowed_before=0)
    said = stopped_at([3], [5], limits, tmp_path)
    assert said is not None
    assert said.startswith("1 of 3 messages")


@settings(max_examples=150, deadline=None)
@given(
    rejected=st.sets(st.integers(1, 60)),
    cuts=st.lists(st.integers(1, 20), min_size=1, max_size=8),
    share=st.sampled_from([0.0, 0.05, 0.2, 0.5]),
    allowed=st.integers(0, 50),
)
def test_where_a_run_stops_does_not_depend_on_its_blocks(
    tmp_path_factory: pytest.TempPathFactory,
    rejected: set[int],
    cuts: list[int],
    share: float,
    allowed: int,
) -> None:
    limits = MessagePaths(max_reject_share=share, rejects_allowed_before=allowed)
    folder = tmp_path_factory.mktemp("rejects")
    total = sum(cuts)
    expected = None
    for messages in range(max(allowed, 1), total + 1):
        count = sum(number <= messages for number in rejected)
        if count > share * messages:
            expected = f"{count} of {messages} messages"
            break
    for several in (cuts, [total], [1] * total):
        said = stopped_at(sorted(rejected), several, limits, folder)
        assert (said and said.split(" were")[0]) == expected


@pytest.mark.parametrize(("code", "error"), [(errno.ENOSPC, CannotCreate), (errno.EIO, FileTrouble)])
@pytest.mark.parametrize("call", ["write", "fsync"])
def test_a_failed_write_stops_the_run_and_is_never_taken_for_done_later(
    tmp_path: Path, call: str, code: int, error: type[Exception], monkeypatch: pytest.MonkeyPatch
) -> None:
    log = RejectLog(tmp_path, PATIENT)
    add_numbered(log, 0, 1)
    log.sync()
    add_numbered(log, 1, 2)

    def broken(*_: object) -> int:
        raise OSError(code, os.strerror(code))

    with monkeypatch.context() as patch:
        patch.setattr(os, call, broken)
        with pytest.raises(error, match=r"rejects\.jsonl"):
            log.sync()
    with pytest.raises(error):
        log.sync()
    log.close()
    again = RejectLog(tmp_path, PATIENT, {"by_reason": {"wrong_type": 1}, "in_window": 0})
    again.close()
    assert [record["number"] for record in records(tmp_path)] == [1]


# windows, and what is done with rejects


def windowed(rejected: list[int], cuts: list[int], folder: Path, window: int = 100) -> str | None:
    """What the run says as it stops, at 10 % a window of 100 messages after 10,000 good ones."""
    limits = MessagePaths(max_reject_share=0.1, rejects_allowed_before=0)
    log = RejectLog(folder, limits, window=window)
    before = 0
    try:
        log.add(block_of([b"12"] * 10_000), [], 0)
        for length in cuts:
            rows = [number - before - 1 for number in rejected if before < number <= before + length]
            block = block_of([b"12"] * length, first=before * 3)
            log.add(block, [Reject(row, "bad_json", "") for row in rows], 10_000 + before)
            log = RejectLog(folder, limits, log.state(), window=window)  # as a resumed run does
            before += length
    except BadData as error:
        return str(error)
    finally:
        log.close()
    return None


def test_a_feed_that_goes_bad_after_many_good_messages_stops_the_run_within_a_window(tmp_path: Path) -> None:
    assert windowed(list(range(1, 11)), [300], tmp_path) is None
    said = windowed(list(range(1, 12)), [300], tmp_path)
    assert said is not None
    assert said.startswith("11 of the 11 messages after message 10,000 were rejected, too many for a window")
    assert windowed([*range(91, 101), *range(101, 111)], [300], tmp_path) is None


def test_short_windows_are_as_long_as_the_messages_that_are_always_allowed(tmp_path: Path) -> None:
    limits = MessagePaths(max_reject_share=0.1, rejects_allowed_before=1000)
    log = RejectLog(tmp_path, limits, window=10)
    rejects = [Reject(row, "bad_json", "") for row in range(101)]
    with pytest.raises(BadData, match="too many for a window of 1,000"):
        log.add(block_of([b"12"] * 101), rejects, 5_000)
    assert log.count == 101
    log.close()


@settings(max_examples=60, deadline=None)
@given(rejected=st.sets(st.integers(1, 300), max_size=40), cuts=st.lists(st.integers(1, 90), min_size=1))
def test_where_a_window_stops_a_run_does_not_depend_on_its_blocks_and_restarts(
    tmp_path_factory: pytest.TempPathFactory, rejected: set[int], cuts: list[int]
) -> None:
    folder = tmp_path_factory.mktemp("rejects")
    total = sum(cuts)
    expected = None
    for number in sorted(rejected):
        since = (number - 1) // 100 * 100
        if number <= total and sum(since < other <= number for other in rejected) > 10:
            expected = f"11 of the {number - since} messages after message {10_000 + since:,}"
            break
    for several in (cuts, [total]):
        said = windowed(sorted(rejected), several, folder)
        assert (said and said.split(" were")[0]) == expected


def test_skipped_rejects_are_counted_and_judged_but_kept_nowhere(tmp_path: Path) -> None:
    limits = MessagePaths(max_reject_share=0.5, rejects_allowed_before=0)
    log = RejectLog(tmp_path, limits, action="skip")
    log.add(block_of([b"ok", b"x"]), [Reject(1, "bad_json", "")], 0)
    log.sync()
    with pytest.raises(BadData, match=r"2 of 3 messages.*most often bad_json \(2\)\. repair"):
        log.add(block_of([b"x"]), [Reject(0, "bad_json", "")], 2)
    log.close()
    assert list(tmp_path.iterdir()) == []


def test_halting_stops_at_the_first_reject_and_names_it(tmp_path: Path) -> None:
    log = RejectLog(tmp_path, PATIENT, action="halt")
    log.add(block_of([b"ok"]), [], 0)
    with pytest.raises(BadData, match=r"day1\.jsonl, partition 0, offset 3: rejected as bad_json \(byte 9\)"):
        log.add(block_of([b"ok", b"x"]), [Reject(1, "bad_json", "byte 9")], 1)
    log.close()
    assert list(tmp_path.iterdir()) == []
