"""Checkpoints: the newest whole one is found, broken ones move aside, none is passed over silently."""

import errno
import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.arrays_file import ARRAYS
from stream.checkpoints import Checkpoints
from stream.durable import write_folder
from stream.errors import BadData, BadSettings, FileTrouble, InputMissing
from stream.fingerprint import differences, fingerprint_difference
from stream.manifest import MANIFEST
from stream.settings.models import Settings

ROOT = Path(__file__).parent.parent


def state(messages: int) -> dict[str, np.ndarray]:
    return {
        "addresses": np.arange(messages, dtype=np.uint64),
        "state": np.full((messages, 3), messages + 0.5),
        "names": np.frombuffer(b"route\x1fR7", np.uint8),
    }


def about(messages: int) -> dict[str, Any]:
    return {"position": {"file": 0, "offset": messages * 7}, "settings": {"l1": 0.1}, "program": "0.1.0"}


def filled(folder: Path, *numbers: int, keep: int = 10) -> Checkpoints:
    checkpoints = Checkpoints(folder, keep)
    for number in numbers:
        checkpoints.write(number, state(number), about(number))
    return checkpoints


def names(folder: Path) -> list[str]:
    return sorted(os.listdir(folder))


def damage(path: Path) -> None:
    raw = bytearray(path.read_bytes())
    raw[len(raw) // 2] ^= 1
    path.write_bytes(raw)


def test_the_newest_checkpoint_comes_back_as_it_was_written(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path / "c", 5, 30, 200)
    newest = checkpoints.newest()
    assert newest is not None
    assert newest.path == tmp_path / "c" / "000000000000200"
    assert newest.messages == 200
    assert newest.about == about(200)
    assert newest.moved_aside == ()
    assert newest.arrays.keys() == state(200).keys()
    for name, array in state(200).items():
        assert np.array_equal(newest.arrays[name], array)
        assert newest.arrays[name].dtype == array.dtype


def test_a_new_state_has_no_checkpoint(tmp_path: Path) -> None:
    assert Checkpoints(tmp_path / "c", 3).newest() is None
    (tmp_path / "c").mkdir()
    assert Checkpoints(tmp_path / "c", 3).newest() is None
    assert Checkpoints(tmp_path / "c", 3).list() == ()


def test_only_the_newest_few_are_kept(tmp_path: Path) -> None:
    filled(tmp_path, 1, 20, 300, 4000, keep=2)
    assert names(tmp_path) == ["000000000000300", "000000000004000"]


def test_equal_content_gives_equal_bytes_and_an_equal_name(tmp_path: Path) -> None:
    one = filled(tmp_path / "one", 10).write(20, state(20), about(20))
    reordered = dict(reversed(state(20).items()))
    two = Checkpoints(tmp_path / "two", 1).write(20, reordered, dict(reversed(about(20).items())))
    assert one.name == two.name
    for file in (MANIFEST, ARRAYS):
        assert (one / file).read_bytes() == (two / file).read_bytes()
    assert names(one) == names(two) == [ARRAYS, MANIFEST]


def test_writing_the_same_moment_again_with_other_content_replaces_it(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path, 10)
    checkpoints.write(10, state(11), about(10))
    newest = checkpoints.newest()
    assert newest is not None
    assert len(newest.arrays["addresses"]) == 11
    assert names(tmp_path) == ["000000000000010"]


@pytest.mark.parametrize("file", [ARRAYS, MANIFEST])
@pytest.mark.parametrize("how", ["flipped", "truncated", "zero tail", "missing"])
def test_a_broken_newest_checkpoint_moves_aside_and_the_older_one_is_taken(
    tmp_path: Path, file: str, how: str
) -> None:
    checkpoints = filled(tmp_path, 10, 20, 30)
    for number in (20, 30):
        path = tmp_path / f"{number:015d}" / file
        raw = path.read_bytes()
        if how == "flipped":
            damage(path)
        elif how == "truncated":
            path.write_bytes(raw[:-7])
        elif how == "zero tail":
            path.write_bytes(raw[:-20] + bytes(20))
        else:
            path.unlink()
    newest = checkpoints.newest()
    assert newest is not None
    assert newest.messages == 10
    assert len(newest.moved_aside) == 2
    assert "000000000000030" in newest.moved_aside[0]
    assert file in newest.moved_aside[0]
    assert str(tmp_path / "broken" / "000000000000030") in newest.moved_aside[0]
    assert names(tmp_path) == ["000000000000010", "broken"]
    assert names(tmp_path / "broken") == ["000000000000020", "000000000000030"]
    again = checkpoints.newest()
    assert again is not None
    assert again.moved_aside == ()


def test_the_same_checkpoint_broken_twice_keeps_both_for_a_look(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path, 10)
    for _ in range(2):
        checkpoints.write(20, state(20), about(20))
        damage(tmp_path / "000000000000020" / ARRAYS)
        checkpoints.newest()
    assert names(tmp_path / "broken") == ["000000000000020", "000000000000020-2"]


def test_with_only_broken_checkpoints_it_refuses_now_and_later(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path, 10, 20)
    for number in (10, 20):
        damage(tmp_path / f"{number:015d}" / ARRAYS)
    for _ in range(2):
        with pytest.raises(BadData, match=r"does not start from nothing.*broken.*another state\.folder"):
            checkpoints.newest()


@given(position=st.integers(0, 10**9), change=st.integers(1, 255), data=st.data())
def test_no_single_damaged_byte_is_ever_loaded(
    tmp_path_factory: pytest.TempPathFactory, position: int, change: int, data: st.DataObject
) -> None:
    folder = tmp_path_factory.mktemp("c")
    checkpoints = filled(folder, 3, 9)
    path = folder / "000000000000009" / data.draw(st.sampled_from([ARRAYS, MANIFEST]))
    raw = bytearray(path.read_bytes())
    raw[position % len(raw)] ^= change
    path.write_bytes(raw)
    assert [entry.trouble is None for entry in checkpoints.list()] == [False, True]
    newest = checkpoints.newest()
    assert newest is not None
    assert newest.messages == 3


def test_a_list_shows_every_checkpoint_with_its_trouble_and_moves_nothing(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path, 10, 20)
    damage(tmp_path / "000000000000010" / ARRAYS)
    newer, older = checkpoints.list()
    assert (newer.name, newer.messages, newer.trouble) == ("000000000000020", 20, None)
    assert newer.size_bytes == sum(p.stat().st_size for p in newer.path.iterdir())
    assert older.trouble is not None
    assert ARRAYS in older.trouble
    assert names(tmp_path) == ["000000000000010", "000000000000020"]


def test_restore_makes_an_older_one_the_newest_and_destroys_nothing(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path, 10, 20, 30)
    chosen, moved = checkpoints.restore("10")
    assert chosen == tmp_path / "000000000000010"
    assert sorted(path.name for path in moved) == ["000000000000020", "000000000000030"]
    assert all((path / MANIFEST).exists() for path in moved)
    newest = checkpoints.newest()
    assert newest is not None
    assert newest.messages == 10
    assert checkpoints.restore("000000000000010") == (chosen, ())


def test_restore_refuses_what_is_not_there_or_broken_and_moves_nothing(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path, 10, 20)
    for name in ("15", "latest", "../x", "", "-10", "1" * 30):
        with pytest.raises(InputMissing, match=r"there are: 000000000000020, 000000000000010"):
            checkpoints.restore(name)
    damage(tmp_path / "000000000000010" / ARRAYS)
    with pytest.raises(BadData, match=ARRAYS):
        checkpoints.restore("10")
    assert names(tmp_path) == ["000000000000010", "000000000000020"]


def test_a_checkpoint_of_a_later_program_is_refused_and_stays_where_it_is(tmp_path: Path) -> None:
    checkpoints = filled(tmp_path, 10)
    later = {"format": "bedload checkpoint", "format_version": 2, "messages": 20, "about": {}}
    write_folder(tmp_path, "000000000000020", {ARRAYS: (2).to_bytes(8, "little") + b"{}"}, later)
    with pytest.raises(BadSettings, match=r"expected format_version 1, found 2"):
        checkpoints.newest()
    assert names(tmp_path) == ["000000000000010", "000000000000020"]


def test_a_failed_write_keeps_the_older_ones_even_when_only_one_is_kept(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    checkpoints = filled(tmp_path, 10, keep=1)

    def broken_disk(descriptor: int) -> None:
        raise OSError(errno.EIO, "Input/output error")

    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", broken_disk)
        with pytest.raises(FileTrouble, match=r"000000000000020: Input/output error.*kept"):
            checkpoints.write(20, state(20), about(20))
    newest = checkpoints.newest()
    assert newest is not None
    assert newest.messages == 10
    checkpoints.write(20, state(20), about(20))
    assert names(tmp_path) == ["000000000000020"]


WRITER = """
import sys
import numpy as np
from pathlib import Path
from stream.checkpoints import Checkpoints
from stream.state_folder import StateFolder
folder = StateFolder(Path(sys.argv[1]))
checkpoints = Checkpoints(folder.checkpoints, 2)
newest = checkpoints.newest()
at = newest.messages if newest else 0
assert newest is None or (newest.arrays["x"] == at).all() and not newest.moved_aside
print(at, flush=True)
while True:
    at += 1
    checkpoints.write(at, {"x": np.full(20000, at)}, {"at": at})
    print(at, flush=True)
"""


def test_killed_again_and_again_each_start_finds_the_last_whole_checkpoint(tmp_path: Path) -> None:
    last = 0
    for round_number in range(8):
        with subprocess.Popen(
            [sys.executable, "-c", WRITER, str(tmp_path / "s")], stdout=subprocess.PIPE, text=True, cwd=ROOT
        ) as writer:
            assert writer.stdout is not None
            resumed = int(writer.stdout.readline())
            assert resumed in (last, last + 1)
            assert int(writer.stdout.readline()) == resumed + 1
            time.sleep(0.003 * round_number)
            writer.send_signal(signal.SIGKILL)
            last = int([str(resumed + 1), *writer.stdout.read().split()][-1])
    assert last >= 8
    kept = [name for name in names(tmp_path / "s" / "checkpoints") if not name.startswith(".")]
    assert 2 <= len(kept) <= 3
    assert all(entry.trouble is None for entry in Checkpoints(tmp_path / "s" / "checkpoints", 2).list())


def test_a_difference_of_feature_spaces_is_shown_by_setting() -> None:
    def space(**changes: Any) -> dict[str, Any]:
        fields = [{"path": "route", "kind": "category"}, {"path": "note", "kind": "words"}]
        return Settings.model_validate({"fields": fields, **changes}).fingerprint()

    assert fingerprint_difference(space(), space()) == []
    assert fingerprint_difference(space(), space(space={"seed": 7})) == ["space.seed: 0 here, 7 there"]
    pairs = [{"path": "route", "kind": "category"}, {"path": "note", "kind": "words", "pairs": True}]
    assert fingerprint_difference(space(), space(fields=pairs)) == [
        "fields.note.pairs: false here, true there"
    ]
    other = [{"path": "route", "kind": "category"}, {"path": "kg", "kind": "quantity"}]
    lines = fingerprint_difference(space(), space(fields=other))
    assert [line.split(":")[0] for line in lines] == ["fields.kg", "fields.note"]
    assert lines[0].startswith("fields.kg: missing here, {")
    assert fingerprint_difference(space(), space(fields=pairs[:0])) != []
    turned = [{"path": "note", "kind": "words"}, {"path": "route", "kind": "category"}]
    assert fingerprint_difference(space(), space(fields=turned)) == [
        "fields: order route, note here, note, route there"
    ]
    crossed = space(crosses=[{"paths": ["route", "note"]}])
    assert fingerprint_difference(crossed, space()) == ['crosses: [["route", "note"]] here, [] there']


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.text(max_size=3),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(["name", "a", "b"]), inner),
    max_leaves=8,
)


@given(json_values, json_values)
def test_two_values_have_a_difference_exactly_when_they_differ(one: Any, two: Any) -> None:
    assert differences(one, one) == []
    same = repr(sort(one)) == repr(sort(two))  # repr: 1 and True are different settings
    assert (differences(one, two) == []) == same


def sort(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: sort(value[key]) for key in sorted(value)}
    return [sort(item) for item in value] if isinstance(value, list) else value
