"""Snapshots: read back as written, by us and by plain Python, never when damaged; pins, compare, export."""

import csv
import errno
import json
import os
import re
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import safetensors.numpy
from hypothesis import given
from hypothesis import strategies as st

from stream.arrays_file import ARRAYS, write_array_folder
from stream.durable import remove_leftovers
from stream.errors import BadData, BadSettings, FileTrouble, InputMissing, UsageError
from stream.manifest import MANIFEST
from stream.snapshots import About, Snapshots, compare, export, read_snapshot
from stream.token_names import field_and_token, readable
from stream.weights import Weights

FINGERPRINT = {"address_bits": 40, "seed": 0, "fields": [{"name": "route", "kind": "category"}]}
ABOUT = About(
    settings={"learner": {"l1_per_example": 1e-4}},
    metrics={"log_loss": 0.25, "auc": None},
    calibration={"ratio": 1.01},
    program="0.1.0",
)


def weights(values: dict[int, float] | None = None, **changes: Any) -> Weights:
    values = {7: 0.1, 2**40 - 1: -2.5, 300: 1e-30} if values is None else values
    order = sorted(values)
    made = Weights(
        addresses=np.array(order, np.uint64),
        values=np.array([values[a] for a in order], np.float32),
        names=tuple(b"route\x1fR%d" % a if a != 300 else b"" for a in order),
        messages=np.arange(1, len(order) + 1) * 1e9,
        intercept=-1.2345678901234567,
        learned=12_345,
        fingerprint=FINGERPRINT,
    )
    return replace(made, **changes)


def same(one: Weights, two: Weights) -> bool:
    return (
        all(np.array_equal(getattr(one, n), getattr(two, n)) for n in ("addresses", "values", "messages"))
        and all(getattr(one, n) == getattr(two, n) for n in ("names", "intercept", "learned", "fingerprint"))
        and one.values.dtype == two.values.dtype == np.float32
        and one.addresses.dtype == two.addresses.dtype == np.uint64
    )


def filled(folder: Path, *numbers: int, keep: int = 10) -> Snapshots:
    snapshots = Snapshots(folder, keep)
    for number in numbers:
        snapshots.write(number, weights({1: float(number)}), ABOUT)
    return snapshots


def name(number: int) -> str:
    return f"{number:015d}"


def listed(snapshots: Snapshots) -> list[str]:
    return [entry.name for entry in snapshots.list()]


def damage(path: Path) -> None:
    raw = bytearray(path.read_bytes())
    raw[-1] ^= 1
    path.write_bytes(raw)


def test_a_snapshot_comes_back_as_it_was_written(tmp_path: Path) -> None:
    path = Snapshots(tmp_path, 3).write(20_000, weights(), ABOUT)
    assert path == tmp_path / "000000000020000"
    snapshot = read_snapshot(path)
    assert same(snapshot.weights, weights())
    assert (snapshot.about, snapshot.messages, snapshot.path) == (ABOUT, 20_000, path)
    assert snapshot.passed_over == ()


def test_a_snapshot_without_any_weight_is_a_snapshot(tmp_path: Path) -> None:
    path = Snapshots(tmp_path, 3).write(1, weights({}), About())
    assert same(read_snapshot(path).weights, weights({}))


def test_equal_content_gives_equal_bytes(tmp_path: Path) -> None:
    paths = [Snapshots(tmp_path / where, 3).write(5, weights(), ABOUT) for where in ("a", "b")]
    for file in (MANIFEST, ARRAYS):
        assert (paths[0] / file).read_bytes() == (paths[1] / file).read_bytes()


def docs_code() -> dict[str, Any]:
    text = (Path(__file__).parent.parent / "docs" / "snapshot-format.md").read_text()
    space: dict[str, Any] = {}
    for block in re.findall(r"```python\n(.*?)```", text, re.DOTALL):
        assert "stream" not in block
        exec(block, space)
    return space


@pytest.mark.filterwarnings("ignore::ResourceWarning")
def test_the_reader_in_the_docs_reads_a_snapshot_in_plain_python(tmp_path: Path) -> None:
    path = Snapshots(tmp_path, 3).write(5, weights(), ABOUT)
    intercept, rows = docs_code()["read_snapshot"](path)
    w = weights()
    assert intercept == w.intercept
    assert rows == [
        (int(a), n.decode(), float(v)) for a, n, v in zip(w.addresses, w.names, w.values, strict=True)
    ]


@pytest.mark.filterwarnings("ignore::ResourceWarning")
def test_the_check_in_the_docs_finds_a_damaged_manifest(tmp_path: Path) -> None:
    path = Snapshots(tmp_path, 3).write(5, weights(), ABOUT)
    is_whole = docs_code()["manifest_is_whole"]
    assert is_whole(path)
    text = (path / MANIFEST).read_bytes()
    (path / MANIFEST).write_bytes(text.replace(b'"nnz": 3', b'"nnz": 2'))
    assert not is_whole(path)


def test_the_docs_name_every_key_and_array_of_a_snapshot(tmp_path: Path) -> None:
    path = Snapshots(tmp_path, 3).write(5, weights(), ABOUT)
    text = (Path(__file__).parent.parent / "docs" / "snapshot-format.md").read_text()
    arrays = safetensors.numpy.load_file(path / ARRAYS)
    for key in (*json.loads((path / MANIFEST).read_bytes()), *arrays):
        assert f"`{key}`" in text
    assert {key: str(array.dtype) for key, array in arrays.items()} == {
        "addresses": "uint64",
        "weights": "float32",
        "messages": "float64",
        "name_offsets": "int64",
        "names": "uint8",
    }


@given(position=st.integers(0, 10**9), change=st.integers(1, 255), file=st.sampled_from([ARRAYS, MANIFEST]))
def test_a_damaged_byte_is_found_by_check_and_never_loaded(
    tmp_path_factory: pytest.TempPathFactory, position: int, change: int, file: str
) -> None:
    snapshots = filled(tmp_path_factory.mktemp("s"), 10, 20)
    path = snapshots.folder / name(20) / file
    raw = bytearray(path.read_bytes())
    raw[position % len(raw)] ^= change
    path.write_bytes(raw)
    (newest, trouble), (older, fine) = snapshots.check()
    assert (newest, older, fine) == (name(20), name(10), None)
    assert trouble is not None
    assert file in trouble
    with pytest.raises(BadData, match=file):
        snapshots.load("20")
    loaded = snapshots.load()
    assert loaded.messages == 10
    assert loaded.passed_over == (trouble,)


@pytest.mark.parametrize("file", [ARRAYS, MANIFEST])
def test_truncated_and_zero_tailed_files_are_found_by_check_and_never_loaded(
    tmp_path: Path, file: str
) -> None:
    snapshots = filled(tmp_path, 20)
    path = snapshots.folder / name(20) / file
    raw = path.read_bytes()
    for length in range(0, len(raw), 7):
        for damaged in (raw[:length], raw[:length] + bytes(len(raw) - length)):
            path.write_bytes(damaged)
            assert file in str(snapshots.check()[0][1])
            with pytest.raises(BadData, match="no snapshot is whole"):
                snapshots.load()


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"addresses": np.array([1, 1, 2], np.uint64)}, "do not ascend"),
        ({"values": np.array([1, 0, 2], np.float32)}, "zero or not finite"),
        ({"values": np.array([1, np.inf, 2], np.float32)}, "zero or not finite"),
        ({"messages": np.ones(2)}, "expected 3 messages"),
        ({"names": (b"a",)}, "expected 4 name_offsets"),
        ({"intercept": float("inf")}, "intercept"),
    ],
)
def test_weights_that_break_their_rules_are_not_written(
    tmp_path: Path, changes: dict[str, Any], said: str
) -> None:
    with pytest.raises(ValueError, match=said):
        Snapshots(tmp_path, 3).write(5, replace(weights(), **changes), ABOUT)
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize(
    ("array", "value"),
    [
        ("weights", np.zeros(3, np.float32)),
        ("weights", np.ones(3, np.float64)),
        ("addresses", np.array([3, 2, 1], np.uint64)),
        ("name_offsets", np.array([0, 9, 3, 4])),
        ("name_offsets", np.array([0, 1, 2, 10**9])),
        ("messages", None),
    ],
)
def test_a_foreign_snapshot_that_breaks_the_format_is_refused(tmp_path: Path, array: str, value: Any) -> None:
    path = Snapshots(tmp_path, 3).write(5, weights(), ABOUT)
    manifest = json.loads((path / MANIFEST).read_bytes())
    arrays = {**safetensors.numpy.load_file(path / ARRAYS), array: value}
    arrays = {key: item for key, item in arrays.items() if item is not None}
    own = {key: item for key, item in manifest.items() if key not in ("files", "manifest_sha256")}
    foreign = write_array_folder(tmp_path, "foreign", arrays, own)
    with pytest.raises(BadData, match="foreign"):
        read_snapshot(foreign)


@pytest.mark.parametrize(
    ("change", "said"),
    [({"format_version": 9}, "format_version 9.*knows 1"), ({"format": "another"}, "found 'another'")],
)
def test_an_unknown_format_is_refused_saying_what_is_known(
    tmp_path: Path, change: dict[str, Any], said: str
) -> None:
    own = {"format": "bedload snapshot", "format_version": 1, **change}
    path = write_array_folder(tmp_path, name(7), {}, own)
    with pytest.raises(BadData, match=said):
        read_snapshot(path)
    assert re.search(said, str(Snapshots(tmp_path, 3).list()[0].trouble))


def test_without_snapshots_the_message_says_how_to_get_one(tmp_path: Path) -> None:
    for folder in (tmp_path, tmp_path / "nowhere"):
        with pytest.raises(InputMissing, match="bedload replay"):
            Snapshots(folder, 3).load()
        assert Snapshots(folder, 3).list() == ()


def test_a_list_is_newest_first_and_shows_what_each_holds(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 10, 200)
    snapshots.pin("10")
    damage(tmp_path / name(200) / MANIFEST)
    newer, older = snapshots.list()
    assert (newer.name, newer.messages, newer.pinned, newer.manifest) == (name(200), 200, False, {})
    assert MANIFEST in str(newer.trouble)
    assert (older.name, older.messages, older.pinned, older.trouble) == (name(10), 10, True, None)
    assert older.manifest["metrics"] == ABOUT.metrics
    assert older.size_bytes == sum(file.stat().st_size for file in older.path.iterdir())


def test_a_snapshot_is_found_by_name_or_number_and_by_nothing_else(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 10, 200)
    assert snapshots.find("200") == snapshots.find(name(200)) == tmp_path / name(200)
    for wrong in ("20", "pinned", "..", f"../{tmp_path.name}/{name(10)}", "earlier-1-" + name(10)):
        with pytest.raises(InputMissing, match=f"there are: {name(200)}, {name(10)}"):
            snapshots.find(wrong)


def test_old_snapshots_go_but_never_a_pinned_one_or_the_one_in_use(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 1, 2, 3)
    snapshots.pin("1")
    snapshots.use("2")
    kept = filled(tmp_path, 4, 5, 6, keep=2)
    assert listed(kept) == [name(n) for n in (6, 5, 2, 1)]
    assert kept.load().messages == 2
    kept.use(None)
    kept.unpin("1")
    assert kept.load().messages == 6
    assert kept.prune() == (name(2), name(1))
    assert kept.prune() == ()
    assert listed(kept) == [name(6), name(5)]


def test_a_broken_snapshot_does_not_push_out_a_whole_one(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 1, 2, 3, keep=3)
    damage(tmp_path / name(3) / MANIFEST)
    damage(tmp_path / name(1) / MANIFEST)
    assert Snapshots(tmp_path, 1).prune() == (name(1),)
    assert listed(snapshots) == [name(3), name(2)]


def test_current_leads_to_the_snapshot_that_readers_take(tmp_path: Path) -> None:
    current = tmp_path / "current"
    snapshots = filled(tmp_path, 10, 20, 30, keep=2)
    assert os.readlink(current) == name(30) and read_snapshot(current).messages == 30
    snapshots.use(name(20))
    assert os.readlink(current) == name(20)
    filled(tmp_path, 40, 50, keep=2)
    assert os.readlink(current) == name(20), "as long as it is the one in use"
    snapshots.use(None)
    assert os.readlink(current) == name(50)
    damage(tmp_path / name(50) / "manifest.json")
    filled(tmp_path, 45)
    assert os.readlink(current) == name(45), "what is of a history that was left, or broken, is no choice"
    snapshots.retire_after(-1)
    assert os.readlink(current) == f"earlier-2-{name(45)}"
    assert all(entry.name != "current" for entry in snapshots.list())


def test_a_copy_that_made_a_folder_of_the_link_is_put_right(tmp_path: Path) -> None:
    filled(tmp_path / "state", 10, 20)
    shutil.copytree(tmp_path / "state", tmp_path / "copy")
    current = tmp_path / "copy" / "current"
    assert current.is_dir() and not current.is_symlink()
    filled(tmp_path / "copy", 30)
    assert os.readlink(current) == name(30) and listed(Snapshots(tmp_path / "copy", 9))[0] == name(30)


def test_current_never_leads_nowhere_while_a_history_is_left(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    snapshots, seen = filled(tmp_path, 10, 20, 30), []
    rename = Snapshots._rename

    def watched(*args):
        seen.append((tmp_path / "current" / "manifest.json").exists())
        rename(*args)
        seen.append((tmp_path / "current" / "manifest.json").exists())

    monkeypatch.setattr(Snapshots, "_rename", watched)
    snapshots.retire_after(10)
    assert seen == [True] * 4 and os.readlink(tmp_path / "current") == name(10)


def test_a_link_that_was_not_finished_is_swept_away(tmp_path: Path) -> None:
    filled(tmp_path, 10)
    os.symlink(name(10), tmp_path / ".writing-0123456789abcdef")
    assert remove_leftovers(tmp_path) == [".writing-0123456789abcdef"]
    assert read_snapshot(tmp_path / name(10)).messages == 10


def test_the_one_in_use_is_checked_first_and_never_swapped_silently(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 1, 2)
    damage(tmp_path / name(1) / ARRAYS)
    with pytest.raises(BadData, match=ARRAYS):
        snapshots.use("1")
    assert snapshots.in_use() is None
    snapshots.use("2")
    assert snapshots.list()[0].in_use
    damage(tmp_path / name(2) / ARRAYS)
    with pytest.raises(BadData, match=ARRAYS):
        snapshots.load()
    (tmp_path / "in-use").write_text("../elsewhere\n")
    with pytest.raises(BadData, match="in-use"):
        snapshots.load()


def test_writing_the_same_snapshot_again_changes_nothing(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 10, 20)
    snapshots.pin("10")
    before = (tmp_path / name(10)).stat().st_ino
    filled(tmp_path, 10)
    assert (tmp_path / name(10)).stat().st_ino == before
    assert listed(snapshots) == [name(20), name(10)]


def test_snapshots_of_a_history_that_was_left_are_kept_as_earlier_ones(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 10, 20, 30)
    snapshots.pin("30")
    snapshots.use("20")
    other = weights({1: 99.0})
    snapshots.write(20, other, ABOUT)
    assert listed(snapshots) == [name(20), name(10), f"earlier-1-{name(30)}", f"earlier-1-{name(20)}"]
    assert snapshots.pinned() == {f"earlier-1-{name(30)}"}
    assert os.listdir(tmp_path / "pinned") == [f"earlier-1-{name(30)}"]
    assert snapshots.in_use() == f"earlier-1-{name(20)}"
    assert snapshots.load().weights.values[0] == 20
    snapshots.use(None)
    assert snapshots.load().weights.values[0] == 99
    assert snapshots.load(f"earlier-1-{name(30)}").weights.values[0] == 30


def test_starting_afresh_retires_all_and_readers_go_on_until_the_first_new_one(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 10, 2000)
    assert snapshots.retire_after(-1) == (
        (name(10), f"earlier-1-{name(10)}"),
        (name(2000), f"earlier-1-{name(2000)}"),
    )
    assert snapshots.retire_after(-1) == ()
    assert snapshots.load().messages == 2000
    filled(tmp_path, 50)
    assert snapshots.load().messages == 50
    snapshots.retire_after(-1)
    assert listed(snapshots) == [
        f"earlier-2-{name(50)}",
        f"earlier-1-{name(2000)}",
        f"earlier-1-{name(10)}",
    ]
    filled(tmp_path, 5, keep=2)
    assert listed(snapshots) == [name(5), f"earlier-2-{name(50)}"]


def test_a_failed_write_keeps_the_snapshots_that_were_there(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    snapshots = filled(tmp_path, 10, 20)

    def broken_disk(descriptor: int) -> None:
        raise OSError(errno.EIO, "Input/output error")

    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", broken_disk)
        with pytest.raises(FileTrouble):
            snapshots.write(20, weights({1: 99.0}), ABOUT)
    assert snapshots.load().weights.values[0] == 20
    assert snapshots.check() == ((name(20), None), (name(10), None))


def test_pinning_waits_for_pruning_to_end(tmp_path: Path) -> None:
    snapshots = filled(tmp_path, 1)
    script = "import sys; from pathlib import Path; from stream.snapshots import Snapshots;"
    script += "print('ready', flush=True); Snapshots(Path(sys.argv[1]), 1).pin('1')"
    with snapshots._still():
        pinning = subprocess.Popen(
            [sys.executable, "-c", script, str(tmp_path)],
            stdout=subprocess.PIPE,
            cwd=Path(__file__).parent.parent,
        )
        assert pinning.stdout is not None
        assert pinning.stdout.readline() == b"ready\n"
        with pytest.raises(subprocess.TimeoutExpired):
            pinning.wait(0.3)
        assert snapshots.pinned() == set()
    pinning.communicate()
    assert pinning.returncode == 0
    assert snapshots.pinned() == {name(1)}


def test_compare_tells_what_entered_left_flipped_and_moved_most() -> None:
    old = weights({1: 0.5, 2: -0.25, 3: 1.0, 4: 2.0, 5: -1.0, 9: 0.125}, intercept=-1.0, learned=100)
    new = weights({1: 0.5, 2: 0.25, 3: 1.5, 5: -4.0, 6: 0.75, 7: -3.0}, intercept=-2.0, learned=200)
    found = compare(old, new)
    assert found.nnz == (6, 6)
    assert found.size == (4.875, 10.0)
    assert found.intercept == (-1.0, -2.0)
    assert found.learned == (100, 200)
    counts = (found.kept_count, found.entered_count, found.left_count, found.flipped_count)
    assert counts == (4, 2, 2, 1)
    assert [(c.address, c.old, c.new) for c in found.entered] == [(7, 0.0, -3.0), (6, 0.0, 0.75)]
    assert [(c.address, c.old, c.new) for c in found.left] == [(4, 2.0, 0.0), (9, 0.125, 0.0)]
    assert [(c.address, c.old, c.new) for c in found.flipped] == [(2, -0.25, 0.25)]
    assert [c.address for c in found.moved] == [5, 2, 3]  # 2 and 3 moved as far: by address
    assert found.left[0].name == b"route\x1fR4"
    assert [c.address for c in compare(old, new, most=1).entered] == [7]


def test_compare_of_a_snapshot_with_itself_finds_nothing() -> None:
    found = compare(weights(), weights())
    assert (found.kept_count, found.entered_count, found.left_count, found.flipped_count) == (3, 0, 0, 0)
    assert found.entered == found.left == found.flipped == found.moved == ()
    assert compare(weights({}), weights({})).kept_count == 0


pairs = st.dictionaries(st.integers(0, 12), st.sampled_from([-2.0, -1.0, 1.0, 2.0]))


@given(pairs, pairs)
def test_compare_agrees_with_counting_by_hand(old: dict[int, float], new: dict[int, float]) -> None:
    found = compare(weights(old), weights(new))
    assert found.entered_count == len(new.keys() - old.keys())
    assert found.left_count == len(old.keys() - new.keys())
    assert found.kept_count == len(old.keys() & new.keys())
    assert found.flipped_count == sum(old[a] * new[a] < 0 for a in old.keys() & new.keys())
    assert {c.address for c in found.moved} == {a for a in old.keys() & new.keys() if old[a] != new[a]}


def test_compare_refuses_two_feature_spaces_and_shows_the_difference() -> None:
    with pytest.raises(BadSettings, match=r"old here, new there\): space\.seed: 0 here, 7 there"):
        compare(weights(), weights(fingerprint={**FINGERPRINT, "seed": 7}))


@pytest.mark.parametrize("format", ["csv", "json", "parquet"])
def test_an_export_reads_back_to_the_same_numbers_sorted_by_address(tmp_path: Path, format: str) -> None:
    tricky = weights(names=(b'note\x1f"x, y"\n=1', b"", "route&hour\x1fÄ\x1f08".encode()))
    path = tmp_path / f"out.{format}"
    path.write_bytes(b"what was there before")
    export(tricky, path, format)
    if format == "csv":
        with path.open(newline="") as file:
            header, *rows = csv.reader(file)
        assert header == ["address", "name", "weight"]
        read = [(int(a), n, float(w)) for a, n, w in rows]
    elif format == "json":
        read = [(row["address"], row["name"], row["weight"]) for row in json.loads(path.read_bytes())]
    else:
        from pyarrow import parquet

        table = parquet.read_table(path)
        assert [str(kind) for kind in table.schema.types] == ["uint64", "string", "float"]
        assert table.column_names == ["address", "name", "weight"]
        read = [tuple(row.values()) for row in table.to_pylist()]
    assert read == [
        (7, 'note="x, y"\\n=1', float(np.float32(0.1))),
        (300, "", float(np.float32(1e-30))),
        (2**40 - 1, "route&hour=Ä&08", -2.5),
    ]
    assert path.stat().st_mode & 0o777 == 0o600
    assert os.listdir(tmp_path) == [path.name]


@pytest.mark.parametrize("format", ["csv", "json", "parquet"])
def test_an_export_of_many_or_no_weights_is_whole(tmp_path: Path, format: str) -> None:
    for count in (0, 1, 10_000, 25_001):
        export(weights(dict.fromkeys(range(count), 1.0)), tmp_path / "out", format)
        if format == "csv":
            assert len((tmp_path / "out").read_text().splitlines()) == count + 1
        elif format == "json":
            assert [row["address"] for row in json.loads((tmp_path / "out").read_text())] == list(
                range(count)
            )
        else:
            from pyarrow import parquet

            assert parquet.read_table(tmp_path / "out").num_rows == count


def test_parquet_without_pyarrow_says_what_to_install(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(UsageError, match=r"install bedload\[parquet\], or choose csv or json"):
        export(weights(), tmp_path / "out", "parquet")
    export(weights(), tmp_path / "out", "csv")
    with pytest.raises(UsageError, match="csv, parquet, json"):
        export(weights(), tmp_path / "out", "xlsx")


def test_reading_snapshots_does_not_load_pyarrow_or_numba() -> None:
    script = "import sys, stream.snapshots; print(sorted({'pyarrow', 'numba', 'typer'} & sys.modules.keys()))"
    shown = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, check=True, cwd=Path(__file__).parent.parent
    )
    assert shown.stdout == b"[]\n"


@pytest.mark.parametrize(
    ("raw", "shown"),
    [
        (b"route\x1fR7", "route=R7"),
        (b"route&hour\x1fR7\x1f08", "route&hour=R7&08"),
        (b"parcel_kg\x1f", "parcel_kg"),
        (b"parcel_kg\x1f5..10", "parcel_kg=5..10"),
        (b"note\x1fgate code", "note=gate code"),
        (b"sender\x1fa\x1b_b\x1b\x1b_c", "sender=a\\x1fb\\x1b_c"),
        (b"sender\x1f\x1b\x1b[31mred", "sender=\\x1b[31mred"),
        ("sender\x1fline\nend\u202e".encode(), "sender=line\\nend\\u202e"),
        ("note\x1f再配達".encode(), "note=再配達"),
        (b"note\x1f\xff", "note=\ufffd"),
        (b"", ""),
    ],
)
def test_a_name_is_shown_readably_and_cannot_command_a_terminal(raw: bytes, shown: str) -> None:
    assert readable(raw) == shown


def test_field_and_token_stand_in_two_columns() -> None:
    assert field_and_token(b"route&hour\x1fR7\x1f08") == ("route&hour", "R7&08")
    assert field_and_token(b"parcel_kg\x1f") == ("parcel_kg", "")
