"""Logs that grow, are renamed, emptied and removed in; each line once, or a refusal that says why, out."""

from __future__ import annotations

import gzip
import os
import random
import shutil
import signal
import time
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.errors import BadSettings, InputMissing
from stream.journal import FILE_NAME
from stream.message import LiveSource
from stream.runs.replay import replay
from stream.runs.retracing import retrace
from stream.runs.work import work
from stream.sources import FollowedSource, FollowSource, JournalledSource, lines
from tests.replays import LONG, courier_lines, last_checkpoint, model_of, settings_for
from tests.work_child import Workers

LIMIT = 1 << 16
KILLS = 30 if LONG else 6


class Clock:
    """Seconds that pass when told to; file times are as of long ago unless a test sets them."""

    def __init__(self) -> None:
        self.s = 1000.0

    def __call__(self) -> float:
        return self.s


class Following:
    """A source on a folder, and what it gave so far."""

    def __init__(self, folder: Path, *patterns: str, known=None, position=None) -> None:
        self.clock = Clock()
        self.source: LiveSource = FollowSource(
            patterns or ("*",), folder, LIMIT, known, self.clock, lambda: 0.0
        )
        self.found: list[tuple[int, int, bytes]] = []
        try:
            if position is None:
                self.source.start()
            else:
                self.source.seek(position)
        except BadSettings:
            self.source.close()
            raise

    def look(self, limit: int = 1000) -> list[bytes]:
        """Values that come now: time passes in between, but never so much that a file is left."""
        return self._read(0.6, 3, limit)

    def wait(self, limit: int = 1000) -> list[bytes]:
        """Values that come within a minute."""
        return self._read(3.0, 20, limit)

    def _read(self, step_s: float, times: int, limit: int) -> list[bytes]:
        values = []
        for _ in range(times):
            self.clock.s += step_s
            while len(block := self.source.read(limit)):
                for row in range(len(block)):
                    values.append(block.value(row))
                    self.found.append((block.partition, int(block.offsets[row]), block.value(row)))
        return values

    def again(self, folder: Path, *patterns: str) -> Following:
        """Another process, from this one's position."""
        position = self.source.position()
        self.source.close()
        return Following(folder, *patterns, position=position)


@pytest.fixture
def start(tmp_path):
    begun = []

    def begin(*patterns, **options):
        begun.append(Following(tmp_path, *patterns, **options))
        return begun[-1]

    yield begin
    for following in begun:
        following.source.close()


def add(path: Path, data: bytes) -> None:
    with path.open("ab") as file:
        file.write(data)


# ---- growing ---------------------------------------------------------------------------------------------


def test_lines_come_as_they_are_written_and_an_unfinished_one_waits(tmp_path, start):
    log = tmp_path / "a.jsonl"
    log.write_bytes(b"1\n2")
    following = start()
    assert following.wait() == [b"1"]
    add(log, b"2\n3")
    assert following.wait() == [b"22"]
    add(log, b"\n\n4\r\n")
    assert following.wait() == [b"3", b"4"]
    assert [offset for _, offset, _ in following.found] == [0, 2, 5, 8]
    assert following.source.position()["offset"] == 11


@given(
    pieces=st.lists(st.sampled_from([b"ab", b"\n", b"\r\n", b"c", b" "]), max_size=40),
    chunk=st.integers(1, 9),
    limit=st.integers(1, 5),
)
def test_however_the_writer_cuts_its_writes_the_messages_are_those_of_the_whole(
    tmp_path_factory, pieces, chunk, limit
):
    folder = tmp_path_factory.mktemp("log")
    (folder / "a").touch()
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(lines, "CHUNK_BYTES", chunk)
        following = Following(folder)
        for piece in [*pieces, b"\nend\n"]:
            add(folder / "a", piece)
            following._read(0.6, 1, limit)
        following.wait()
        following.source.close()
    whole = b"".join([*pieces, b"\nend\n"])
    expected = [line.removesuffix(b"\r") for line in whole.split(b"\n")]
    assert [value for *_, value in following.found] == [line for line in expected if line.strip()]
    for _, offset, value in following.found:
        assert whole[offset:].startswith(value)


@pytest.mark.parametrize("size", [LIMIT + 2, 3 * LIMIT, 3 * lines.CHUNK_BYTES])
def test_a_line_over_the_limit_waits_for_its_end_too_and_comes_once(tmp_path, start, size):
    log = tmp_path / "a"
    log.write_bytes(b"1\n" + b"x" * size)
    following = start()
    assert following.look() == [b"1"]
    add(log, b"y" * 10)
    assert following.look() == []
    add(log, b"\n2\n")
    values = following.look()
    assert [len(value) for value in values] == [LIMIT + 1, 1]
    assert following.source.position()["offset"] == 2 + size + 10 + 3


def test_an_empty_file_and_one_that_is_made_later_are_followed(tmp_path, start):
    (tmp_path / "a").touch()
    following = start()
    assert following.look() == []
    assert following.source.position() == {"files": [], "offset": 0}
    add(tmp_path / "a", b"1\n")
    assert following.look() == [b"1"]


def test_standard_input_cannot_be_followed_and_a_missing_log_is_named(tmp_path):
    with pytest.raises(BadSettings, match="standard input cannot be followed"):
        FollowSource(["-"], tmp_path, LIMIT)
    with pytest.raises(InputMissing):
        FollowSource(["*.jsonl"], tmp_path, LIMIT)


# ---- several files ---------------------------------------------------------------------------------------


def test_the_next_file_begins_once_the_one_at_hand_is_quiet(tmp_path, start):
    first, second = tmp_path / "day1", tmp_path / "day2"
    first.write_bytes(b"1\n")
    in_future(first)
    following = start()
    assert following.look() == [b"1"]
    second.write_bytes(b"3\n")
    assert following.look() == []
    add(first, b"2\n")
    in_future(first)
    assert following.look() == [b"2"], "written on after the next one was there"
    assert following.wait() == [b"3"]
    assert following.found == [(0, 0, b"1"), (0, 2, b"2"), (1, 0, b"3")]


def in_future(path: Path) -> None:
    """So that only what is seen from here says that it is quiet."""
    os.utime(path, (10**9, 10**9))


def test_a_last_line_without_an_end_counts_when_the_file_is_left(tmp_path, start):
    (tmp_path / "day1").write_bytes(b"1\n2")
    following = start()
    assert following.wait() == [b"1"]
    (tmp_path / "day2").write_bytes(b"3\n")
    assert following.wait() == [b"2", b"3"]


def test_files_with_nothing_in_them_are_no_files(tmp_path, start):
    (tmp_path / "day1").write_bytes(b"1\n")
    (tmp_path / "day2").write_bytes(b"\n \n")
    (tmp_path / "day3").touch()
    (tmp_path / "day4").write_bytes(b"4\n")
    following = start()
    assert following.wait() == [b"1", b"4"]
    assert following.found == [(0, 0, b"1"), (1, 0, b"4")]


def test_compressed_files_are_read_among_others(tmp_path, start):
    (tmp_path / "day1.gz").write_bytes(gzip.compress(b"1\n2\n"))
    (tmp_path / "day2").write_bytes(b"3\n")
    following = start()
    assert following.wait() == [b"1", b"2", b"3"]
    (tmp_path / "day3.gz").write_bytes(gzip.compress(b"4\n"))
    assert following.wait() == [b"4"]


def test_what_is_added_to_a_file_that_was_left_is_refused_never_passed_over(tmp_path, start):
    (tmp_path / "day1").write_bytes(b"1\n")
    (tmp_path / "day2").write_bytes(b"2\n")
    following = start()
    assert following.wait() == [b"1", b"2"]
    add(tmp_path / "day1", b"\n")
    assert following.wait() == [], "a blank line is nothing"
    add(tmp_path / "day1", b"late\n")
    with pytest.raises(BadSettings, match=r"day1 was left at byte 2.*written on since") as caught:
        following.wait()
    assert caught.value.exit_code == 78
    with pytest.raises(BadSettings, match="written on since"):
        following.again(tmp_path)


def test_a_new_file_that_sorts_before_is_refused(tmp_path, start):
    (tmp_path / "day2").write_bytes(b"2\n")
    following = start()
    assert following.wait() == [b"2"]
    (tmp_path / "day1").write_bytes(b"1\n")
    with pytest.raises(BadSettings, match="day1 is new and sorts before day2"):
        following.wait()
    with pytest.raises(BadSettings, match="day1 is new and sorts before day2"):
        following.again(tmp_path)


def test_files_that_were_read_may_be_removed(tmp_path, start):
    for day in (1, 2, 3):
        (tmp_path / f"day{day}").write_bytes(b"%d\n" % day)
    following = start()
    assert following.wait() == [b"1", b"2", b"3"]
    (tmp_path / "day1").unlink()
    resumed = following.again(tmp_path)
    add(tmp_path / "day3", b"4\n")
    assert resumed.wait() == [b"4"]
    (tmp_path / "day2").unlink()
    (tmp_path / "day3").unlink()
    with pytest.raises(BadSettings, match="day3 was being read"):
        (tmp_path / "day4").write_bytes(b"5\n")
        resumed.again(tmp_path)


# ---- rotation --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("patterns", [("app.log",), ("app.log*",), ("*",)])
@pytest.mark.parametrize("down", [False, True], ids=["alive", "restarted"])
@pytest.mark.parametrize("packed", [False, True], ids=["plain", "gz"])
def test_a_renamed_log_is_read_to_its_end_and_the_new_one_follows(tmp_path, start, patterns, down, packed):
    log = tmp_path / "app.log"
    log.write_bytes(b"1\n")
    following = start(*patterns)
    for round_ in range(3):
        number = 10 * round_
        assert following.look() == ([b"1"] if not round_ else [])
        add(log, b"%d\n" % (number + 2))
        for old in sorted(tmp_path.glob("app.log.*"), reverse=True):
            name = old.name.split(".")
            name[2] = str(int(name[2]) + 1)
            old.rename(tmp_path / ".".join(name))
        log.rename(tmp_path / "app.log.1")
        assert following.look() == [b"%d" % (number + 2)], "before there is a new one"
        add(tmp_path / "app.log.1", b"%d\n" % (number + 3))  # the writer has not noticed yet
        log.write_bytes(b"%d\n" % (number + 4))
        if packed and down:
            content = (tmp_path / "app.log.1").read_bytes()
            (tmp_path / "app.log.1.gz").write_bytes(gzip.compress(content))
            (tmp_path / "app.log.1").unlink()
        if down:
            following = following.again(tmp_path, *patterns)
        assert following.wait() == [b"%d" % (number + 3), b"%d" % (number + 4)]
    following.source.close()


def test_the_end_of_what_was_there_is_not_taken_for_reached_in_a_longer_file_of_the_same_name(tmp_path):
    log = tmp_path / "app.log"
    log.write_bytes(b"1\n2\n3\n4\n")
    following = Following(tmp_path, "app.log")
    following.look()
    log.rename(tmp_path / "app.log.1")
    log.write_bytes(b"5\n")
    resumed = following.again(tmp_path, "app.log")
    assert not resumed.source.at_end()
    assert resumed.wait() == [b"5"]
    assert resumed.source.at_end()
    add(log, b"6\n")
    resumed.source.close()


def test_the_end_is_reached_though_the_log_grows_for_ever(tmp_path, start):
    log = tmp_path / "app.log"
    log.write_bytes(b"1\n2\n")
    following = start()
    following.source.read(1)
    assert not following.source.at_end()
    add(log, b"3\n4\n")
    following.source.read(1)
    assert following.source.at_end()


def test_a_log_that_was_rotated_twice_while_nobody_read_is_refused(tmp_path, start):
    log = tmp_path / "app.log"
    log.write_bytes(b"1\n")
    following = start("app.log")
    assert following.look() == [b"1"]
    log.rename(tmp_path / "app.log.2")
    os.utime(tmp_path / "app.log.2", (10, 10))
    (tmp_path / "app.log.1").write_bytes(b"2\n")
    os.utime(tmp_path / "app.log.1", (20, 20))
    (tmp_path / "app.log.3").touch()
    log.write_bytes(b"3\n")
    resumed = following.again(tmp_path, "app.log")
    with pytest.raises(BadSettings, match=r"moved aside more than once.*app\.log\.1 would be passed over"):
        resumed.wait()
    resumed.source.close()


def test_older_rotations_and_other_files_beside_the_log_are_no_concern(tmp_path, start):
    for name, age in (("app.log.1", 5), ("app.log.2.gz", 1)):
        (tmp_path / name).write_bytes(b"old\n")
        os.utime(tmp_path / name, (age, age))
    log = tmp_path / "app.log"
    log.write_bytes(b"1\n")
    following = start("app.log")
    assert following.look() == [b"1"]
    (tmp_path / "app.log.offset").write_bytes(b"somebody else's\n")
    log.rename(tmp_path / "app.log.0")
    log.write_bytes(b"2\n")
    assert following.wait() == [b"2"]


@pytest.mark.parametrize("again", [b"", b"1\n", b"7\n8\n9\n", b"70\n80\n90\n"])
def test_a_log_that_was_emptied_or_written_over_is_refused(tmp_path, start, again):
    log = tmp_path / "app.log"
    log.write_bytes(b"1\n22\n")
    following = start("app.log")
    assert following.look() == [b"1", b"22"]
    shutil.copy(log, tmp_path / "app.log.1")
    os.truncate(log, 0)
    add(log, again)
    with pytest.raises(BadSettings, match=r"app\.log was emptied or written over") as caught:
        following.look()
    assert caught.value.exit_code == 78


def test_one_that_was_emptied_while_nobody_read_is_refused_at_the_start(tmp_path, start):
    log = tmp_path / "app.log"
    log.write_bytes(b"1\n22\n")
    following = start("app.log")
    assert following.look() == [b"1", b"22"]
    log.write_bytes(b"3\n44\n5\n")
    with pytest.raises(BadSettings, match=r"app\.log was being read"):
        following.again(tmp_path, "app.log")


# ---- the same again --------------------------------------------------------------------------------------


def test_positions_depend_on_what_was_read_and_not_on_what_was_there(tmp_path):
    whole, growing = tmp_path / "whole", tmp_path / "growing"
    content = [b"line %d\n" % n for n in range(2_000)]
    for folder in (whole, growing):
        folder.mkdir()
    (whole / "a").write_bytes(b"".join(content))
    (whole / "b").write_bytes(b"next\n")
    following = Following(whole)
    at = {}
    for _ in range(300):
        following.clock.s += 3
        following.source.read(7)
        at[following.source.position()["offset"]] = following.source.position()
    following.source.close()
    (growing / "a").touch()
    following = Following(growing)
    seen = 0
    for n, line in enumerate(content):
        add(growing / "a", line)
        if n % 50 == 0:
            following.look(7)
            position = following.source.position()
            if position["offset"] in at:
                assert position == at[position["offset"]]
                seen += 1
    assert seen > 3
    following.source.close()


def test_a_followed_log_can_be_followed_again_by_its_journal(tmp_path):
    """Also after its files were renamed and packed: they are found by what the position knows of them."""
    folder = tmp_path / "log"
    folder.mkdir()
    log = folder / "app.log"
    log.write_bytes(b"")
    clock = Clock()
    source = JournalledSource(FollowSource(["app.log"], folder, LIMIT, None, clock, lambda: 0.0), tmp_path)
    source.start()
    found = []

    def read(seconds):
        for _ in range(20):
            clock.s += seconds
            while len(block := source.read(2)):
                found.extend((block.partition, block.value(row)) for row in range(len(block)))

    for generation in range(3):
        add(log, b"".join(b"%d of %d\n" % (n, generation) for n in range(5)))
        read(0.6)
        add(log, b"last of %d" % generation)
        for old in sorted(folder.glob("app.log.*"), reverse=True):
            old.rename(folder / f"app.log.{int(old.suffix[1:]) + 1}")
        log.rename(folder / "app.log.1")
        log.write_bytes(b"first after %d\n" % generation)
        read(3.0)
    position = source.position()
    source.close()
    assert len(found) == 21
    (folder / "app.log.3.gz").write_bytes(gzip.compress((folder / "app.log.3").read_bytes()))
    (folder / "app.log.3").unlink()
    for limit in (1, 100):
        again = FollowedSource(
            FollowSource(["app.log"], folder, LIMIT, position["source"]), tmp_path / FILE_NAME
        )
        values = []
        while len(block := again.read(limit)):
            values += [(block.partition, block.value(row)) for row in range(len(block))]
        assert values == found
        assert again.position() == position
        again.close()


# ---- work ------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def courier(tmp_path_factory):
    return courier_lines(tmp_path_factory.mktemp("log") / "log.jsonl")


@pytest.fixture(scope="module")
def workers():
    children = Workers()
    yield children
    children.close()


def write(path: Path, some: list[bytes]) -> None:
    add(path, b"".join(line + b"\n" for line in some))


def test_a_log_that_was_worked_until_its_end_leaves_the_model_of_a_replay(courier, tmp_path):
    write(tmp_path / "a.jsonl", courier[:4_000])
    write(tmp_path / "b.jsonl", courier[4_000:6_000])
    settings = settings_for([tmp_path / "*.jsonl"])
    replay(settings, tmp_path / "replayed")
    done = work(settings, tmp_path / "worked", until_end=True)
    assert done.run.summary.messages == 6_000
    assert model_of(tmp_path / "worked") == model_of(tmp_path / "replayed")
    write(tmp_path / "b.jsonl", courier[6_000:6_100])
    done = work(settings, tmp_path / "worked", until_end=True)
    assert done.run.summary.messages == 6_100
    assert done.run.resumed_from == 6_000
    done = work(settings, tmp_path / "worked", until_end=True)
    assert done.run.checkpoints == 0, "nothing new, nothing written"


def test_a_copy_beside_an_emptied_log_is_read_at_the_next_start_and_nothing_is_lost(courier, tmp_path):
    log, copy = tmp_path / "app.log", tmp_path / "app.log.1"
    write(log, courier[:3_000])
    settings = settings_for([log])

    def rotate(row):
        if not copy.exists():
            shutil.copy(log, copy)
            os.truncate(log, 0)

    with pytest.raises(BadSettings, match=r"app\.log\.1 begins like it .* start again"):
        work(settings, tmp_path / "state", until_end=True, on_window=rotate)
    name, *_ = last_checkpoint(tmp_path / "state")
    assert 1_500 <= int(name) < 3_000
    write(log, courier[3_000:3_500])
    done = work(settings, tmp_path / "state", until_end=True)
    assert done.run.summary.messages == 3_500


def test_a_log_that_was_read_and_is_gone_without_a_checkpoint_is_named(tmp_path):
    (tmp_path / "app.log").write_bytes(b"1\n22\n")
    settings = settings_for([tmp_path / "app.log"])
    work(settings, tmp_path / "state", until_end=True)
    shutil.rmtree(tmp_path / "state/checkpoints")
    os.truncate(tmp_path / "app.log", 0)
    with pytest.raises(BadSettings, match=r"file number 0 of the log was read, and nothing .*app\.log"):
        work(settings, tmp_path / "state", until_end=True)


def checkpointed(folder):
    """Returns once the first checkpoint is durable."""
    deadline = time.monotonic() + 60
    while not any((folder / "checkpoints").glob("[0-9]*")):
        assert time.monotonic() < deadline, "no checkpoint was written"
        time.sleep(0.02)


def test_killed_again_and_again_while_the_log_grows_and_turns_over_it_loses_and_doubles_nothing(
    courier, tmp_path, workers
):
    draw = random.Random(17)
    log, folder = tmp_path / "log" / "depot.jsonl", tmp_path / "state"
    log.parent.mkdir()
    log.touch()
    worker = {"checkpoint_every_s": 0.05, "snapshot_every_s": 0.2}
    settings = settings_for([log], worker=worker)
    waiting, written = list(courier[:8_000]), 0
    for kill in range(KILLS):
        workers.start(settings, folder)
        deadline = time.monotonic() + draw.uniform(0.1, 0.6)
        while time.monotonic() < deadline:
            some = draw.randrange(400 // KILLS)
            write(log, waiting[written : written + some])
            written = min(written + some, len(waiting))
            time.sleep(0.01)
        if kill == 0:  # what was renamed is known again by its beginning, which the first checkpoint holds
            checkpointed(folder)
        os.kill(workers.pid, signal.SIGKILL)
        workers.wait()
        if kill % 3 == 1:
            log.rename(log.with_name(f"depot.jsonl.{kill}"))
            write(log, waiting[written : written + 50])
            written = min(written + 50, len(waiting))
            workers.start(settings, folder, until_end=True)  # rotations are not let pile up
            assert workers.wait() == 0
    write(log, waiting[written:])
    workers.start(settings, folder, until_end=True)
    assert workers.wait() == 0
    assert int(last_checkpoint(folder)[0]) == len(waiting)
    found = retrace(settings, tmp_path / "again", folder)
    assert found.differences == []
    assert last_checkpoint(tmp_path / "again") == last_checkpoint(folder)
    write(tmp_path / "whole.jsonl", waiting)
    replay(settings_for([tmp_path / "whole.jsonl"]), tmp_path / "replayed")
    assert model_of(folder) == model_of(tmp_path / "replayed")
