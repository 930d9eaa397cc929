"""The state folder: one holder at a time, private, cleaned of what a killed writer left."""

import errno
import os
import signal
import socket
import stat
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from stream.checkpoints import Checkpoints
from stream.errors import NoPermission, TryLater
from stream.state_folder import StateFolder

ROOT = Path(__file__).parent.parent
HOLDER = """
import sys, time
from pathlib import Path
from stream.state_folder import StateFolder
folder = StateFolder(Path(sys.argv[1]))
print("held", flush=True)
time.sleep(60)
"""


def test_opening_makes_private_folders_whatever_the_umask(tmp_path: Path) -> None:
    old = os.umask(0)
    try:
        with StateFolder(tmp_path / "new" / "state") as folder:
            made = [folder.path.parent, folder.path, folder.checkpoints, folder.snapshots, folder.rejects]
            assert {stat.S_IMODE(path.stat().st_mode) for path in made} == {0o700}
            assert stat.S_IMODE((folder.path / "LOCK").stat().st_mode) == 0o600
    finally:
        os.umask(old)
    assert sorted(os.listdir(tmp_path / "new" / "state")) == ["LOCK", "checkpoints", "rejects", "snapshots"]


def test_a_folder_that_was_there_keeps_its_permissions(tmp_path: Path) -> None:
    tmp_path.chmod(0o750)
    StateFolder(tmp_path).close()
    assert stat.S_IMODE(tmp_path.stat().st_mode) == 0o750


def test_a_second_holder_is_told_pid_and_host_of_the_first(tmp_path: Path) -> None:
    with subprocess.Popen(
        [sys.executable, "-c", HOLDER, str(tmp_path)], stdout=subprocess.PIPE, text=True, cwd=ROOT
    ) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        with pytest.raises(TryLater) as raised:
            StateFolder(tmp_path)
        assert raised.value.exit_code == 75
        assert f"process {holder.pid} on host {socket.gethostname()}" in str(raised.value)
        holder.send_signal(signal.SIGKILL)
        holder.wait()
        with StateFolder(tmp_path):  # the lock went with the process
            assert (tmp_path / "LOCK").read_text() == f"{os.getpid()} {socket.gethostname()}\n"


def test_the_same_process_cannot_hold_a_folder_twice(tmp_path: Path) -> None:
    first = StateFolder(tmp_path)
    with pytest.raises(TryLater, match=f"process {os.getpid()} "):
        StateFolder(tmp_path)
    first.close()
    first.close()
    StateFolder(tmp_path).close()


def test_the_lock_is_not_handed_to_a_program_that_the_holder_starts(tmp_path: Path) -> None:
    with StateFolder(tmp_path):
        child = subprocess.Popen(
            [sys.executable, "-c", "print(flush=True); input()"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            close_fds=False,
        )
        assert child.stdout is not None
        child.stdout.readline()
    try:
        StateFolder(tmp_path).close()
    finally:
        child.communicate(b"\n")


@pytest.mark.parametrize("call", ["mkdir", "open"])
@pytest.mark.parametrize("code", [errno.EROFS, errno.EACCES])
def test_a_read_only_place_is_no_permission(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, call: str, code: int
) -> None:
    def refuse(*_: Any, **__: Any) -> int:
        raise OSError(code, os.strerror(code))

    place = tmp_path / "s" if call == "mkdir" else tmp_path
    with monkeypatch.context() as patch:
        patch.setattr(os, call, refuse)
        with pytest.raises(NoPermission) as raised:
            StateFolder(place)
    assert raised.value.exit_code == 77
    assert str(place) in str(raised.value)


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_without_write_permission_is_no_permission(tmp_path: Path) -> None:
    tmp_path.chmod(0o500)
    try:
        with pytest.raises(NoPermission):
            StateFolder(tmp_path)
    finally:
        tmp_path.chmod(0o700)


def test_a_failed_start_lets_the_lock_go(tmp_path: Path) -> None:
    (tmp_path / "rejects").write_text("in the way")
    for _ in range(2):
        with pytest.raises(Exception, match="rejects"):
            StateFolder(tmp_path)
    (tmp_path / "rejects").unlink()
    StateFolder(tmp_path).close()


def test_leftovers_of_a_killed_writer_are_gone_after_the_next_start(tmp_path: Path) -> None:
    StateFolder(tmp_path).close()
    for place in ("checkpoints", "snapshots", "."):
        (tmp_path / place / ".writing-abc").mkdir()
        (tmp_path / place / ".writing-abc" / "half").write_bytes(b"x")
    StateFolder(tmp_path).close()
    assert not list(tmp_path.rglob(".*"))


def test_a_folder_is_used_once_it_has_a_checkpoint_even_a_broken_one(tmp_path: Path) -> None:
    with StateFolder(tmp_path) as folder:
        assert not folder.used()
        (folder.snapshots / "000000000000001").mkdir()
        (folder.rejects / "000.jsonl").touch()
        assert not folder.used()
        checkpoints = Checkpoints(folder.checkpoints, 3)
        path = checkpoints.write(10, {}, {})
        assert folder.used()
        (folder.checkpoints / "broken").mkdir()
        path.rename(folder.checkpoints / "broken" / path.name)
        assert folder.used()


def test_clearing_removes_checkpoints_and_rejects_and_keeps_snapshots(tmp_path: Path) -> None:
    with StateFolder(tmp_path) as folder:
        Checkpoints(folder.checkpoints, 3).write(10, {}, {})
        (folder.checkpoints / "broken" / "000000000000005").mkdir(parents=True)
        (folder.rejects / "000.jsonl").touch()
        (folder.snapshots / "000000000000010").mkdir()
        folder.clear()
        assert not folder.used()
        assert Checkpoints(folder.checkpoints, 3).newest() is None
        assert os.listdir(folder.rejects) == os.listdir(folder.checkpoints) == []
        assert os.listdir(folder.snapshots) == ["000000000000010"]
        assert sorted(os.listdir(tmp_path)) == ["LOCK", "checkpoints", "rejects", "snapshots"]
