"""Logs of JSON Lines on disk in; blocks of messages, positions and errors of `LogSource` out."""

from __future__ import annotations

import gzip
import io
import json
import os
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
import zstandard
from hypothesis import given, settings
from hypothesis import strategies as st

from stream.errors import BadData, BadSettings, InputMissing, NoPermission
from stream.message import Source
from stream.sources import LogSource, lines, read_head

LIMIT = 1 << 20


def everything(source: LogSource, limit: int = 1000) -> list[tuple[str, int, bytes]]:
    """(file, offset, value) of all messages that are left."""
    messages = []
    while len(block := source.read(limit)):
        assert len(block) <= limit
        messages += [(block.topic, int(block.offsets[row]), block.value(row)) for row in range(len(block))]
    return messages


def values(source: LogSource, limit: int = 1000) -> list[bytes]:
    return [value for _, _, value in everything(source, limit)]


OPENED: list[LogSource] = []


@pytest.fixture(autouse=True)
def _close_all() -> Iterator[None]:
    yield
    while OPENED:
        OPENED.pop().close()


def log(folder: Path, *patterns: str, limit: int = LIMIT) -> LogSource:
    OPENED.append(LogSource(patterns or ("*",), folder, limit))
    return OPENED[-1]


def zstd(data: bytes) -> bytes:
    return zstandard.ZstdCompressor(write_checksum=True).compress(data)


# files and patterns


def test_files_are_read_in_the_order_of_their_names_whatever_the_patterns_say(tmp_path: Path) -> None:
    (tmp_path / "b.jsonl").write_bytes(b"3\n")
    (tmp_path / "sub").mkdir()
    (tmp_path / "sub/c.jsonl").write_bytes(b"4\n")
    (tmp_path / "a.jsonl").write_bytes(b"1\n2\n")
    source: Source = log(tmp_path, "sub/*.jsonl", "*.jsonl", "a.*")
    assert isinstance(source, LogSource)
    assert everything(source) == [
        ("a.jsonl", 0, b"1"),
        ("a.jsonl", 2, b"2"),
        ("b.jsonl", 0, b"3"),
        ("sub/c.jsonl", 0, b"4"),
    ]


def test_a_pattern_that_matches_nothing_is_named_with_its_folder(tmp_path: Path) -> None:
    (tmp_path / "a.jsonl").write_bytes(b"1\n")
    with pytest.raises(InputMissing) as caught:
        log(tmp_path, "a.jsonl", "none/*.jsonl")
    assert "'none/*.jsonl'" in str(caught.value)
    assert str(tmp_path) in str(caught.value)
    assert caught.value.exit_code == 66


def test_a_file_whose_name_looks_like_a_pattern_is_found_by_its_name(tmp_path: Path) -> None:
    (tmp_path / "a[1].jsonl").write_bytes(b"1\n")
    assert values(log(tmp_path, "a[1].jsonl")) == [b"1"]


def test_absolute_patterns_below_the_folder_give_the_same_names(tmp_path: Path) -> None:
    (tmp_path / "a.jsonl").write_bytes(b"1\n")
    assert everything(log(tmp_path, str(tmp_path / "*.jsonl"))) == [("a.jsonl", 0, b"1")]


def test_a_log_beside_the_folder_keeps_a_relative_name(tmp_path: Path) -> None:
    (tmp_path / "here").mkdir()
    (tmp_path / "a.jsonl").write_bytes(b"1\n")
    assert everything(log(tmp_path / "here", "../a.jsonl")) == [("../a.jsonl", 0, b"1")]


def test_no_pattern_at_all_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadSettings, match=r"feed\.paths is empty"):
        LogSource((), tmp_path, LIMIT)


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_a_file_that_may_not_be_read_is_named(tmp_path: Path) -> None:
    (tmp_path / "a.jsonl").touch(0o000)
    with pytest.raises(NoPermission, match=r"a\.jsonl"):
        log(tmp_path).read(1)


# lines


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        (b"", []),
        (b"\n\n\n", []),
        (b"one", [(0, b"one")]),
        (b"one\ntwo", [(0, b"one"), (4, b"two")]),
        (b"one\r\ntwo\r\n", [(0, b"one"), (5, b"two")]),
        (b"one\n\n \t\r\n\r\ntwo\n", [(0, b"one"), (11, b"two")]),
        (b"\n\none\n", [(2, b"one")]),
        (b"  {}  \n", [(0, b"  {}  ")]),
        (b"\xef\xbb\xbfone\ntwo\n", [(3, b"one"), (7, b"two")]),
        (b"one\n\xef\xbb\xbftwo\n", [(0, b"one"), (4, b"\xef\xbb\xbftwo")]),
        (b"one\rtwo\n", [(0, b"one\rtwo")]),
        (b"one\n   ", [(0, b"one")]),
    ],
)
def test_lines_are_messages_and_blank_ones_are_none(
    tmp_path: Path, content: bytes, expected: list[tuple[int, bytes]]
) -> None:
    (tmp_path / "a").write_bytes(content)
    for limit in (1, 2, 1000):
        assert [found[1:] for found in everything(log(tmp_path), limit)] == expected


def test_a_block_is_json_lines_from_its_first_start_to_its_last_end(tmp_path: Path) -> None:
    (tmp_path / "a").write_bytes(b"\n{}\r\n\n[1]\n")
    block = log(tmp_path).read(10)
    assert block.buffer[block.starts[0] : block.ends[-1]] == b"{}\r\n\n[1]"


@settings(max_examples=150, deadline=None)
@given(
    content=st.lists(st.sampled_from([b"\n", b"\r\n", b"ab", b"0123456789", b" ", b"\xef\xbb\xbf"])),
    chunk=st.integers(1, 64),
    limit=st.integers(1, 8),
    longest=st.integers(1, 30),
)
def test_chunks_never_show_in_the_lines(
    tmp_path_factory: pytest.TempPathFactory, content: list[bytes], chunk: int, limit: int, longest: int
) -> None:
    folder = tmp_path_factory.mktemp("log")
    data = b"".join(content)
    (folder / "a").write_bytes(data)
    expected = []
    start = 3 if data.startswith(b"\xef\xbb\xbf") else 0
    for line in data[start:].split(b"\n"):
        value = line.removesuffix(b"\r")
        if value.strip(b" \t\r") or len(value) > longest:
            expected.append(("a", start, value[: longest + 1]))
        start += len(line) + 1
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(lines, "CHUNK_BYTES", chunk)
        patch.setattr(lines, "HEAD_BYTES", 8)
        assert everything(log(folder, limit=longest), limit) == expected


@pytest.mark.parametrize("name", ["a.jsonl", "a.jsonl.gz", "a.jsonl.zst"])
def test_a_huge_line_is_cut_and_never_held(
    tmp_path: Path, name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(lines, "CHUNK_BYTES", 4096)
    huge = os.urandom(1_500_000).hex().encode()
    data = b"1\n" + huge + b"\n2\n" + b"y" * 101 + b"\n" + b"z" * 100 + b"\n3"
    pack = {".gz": gzip.compress, ".zst": zstd}.get(Path(name).suffix, bytes)
    (tmp_path / name).write_bytes(pack(data))
    source = log(tmp_path, limit=100)
    held = 0
    found = []
    while len(block := source.read(10)):
        held = max(held, len(block.buffer))
        found += [(int(block.offsets[row]), block.value(row)) for row in range(len(block))]
    assert found == [
        (0, b"1"),
        (2, huge[:101]),
        (3_000_003, b"2"),
        (3_000_005, b"y" * 101),
        (3_000_107, b"z" * 100),
        (3_000_208, b"3"),
    ]
    assert held < 300_000


# compressed files


def test_gzip_members_and_zstd_frames_follow_one_another(tmp_path: Path) -> None:
    (tmp_path / "a.gz").write_bytes(
        gzip.compress(b"1\n2") + gzip.compress(b"") + gzip.compress(b"3\n") + bytes(512)
    )
    skippable = b"\x50\x2a\x4d\x18\x04\x00\x00\x00abcd"
    (tmp_path / "b.zst").write_bytes(zstd(b"4\n") + skippable + zstd(b"5\n6\n"))
    (tmp_path / "c.gz").write_bytes(b"")
    assert values(log(tmp_path)) == [b"1", b"23", b"4", b"5", b"6"]


@pytest.mark.parametrize("pack", [gzip.compress, zstd])
@pytest.mark.parametrize("damage", ["cut", "flipped", "zero tail", "rubbish behind"])
def test_damage_is_reported_with_file_and_place_after_what_was_whole(
    tmp_path: Path, pack: object, damage: str
) -> None:
    assert callable(pack)
    written = [b'{"n":%d,"x":"%s"}' % (n, os.urandom(20).hex().encode()) for n in range(20_000)]
    data = bytearray(pack(b"\n".join(written) + b"\n"))
    if damage == "cut":
        del data[-1000:]
    elif damage == "flipped":
        data[len(data) - 5000] ^= 0x40
    elif damage == "zero tail":
        data[-3000:] = bytes(3000)
    else:
        data += b"rubbish"
    name = "a.gz" if pack is gzip.compress else "a.zst"
    (tmp_path / name).write_bytes(data)
    source = log(tmp_path)
    found: list[bytes] = []
    with pytest.raises(BadData, match=rf"{name}: .* byte [\d,]+") as caught:
        while len(block := source.read(1000)):
            found += [block.value(row) for row in range(len(block))]
    assert found[:15_000] == written[:15_000]
    if damage == "cut":  # other damage is told after some of it was read: sums stand at the end
        assert found == written[: len(found)]
    assert caught.value.exit_code == 65
    with pytest.raises(BadData):
        source.read(1)


def test_a_file_made_to_swell_stays_bounded(tmp_path: Path) -> None:
    (tmp_path / "a.zst").write_bytes(zstandard.ZstdCompressor(level=19).compress(bytes(200 << 20)))
    (tmp_path / "b.zst").write_bytes(zstd(b"\n1\n"))
    source = log(tmp_path, limit=100)
    assert [len(value) for value in values(source)] == [101, 1]


# standard input


def feed_standard_input(monkeypatch: pytest.MonkeyPatch, data: bytes) -> None:
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BufferedReader(io.BytesIO(data))))


def test_standard_input_is_read_and_cannot_be_resumed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    feed_standard_input(monkeypatch, b"1\n2\n3")
    source = log(tmp_path, "-")
    assert source.fraction_read() is None
    source.read(1)
    position = source.position()
    assert everything(source) == [("-", 2, b"2"), ("-", 4, b"3")]
    source.close()
    assert not sys.stdin.buffer.closed
    with pytest.raises(BadSettings, match="standard input cannot be resumed"):
        log(tmp_path, "-").seek(position)


def test_standard_input_beside_files_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadSettings, match="mixes"):
        log(tmp_path, "-", "*.jsonl")


def test_a_named_pipe_is_read(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    writer = threading.Thread(target=(tmp_path / "pipe").write_bytes, args=(b"1\n2\n",))
    writer.start()
    assert values(log(tmp_path)) == [b"1", b"2"]
    writer.join()


def test_a_link_to_nothing_is_named(tmp_path: Path) -> None:
    (tmp_path / "a").symlink_to("gone")
    with pytest.raises(InputMissing, match="a: cannot be read"):
        log(tmp_path)


def test_the_head_of_a_compressed_log_is_read_for_a_sample(tmp_path: Path) -> None:
    (tmp_path / "a.gz").write_bytes(gzip.compress(b"1\n\n2\n3\n"))
    assert read_head(str(tmp_path / "a.gz"), 2) == [b"1", b"2"]
    assert read_head(str(tmp_path / "a.gz"), 9) == [b"1", b"2", b"3"]
    with pytest.raises(InputMissing, match="none"):
        read_head(str(tmp_path / "none"), 1)


# positions


def make_log(folder: Path) -> None:
    (folder / "a.jsonl").write_bytes(b"".join(b'{"n":%d}\n' % n for n in range(1500)))
    (folder / "b.jsonl.gz").write_bytes(gzip.compress(b"\r\n".join(b"[%d]" % n for n in range(2000))))
    (folder / "c.jsonl").write_bytes(b"\n")
    (folder / "d.jsonl.zst").write_bytes(
        zstd(b"\xef\xbb\xbf" + b"\n\n".join(b"%d" % n for n in range(900)) + b"\n\n")
    )


@pytest.mark.parametrize("read", [0, 1, 700, 1500, 1501, 3499, 3500, 3501, 4399, 4400])
def test_reading_goes_on_from_any_message(tmp_path: Path, read: int) -> None:
    make_log(tmp_path)
    whole = everything(log(tmp_path))
    assert len(whole) == 4400
    source = log(tmp_path)
    found: list[tuple[str, int, bytes]] = []
    while len(found) < read:
        block = source.read(read - len(found))
        found += [(block.topic, int(block.offsets[row]), block.value(row)) for row in range(len(block))]
    position = json.loads(json.dumps(source.position()))
    resumed = log(tmp_path)
    resumed.seek(position)
    assert resumed.position() == position
    assert everything(resumed, 77) == whole[read:]


@settings(max_examples=20, deadline=None)
@given(cuts=st.lists(st.integers(1, 900), min_size=1, max_size=30))
def test_a_position_depends_on_the_messages_read_alone(
    tmp_path_factory: pytest.TempPathFactory, cuts: list[int]
) -> None:
    folder = tmp_path_factory.mktemp("log")
    make_log(folder)
    by_one, in_blocks = log(folder), log(folder)
    read = 0
    for cut in cuts:
        read_now = len(in_blocks.read(cut))
        read += read_now
        for _ in range(read_now):
            assert len(by_one.read(1)) == 1
        assert by_one.position() == in_blocks.position()
    everything(in_blocks)
    everything(by_one, 1)
    in_blocks.read(1)  # past the end
    assert by_one.position() == in_blocks.position()


def test_the_same_log_in_another_place_gives_the_same_position(tmp_path: Path) -> None:
    positions = []
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        make_log(tmp_path / name)
        source = log(tmp_path / name, str(tmp_path / name / "*"))
        everything(source)
        positions.append(source.position())
    assert positions[0] == positions[1]


def test_a_finished_log_that_grows_gives_just_what_is_new(tmp_path: Path) -> None:
    (tmp_path / "a").write_bytes(b"1\n2\n")
    source = log(tmp_path)
    everything(source)
    position = source.position()
    with (tmp_path / "a").open("ab") as file:
        file.write(b"3\n" * 3000)
    (tmp_path / "b").write_bytes(b"4\n")
    resumed = log(tmp_path)
    resumed.seek(position)
    assert values(resumed) == [b"3"] * 3000 + [b"4"]


def finished(folder: Path) -> dict[str, object]:
    """Position in the second of two files."""
    (folder / "a").write_bytes(b"1\n2\n")
    (folder / "b").write_bytes(b"3\n4\n")
    source = log(folder)
    for _ in range(3):
        source.read(1)
    return source.position()


def test_nothing_of_a_log_that_is_as_it_was_is_refused(tmp_path: Path) -> None:
    position = finished(tmp_path)
    resumed = log(tmp_path)
    resumed.seek(position)
    assert values(resumed) == [b"4"]


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ("rm a", "a was read before the position"),
        ("rm b", "b was read before the position"),
        ("add aa", "aa is new and sorts before b"),
        ("edit a", "a is not the file that was read"),
        ("edit b", "b is not the file that was read"),
        ("grow a", "a had 4 bytes when it was read to its end and has 6 now"),
        ("cut b", "b is not the file that was read"),
    ],
)
def test_a_log_that_changed_before_the_position_is_refused_by_name(
    tmp_path: Path, change: str, said: str
) -> None:
    position = finished(tmp_path)
    verb, name = change.split()
    file = tmp_path / name
    if verb == "rm":
        file.unlink()
        (tmp_path / "z").write_bytes(b"9\n")
    elif verb == "add":
        file.write_bytes(b"9\n")
    elif verb == "edit":
        file.write_bytes(b"9" + file.read_bytes()[1:])
    elif verb == "grow":
        file.write_bytes(file.read_bytes() + b"9\n")
    else:
        file.write_bytes(file.read_bytes()[:1])
    with pytest.raises(BadSettings) as caught:
        log(tmp_path).seek(position)
    assert said in str(caught.value)
    assert "start again" in str(caught.value)
    assert caught.value.exit_code == 78


@pytest.mark.parametrize("name", ["a", "a.gz"])
def test_a_file_cut_short_behind_its_beginning_is_refused(tmp_path: Path, name: str) -> None:
    data = b"".join(b"%06d\n" % n for n in range(2000))
    pack = gzip.compress if name == "a.gz" else bytes
    (tmp_path / name).write_bytes(pack(data))
    source = log(tmp_path)
    everything(source)
    (tmp_path / name).write_bytes(pack(data[:7000]))
    with pytest.raises(BadSettings, match="is shorter than the 14,000 bytes"):
        log(tmp_path).seek(source.position())


def test_the_share_read_rises_from_nothing_to_all(tmp_path: Path) -> None:
    make_log(tmp_path)
    source = log(tmp_path)
    shares = [source.fraction_read()]
    while len(source.read(300)):
        shares.append(source.fraction_read())
    shares.append(source.fraction_read())
    assert shares[0] == 0.0
    assert shares[-1] == 1.0
    numbers = [share for share in shares if share is not None]
    assert numbers == sorted(numbers)
    assert len(set(numbers)) > 4
