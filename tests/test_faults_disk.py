"""Disks that fill, folders that may not be written, broken checkpoints and two workers in; exit codes out."""

import os
import resource
import shutil
import subprocess
import time

import pytest

from stream.arrays_file import ARRAYS
from stream.journal import FILE_NAME
from stream.manifest import MANIFEST
from tests.fault_rig import (
    Worker,
    kept_whole,
    notes,
    nothing_lost_or_doubled,
    refused,
    send,
    settings_of,
    worked,
)
from tests.replays import last_checkpoint, newest, tree

BOUND_S = 60
"""For a worker whose disk failed to end, on a busy machine."""


@pytest.fixture
def filled(broker, topic):
    """A topic with 2,000 messages."""
    broker.make_topic(topic)
    send(broker, topic, notes(0, 2_000))
    return topic


def mounted(*arguments):
    """Mounts what is asked for, or skips the test where this user may not."""
    done = subprocess.run(["mount", *map(str, arguments)], capture_output=True, text=True)
    if done.returncode:
        pytest.skip(f"NOT TESTED, as this user may mount nothing: {done.stderr.strip()}")


@pytest.fixture
def small_disk(tmp_path):
    """A file system of its own with three megabytes."""
    place = tmp_path / "disk"
    place.mkdir()
    mounted("-t", "tmpfs", "-o", "size=3m,mode=0700", "tmpfs", place)
    yield place
    subprocess.run(["umount", "--lazy", place], check=True)


def fill_up(folder):
    """Leaves no byte free; the file that takes them."""
    ballast = folder / "ballast"
    with ballast.open("wb", 0) as file:
        for size in (1 << 16, 1 << 12, 1):
            try:
                while True:
                    file.write(bytes(size))
            except OSError:
                continue
    return ballast


def test_a_disk_that_fills_ends_the_worker_with_73_and_space_lets_it_go_on_with_all(
    broker, filled, small_disk
):
    settings = settings_of(broker, filled)
    with Worker(settings, small_disk) as worker:
        worker.saved(2_000)
        ballast = fill_up(small_disk)
        before = last_checkpoint(worker.state)
        send(broker, filled, notes(2_000, 4_000))
        assert worker.wait(BOUND_S) == 73
        assert last_checkpoint(worker.state) == before, "the old checkpoint is kept"
        assert kept_whole(worker.state) == 2_000
    refused(settings, small_disk, 73, "No space left on device", "free some space")
    assert last_checkpoint(worker.state) == before
    ballast.unlink()
    assert worked(settings, small_disk)["messages"] == 4_000
    nothing_lost_or_doubled(settings, small_disk, {0: 4_000})


def test_a_journal_that_cannot_grow_ends_the_worker_before_it_learns_what_is_not_noted(
    broker, filled, tmp_path
):
    """A limit of file sizes, as a quota sets one, holds for its log too; what it has to say goes nowhere."""
    settings = settings_of(broker, filled)
    with Worker(settings, tmp_path) as worker:
        worker.saved(2_000)
        before = tree(worker.state)
        size = len(before[FILE_NAME])
        resource.prlimit(worker.pid, resource.RLIMIT_FSIZE, (size + 5, size + 5))
        send(broker, filled, notes(2_000, 4_000))
        assert worker.wait(BOUND_S) == 73
    torn = (tmp_path / "state" / FILE_NAME).read_bytes()
    assert torn.startswith(before[FILE_NAME]) and len(torn) == size + 5, "a part of a record was written"
    assert kept_whole(tmp_path / "state") == 2_000
    with Worker(settings, tmp_path, "--until-end") as again:
        assert again.ended()["messages"] == 4_000
        assert any("last 5 bytes were torn by a crash" in event["text"] for event in again.events("warning"))
    nothing_lost_or_doubled(settings, tmp_path, {0: 4_000})


def test_a_folder_that_may_only_be_read_ends_the_worker_with_77_and_nothing_is_changed(
    broker, filled, small_disk
):
    """Root may write where modes say no, so the file system itself is made read-only."""
    settings = settings_of(broker, filled)
    worked(settings, small_disk)
    before = tree(small_disk / "state")
    mounted("-o", "remount,ro", small_disk)
    refused(
        settings,
        small_disk.parent / "config",
        77,
        "Read-only file system",
        options=("--until-end", "--state", str(small_disk / "state")),
    )
    mounted("-o", "remount,rw", small_disk)
    assert tree(small_disk / "state") == before


# ---- broken checkpoints ------------------------------------------------------------------------------------


def flip(path):
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(content)


def truncate(path):
    os.truncate(path, path.stat().st_size // 2)


def zero(path):
    path.write_bytes(bytes(path.stat().st_size))


@pytest.fixture(scope="module")
def kept(broker, tmp_path_factory):
    """Settings and state of a worker that left several checkpoints of 5,000 messages."""
    topic = f"feed-{os.urandom(6).hex()}"
    broker.make_topic(topic)
    send(broker, topic, notes(0, 5_000))
    settings = settings_of(
        broker, topic, state={"checkpoint_every": 1_000}, worker={"checkpoint_every_s": 100}
    )
    folder = tmp_path_factory.mktemp("kept")
    worked(settings, folder)
    return settings, folder


@pytest.mark.parametrize(
    ("damage", "file"), [(flip, ARRAYS), (truncate, ARRAYS), (zero, ARRAYS), (truncate, MANIFEST)]
)
def test_a_broken_checkpoint_is_set_aside_and_the_older_one_leads_to_the_same_bytes(
    kept, tmp_path, damage, file
):
    settings, folder = kept
    shutil.copytree(folder / "state", tmp_path / "state")
    expected = last_checkpoint(tmp_path / "state")
    damage(newest(tmp_path / "state") / file)
    done = worked(settings, tmp_path)
    assert done["resumed_from"] == 4_000
    assert any("moved to" in warning and expected[0] in warning for warning in done["warnings"])
    assert [path.name for path in (tmp_path / "state/checkpoints/broken").iterdir()] == [expected[0]]
    assert last_checkpoint(tmp_path / "state") == expected


def test_with_only_broken_checkpoints_it_refuses_and_never_starts_from_nothing(kept, tmp_path):
    settings, folder = kept
    shutil.copytree(folder / "state", tmp_path / "state")
    for number, path in enumerate(sorted((tmp_path / "state/checkpoints").glob("[0-9]*"))):
        (flip, truncate, zero)[number % 3](path / ARRAYS)
    for _ in range(2):
        refused(settings, tmp_path, 65, "no whole checkpoint is left", "does not start from nothing")


# ---- two workers -------------------------------------------------------------------------------------------


def test_a_second_worker_on_a_state_folder_exits_75_and_names_the_holder(broker, filled, tmp_path):
    settings = settings_of(broker, filled)
    with Worker(settings, tmp_path / "first") as first:
        first.learned(2_000)
        state = str(first.state)
        began = time.monotonic()
        refused(settings, tmp_path / "second", 75, f"process {first.pid} on", options=("--state", state))
        assert time.monotonic() - began < BOUND_S
        send(broker, filled, notes(2_000, 2_500))
        first.learned(2_500)
        assert first.stop()["messages"] == 2_500
    nothing_lost_or_doubled(settings, tmp_path / "first", {0: 2_500})
