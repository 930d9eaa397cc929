"""Folders that survive: whole or absent after any fault, damage found, equal content in equal bytes."""

import errno
import json
import os
import signal
import stat
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import safetensors
import safetensors.numpy
from hypothesis import given
from hypothesis import strategies as st

from stream import durable
from stream.arrays_file import ARRAYS, read_array_folder, write_array_folder
from stream.durable import Sink, remove_leftovers, write_file, write_folder
from stream.errors import BadData, BedloadError, CannotCreate, FileTrouble, InputMissing, NoPermission
from stream.manifest import MANIFEST, canonical_json, manifest_bytes, read_manifest, verify_folder

FILES = {"one.bin": bytes(range(256)) * 20, "two.txt": b"eleven\n"}
ROOT = Path(__file__).parent.parent


def holds(folder: Path, files: dict[str, bytes]) -> bool:
    verify_folder(folder)
    return {p.name: p.read_bytes() for p in folder.iterdir() if p.name != MANIFEST} == files


class Faults:
    """Lets the first `good` calls of the system pass and fails the next (or all further ones)."""

    CALLS = ("mkdir", "open", "write", "fsync", "rename")

    def __init__(self, good: int, code: int, lasting: bool) -> None:
        self.left, self.code, self.lasting = good, code, lasting
        self.failed: list[tuple[str, str]] = []
        self.synced: list[str] = []
        self.calls = 0

    @contextmanager
    def injected(self) -> Iterator[None]:
        with pytest.MonkeyPatch.context() as patch:
            for name in self.CALLS:
                patch.setattr(os, name, self._wrapped(name, getattr(os, name)))
            yield

    def _wrapped(self, name: str, real: Callable[..., Any]) -> Callable[..., Any]:
        def call(*args: Any, **kwargs: Any) -> Any:
            place = os.readlink(f"/proc/self/fd/{args[0]}") if name == "fsync" else str(args[0])
            if name == "fsync":
                self.synced.append(place)
            self.calls += 1
            self.left -= 1
            if self.left == -1 or (self.left < 0 and self.lasting):
                self.failed.append((name, place))
                raise OSError(self.code, os.strerror(self.code))
            return real(*args, **kwargs)

        return call


def calls_of_one_write(tmp_path: Path) -> int:
    (tmp_path / "counted").mkdir()
    write_folder(tmp_path / "counted", "a", {"one.bin": b"old"}, {"v": 1})
    counting = Faults(10**9, errno.EIO, False)
    with counting.injected():
        write_folder(tmp_path / "counted", "a", FILES, {"v": 2})
    return counting.calls


def test_a_written_folder_is_private_and_says_what_is_in_it(tmp_path: Path) -> None:
    old_mask = os.umask(0)
    try:
        folder = write_folder(tmp_path, "a", FILES, {"v": 1})
    finally:
        os.umask(old_mask)
    assert stat.S_IMODE(folder.stat().st_mode) == 0o700
    assert {stat.S_IMODE(p.stat().st_mode) for p in folder.iterdir()} == {0o600}
    manifest = verify_folder(folder)
    assert manifest["v"] == 1
    # The sha256 by coreutils' sha256sum, the CRC-32C by its bitwise definition below.
    assert manifest["files"]["two.txt"] == {
        "size": 7,
        "crc32c": f"{slow_crc32c(FILES['two.txt']):08x}",
        "sha256": subprocess.run(["sha256sum"], input=FILES["two.txt"], capture_output=True, check=True)
        .stdout[:64]
        .decode(),
    }


def slow_crc32c(data: bytes) -> int:
    """Castagnoli's polynomial, bit by bit, reflected (RFC 3720, section 12.1)."""
    crc = 0xFFFFFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ (0x82F63B78 if crc & 1 else 0)
    return crc ^ 0xFFFFFFFF


def test_crc32c_agrees_with_the_published_values() -> None:
    # RFC 3720 appendix B.4: 32 bytes of zeros, 32 of ones, 00 to 1f.
    assert slow_crc32c(bytes(32)) == 0x8A9136AA
    assert slow_crc32c(b"\xff" * 32) == 0x62A8AB43
    assert slow_crc32c(bytes(range(32))) == 0x46DD794E


def test_equal_content_gives_equal_bytes_whenever_it_is_written(tmp_path: Path) -> None:
    (tmp_path / "x").mkdir()
    (tmp_path / "y").mkdir()
    first = write_folder(tmp_path / "x", "a", FILES, {"b": 1, "a": [1.5, None, "ä"]})
    time.sleep(0.01)
    second = write_folder(tmp_path / "y", "a", dict(reversed(FILES.items())), {"a": [1.5, None, "ä"], "b": 1})
    assert {p.name: p.read_bytes() for p in first.iterdir()} == {
        p.name: p.read_bytes() for p in second.iterdir()
    }


def test_writing_the_same_again_changes_nothing(tmp_path: Path) -> None:
    before = write_folder(tmp_path, "a", FILES, {"v": 1}).stat().st_ino
    assert write_folder(tmp_path, "a", FILES, {"v": 1}).stat().st_ino == before
    assert os.listdir(tmp_path) == ["a"]


def test_writing_the_same_over_a_damaged_folder_mends_it(tmp_path: Path) -> None:
    folder = write_folder(tmp_path, "a", FILES, {"v": 1})
    (folder / "two.txt").write_bytes(b"eleveN\n")
    write_folder(tmp_path, "a", FILES, {"v": 1})
    assert holds(folder, FILES)


def test_a_content_function_writes_piece_by_piece(tmp_path: Path) -> None:
    def content(sink: Sink) -> None:
        sink.write(b"ab")
        sink.write(np.arange(3, dtype=np.uint8).data)
        sink.write(b"")

    folder = write_folder(tmp_path, "a", {"f": content}, {})
    assert (folder / "f").read_bytes() == b"ab\0\1\2"
    verify_folder(folder)


@pytest.mark.parametrize("lasting", [False, True], ids=["one fault", "a fault that stays"])
@pytest.mark.parametrize("code", [errno.EIO, errno.ENOSPC, errno.EROFS])
def test_a_fault_at_any_step_keeps_the_old_folder(tmp_path: Path, code: int, lasting: bool) -> None:
    expected = {errno.EIO: FileTrouble, errno.ENOSPC: CannotCreate, errno.EROFS: NoPermission}[code]
    steps = calls_of_one_write(tmp_path)
    assert steps > 12
    for step in range(steps):
        parent = tmp_path / str(step)
        parent.mkdir()
        write_folder(parent, "a", {"one.bin": b"old"}, {"v": 1})
        faults = Faults(step, code, lasting)
        raised: BedloadError | None = None
        with faults.injected():
            try:
                write_folder(parent, "a", FILES, {"v": 2})
            except BedloadError as error:
                raised = error
        assert faults.failed
        remove_leftovers(parent)
        assert os.listdir(parent) == ["a"]
        if raised is None:  # only after the last sync: what was replaced could not be removed
            assert step > 12 and faults.failed[0][0] == "open"
            assert holds(parent / "a", FILES)
            continue
        assert type(raised) is expected
        assert str(parent / "a") in str(raised)
        if lasting and faults.failed[0][1] == str(parent):
            assert holds(parent / "a", FILES)  # renamed before the last sync, and cannot be taken back
        else:
            assert holds(parent / "a", {"one.bin": b"old"}), step
        write_folder(parent, "a", FILES, {"v": 2})
        assert holds(parent / "a", FILES)


def test_a_fault_while_the_first_folder_is_written_leaves_nothing(tmp_path: Path) -> None:
    for step in range(12):
        parent = tmp_path / str(step)
        parent.mkdir()
        faults = Faults(step, errno.EIO, False)
        with faults.injected(), pytest.raises(FileTrouble):
            write_folder(parent, "a", FILES, {})
        assert os.listdir(parent) == []


def test_a_failed_fsync_is_never_repeated_on_the_same_file(tmp_path: Path) -> None:
    tried = 0
    for step in range(calls_of_one_write(tmp_path)):
        parent = tmp_path / f"s{step}"
        parent.mkdir()
        faults = Faults(step, errno.EIO, False)
        with faults.injected():
            try:
                write_folder(parent, "a", FILES, {})
            except FileTrouble:
                write_folder(parent, "a", FILES, {})
        if faults.failed and faults.failed[0][0] == "fsync":
            place = faults.failed[0][1]
            tried += 1
            # The parent is the one folder that has no second copy: there the rename was taken back first.
            assert faults.synced.count(place) == (2 if place == str(parent) else 1)
        assert holds(parent / "a", FILES)
    assert tried == 5  # two files, the manifest, the folder, its parent


def test_an_interrupt_while_writing_leaves_nothing_behind(tmp_path: Path) -> None:
    def interrupted(sink: Sink) -> None:
        sink.write(b"half")
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        write_folder(tmp_path, "a", {"f": interrupted}, {})
    assert os.listdir(tmp_path) == []


def test_a_missing_parent_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputMissing, match="nowhere"):
        write_folder(tmp_path / "nowhere", "a", FILES, {})


def test_a_full_disk_says_so(tmp_path: Path) -> None:
    if not os.path.exists("/dev/full"):
        pytest.skip("no /dev/full here")
    real = os.open

    def full(path: Any, flags: int, *args: Any, **kwargs: Any) -> int:
        return (
            real("/dev/full", os.O_WRONLY)
            if str(path).endswith("two.txt")
            else real(path, flags, *args, **kwargs)
        )

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(durable.os, "open", full)
        with pytest.raises(CannotCreate, match=r"No space left.*free some space"):
            write_folder(tmp_path, "a", FILES, {})
    assert os.listdir(tmp_path) == []


def test_leftovers_of_a_killed_writer_go_and_a_replaced_folder_comes_back(tmp_path: Path) -> None:
    write_folder(tmp_path, "a", FILES, {"v": 1})
    write_folder(tmp_path, "b", FILES, {"v": 1})
    (tmp_path / "a").rename(tmp_path / ".replaced-a")
    (tmp_path / ".replaced-b").mkdir()
    (tmp_path / ".writing-xyz").mkdir()
    (tmp_path / ".writing-xyz" / "one.bin").write_bytes(b"half")
    (tmp_path / ".writing-file").write_bytes(b"half")
    (tmp_path / ".removing-c").mkdir()
    seen = remove_leftovers(tmp_path)
    assert seen == [".removing-c", ".replaced-a", ".replaced-b", ".writing-file", ".writing-xyz"]
    assert sorted(os.listdir(tmp_path)) == ["a", "b"]
    assert holds(tmp_path / "a", FILES)
    assert remove_leftovers(tmp_path) == []


WRITER = """
import sys
from pathlib import Path
from stream.durable import write_file, write_folder
parent = Path(sys.argv[1])
for i in range(1, 100000):
    write_folder(parent, "a", {"n": b"%d" % i * 50000, "m": b"%d" % -i}, {"i": i})
    write_file(parent / "one", b"%d\\n" % i)
    print(i, flush=True)
"""


@pytest.mark.parametrize("after_ms", [0, 1, 2, 3, 5, 8, 13, 21])
def test_a_writer_killed_at_any_instant_leaves_a_whole_folder(tmp_path: Path, after_ms: int) -> None:
    with subprocess.Popen(
        [sys.executable, "-c", WRITER, str(tmp_path)], stdout=subprocess.PIPE, text=True, cwd=ROOT
    ) as writer:
        assert writer.stdout is not None
        last = int(writer.stdout.readline())
        time.sleep(after_ms / 1000)
        writer.send_signal(signal.SIGKILL)
        last = int(([str(last), *writer.stdout.read().split()])[-1])
    remove_leftovers(tmp_path)
    assert sorted(os.listdir(tmp_path)) == ["a", "one"]
    number = verify_folder(tmp_path / "a")["i"]
    assert number in (last, last + 1)
    assert (tmp_path / "a" / "m").read_bytes() == b"%d" % -number
    assert int((tmp_path / "one").read_bytes()) in (last, last + 1)


def test_every_flipped_byte_is_found_and_named(tmp_path: Path) -> None:
    folder = write_folder(
        tmp_path, "a", {"one.bin": b"0123456789" * 9, "two.txt": b"\0"}, {"v": [1, 2.5, "x"]}
    )
    for path in folder.iterdir():
        whole = path.read_bytes()
        for position in range(len(whole)):
            for bit in (1, 0x20, 0x80):
                path.write_bytes(whole[:position] + bytes([whole[position] ^ bit]) + whole[position + 1 :])
                with pytest.raises(BadData, match=path.name):
                    verify_folder(folder)
        path.write_bytes(whole)
    verify_folder(folder)


def test_every_truncation_zero_tail_and_extension_is_found(tmp_path: Path) -> None:
    folder = write_folder(tmp_path, "a", {"one.bin": b"0123456789" * 9}, {"v": 1})
    for path in folder.iterdir():
        whole = path.read_bytes()
        for length in range(len(whole)):
            for damaged in (whole[:length], whole[:length] + bytes(len(whole) - length)):
                path.write_bytes(damaged)
                with pytest.raises(BadData, match=path.name):
                    verify_folder(folder)
        path.write_bytes(whole + b"\0")
        with pytest.raises(BadData, match=path.name):
            verify_folder(folder)
        path.write_bytes(whole)
    verify_folder(folder)


def test_damage_is_told_with_what_was_expected_and_found(tmp_path: Path) -> None:
    folder = write_folder(tmp_path, "a", FILES, {})
    (folder / "two.txt").write_bytes(b"short")
    with pytest.raises(BadData, match=r"two\.txt: expected size 7, found 5"):
        verify_folder(folder)
    (folder / "two.txt").write_bytes(b"eleveN\n")
    with pytest.raises(BadData, match=r"two\.txt: expected crc32c [0-9a-f]{8}, found [0-9a-f]{8}"):
        verify_folder(folder)
    (folder / "two.txt").unlink()
    with pytest.raises(BadData, match=r"two\.txt: expected a file, found: No such file"):
        verify_folder(folder)
    (folder / "two.txt").mkdir()
    with pytest.raises(BadData, match=r"two\.txt"):
        verify_folder(folder)
    (folder / MANIFEST).unlink()
    with pytest.raises(BadData, match=r"manifest\.json"):
        verify_folder(folder)
    with pytest.raises(InputMissing, match="nothing"):
        verify_folder(tmp_path / "nothing")


def test_a_pipe_or_link_in_place_of_a_file_is_refused_without_hanging(tmp_path: Path) -> None:
    folder = write_folder(tmp_path, "a", FILES, {})
    (folder / "two.txt").unlink()
    os.mkfifo(folder / "two.txt")
    with pytest.raises(BadData, match="plain file"):
        verify_folder(folder)
    (folder / "two.txt").unlink()
    (tmp_path / "elsewhere").write_bytes(FILES["two.txt"])
    (folder / "two.txt").symlink_to(tmp_path / "elsewhere")
    with pytest.raises(BadData, match=r"two\.txt"):
        verify_folder(folder)


def test_a_manifest_cannot_point_outside_its_folder(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "a" / MANIFEST).write_bytes(manifest_bytes({}, {"../secret": {"size": 0}}))
    with pytest.raises(BadData, match="secret"):
        verify_folder(tmp_path / "a")


def test_a_disk_that_cannot_give_bytes_back_counts_as_damage(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = write_folder(tmp_path, "a", FILES, {})
    real = os.open

    def bad_sector(path: Any, *args: Any, **kwargs: Any) -> int:
        if str(path).endswith("two.txt"):
            raise OSError(errno.EIO, "Input/output error")
        return real(path, *args, **kwargs)

    monkeypatch.setattr(os, "open", bad_sector)
    with pytest.raises(BadData, match=r"two\.txt.*Input/output error"):
        verify_folder(folder)


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False, allow_infinity=False) | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=12,
)


@given(st.dictionaries(st.text(max_size=5), json_values, max_size=4))
def test_a_manifest_reads_back_whatever_it_holds(about: dict[str, Any]) -> None:
    about = {key: value for key, value in about.items() if key not in ("files", "manifest_sha256")}
    text = manifest_bytes(about, {})
    read = json.loads(text)
    assert {key: read[key] for key in about} == about
    assert canonical_json(read) == text


@given(st.text(alphabet='\udc80\udcff\x00\n"\\ä \U0001f4e6', max_size=8))
def test_a_manifest_keeps_any_text_even_file_names_that_are_no_utf8(text: str) -> None:
    assert json.loads(manifest_bytes({"text": text}, {}))["text"] == text


def test_a_manifest_with_a_false_sum_line_inside_a_value_is_read_right(tmp_path: Path) -> None:
    trap = '\n "manifest_sha256": "' + "0" * 64 + '"'
    folder = write_folder(tmp_path, "a", {}, {"trap": trap, "deep": {"manifest_sha256": "0" * 64}})
    assert read_manifest(folder)["trap"] == trap


def test_undefined_numbers_are_refused_in_a_manifest() -> None:
    with pytest.raises(ValueError):
        canonical_json({"auc": float("nan")})
    with pytest.raises(ValueError, match="files"):
        manifest_bytes({"files": 1}, {})


def test_one_file_is_replaced_whole_or_not_at_all(tmp_path: Path) -> None:
    path = tmp_path / "one"
    write_file(path, b"old")
    counting = Faults(10**9, errno.EIO, False)
    with counting.injected():
        write_file(path, b"old")
    for step in range(counting.calls):
        write_file(path, b"old")
        faults = Faults(step, errno.ENOSPC, False)
        with faults.injected(), pytest.raises(CannotCreate):
            write_file(path, b"newer")
        after_rename = faults.failed[0][1] == str(tmp_path)
        assert path.read_bytes() == (b"newer" if after_rename else b"old")
        assert os.listdir(tmp_path) == ["one"]
    assert stat.S_IMODE(path.stat().st_mode) == 0o600


def test_one_file_does_not_replace_a_device_or_folder_and_follows_a_link(tmp_path: Path) -> None:
    (tmp_path / "folder").mkdir()
    for path in (tmp_path / "folder", Path("/dev/null")):
        with pytest.raises(CannotCreate, match="no plain file"):
            write_file(path, b"x")
    (tmp_path / "link").symlink_to(tmp_path / "target")
    write_file(tmp_path / "link", b"x")
    assert (tmp_path / "target").read_bytes() == b"x"
    assert (tmp_path / "link").is_symlink()


dtypes = ["?", "u1", "i1", "i2", "u2", "f2", "i4", "u4", "f4", "f8", "i8", "u8"]


@st.composite
def named_arrays(draw: st.DrawFn) -> dict[str, np.ndarray]:
    arrays = {}
    for name in draw(st.lists(st.text(st.characters(codec="utf-8"), min_size=1, max_size=6), max_size=5)):
        shape = tuple(draw(st.lists(st.integers(0, 3), min_size=1, max_size=3)))
        count = int(np.prod(shape))
        raw = draw(st.lists(st.integers(0, 1), min_size=count, max_size=count))
        arrays[name] = np.array(raw, draw(st.sampled_from(dtypes))).reshape(shape)
    arrays.pop("__metadata__", None)
    return arrays


@given(arrays=named_arrays())
def test_arrays_are_to_the_byte_what_the_safetensors_library_writes(
    tmp_path_factory: pytest.TempPathFactory, arrays: dict[str, np.ndarray]
) -> None:
    parent = tmp_path_factory.mktemp("arrays")
    folder = write_array_folder(parent, "a", arrays, {})
    assert (folder / ARRAYS).read_bytes() == safetensors.numpy.save(arrays)
    _, back = read_array_folder(folder)
    assert back.keys() == arrays.keys()
    for name, array in arrays.items():
        assert back[name].dtype == array.dtype
        assert back[name].shape == array.shape
        assert back[name].tobytes() == array.tobytes()


def test_arrays_in_any_memory_order_come_back_the_same(tmp_path: Path) -> None:
    grid = np.arange(12, dtype=np.float64).reshape(3, 4)
    arrays = {
        "turned": grid.T,
        "skipping": grid[:, ::2],
        "swapped": grid.astype(">f8"),
        "frozen": grid.copy(),
    }
    arrays["frozen"].flags.writeable = False
    write_array_folder(tmp_path, "a", arrays, {})
    _, back = read_array_folder(tmp_path / "a")
    for name, array in arrays.items():
        assert np.array_equal(back[name], array), name
        assert back[name].flags.writeable


def test_an_array_of_objects_or_texts_is_refused(tmp_path: Path) -> None:
    for array in (np.array([{}]), np.array(["x"]), np.array([1j])):
        with pytest.raises(TypeError, match="dtype"):
            write_array_folder(tmp_path, "a", {"x": array}, {})


def test_damaged_arrays_are_never_loaded(tmp_path: Path) -> None:
    folder = write_array_folder(tmp_path, "a", {"x": np.arange(5), "y": np.ones(3, np.float32)}, {})
    path = folder / ARRAYS
    whole = path.read_bytes()
    for position in range(len(whole)):
        for damaged in (
            whole[:position] + bytes([whole[position] ^ 0x10]) + whole[position + 1 :],
            whole[:position],
            whole[: position + 1] + b"\0" + whole[position + 1 :],
        ):
            path.write_bytes(damaged)
            with pytest.raises(BadData, match=r"expected (size|crc32c)"):
                read_array_folder(folder)


@pytest.mark.parametrize(
    "raw",
    [
        b"",
        b"\xff" * 8,
        (2).to_bytes(8, "little") + b"[]",
        (2).to_bytes(8, "little") + b"{}x",
        (61).to_bytes(8, "little")
        + b'{"x":{"dtype":"F64","shape":[1e99],"data_offsets":[0,8]}}    '
        + bytes(8),
        (61).to_bytes(8, "little")
        + b'{"x":{"dtype":"U8","shape":[-1,-8],"data_offsets":[0,8]}}    '
        + bytes(8),
    ],
)
def test_a_file_that_is_no_safetensors_is_refused_even_with_right_sums(tmp_path: Path, raw: bytes) -> None:
    folder = write_folder(tmp_path, "a", {ARRAYS: raw}, {})
    with pytest.raises(BadData, match="no safetensors file"):
        read_array_folder(folder)
    with pytest.raises(safetensors.SafetensorError):
        safetensors.numpy.load(raw)


def test_writing_and_reading_arrays_holds_every_byte_once(tmp_path: Path) -> None:
    script = """
import sys
import numpy as np
from pathlib import Path
from stream.arrays_file import read_array_folder, write_array_folder
def peak():
    return int(open("/proc/self/status").read().split("VmHWM:")[1].split()[0]) // 1024
if sys.argv[2] == "write":
    state = np.ones((2_000_000, 4))
    before = peak()
    write_array_folder(Path(sys.argv[1]), "a", {"state": state}, {})
else:
    before = peak()
    read_array_folder(Path(sys.argv[1]) / "a")
print(peak() - before)
"""
    grown = [
        int(
            subprocess.run(
                [sys.executable, "-c", script, str(tmp_path), step], capture_output=True, check=True, cwd=ROOT
            ).stdout
        )
        for step in ("write", "read")
    ]
    assert grown[0] < 10  # MiB, against 61 of data
    assert 55 < grown[1] < 75
