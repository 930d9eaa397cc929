"""A checkpoint written while learning goes on is, byte for byte, that of the moment at which it was begun."""

import errno
import os
import random
import threading
import time

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as options
from hypothesis import strategies as st

from simulator import CourierFeed, write_log
from stream import durable
from stream.arrays_file import ARRAYS, Rows, read_array_folder, write_array_folder
from stream.background import BackgroundCheckpoints, View
from stream.checkpoints import Checkpoints
from stream.errors import CannotCreate, FileTrouble
from stream.manifest import MANIFEST
from stream.runs.learning import LearningRun
from stream.runs.model import Model
from stream.settings.models import Settings
from stream.sources import LogSource
from stream.tables import probing, saving
from stream.tables import table as table_module
from stream.tables.table import Table
from tests.batches import Example, batch_of
from tests.model_rig import BOUNDS, METHODS, bytes_of, feed, names_swept_every, random_stream, settings_of

both = pytest.mark.parametrize("method", METHODS)
bounds = pytest.mark.parametrize("bounds", BOUNDS, ids=lambda bound: ",".join(bound) or "unbounded")
EVERYTHING = np.uint64(1 << 63)


@pytest.fixture(autouse=True, scope="module")
def small_pieces():
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(saving, "PIECE", 7)
        yield


def arrays_of(view):
    """All that the writer would put into the file, driven on this thread."""
    pieces = list(view.rows.pieces)
    columns = {name: np.concatenate([piece[name] for piece in pieces]) for name in view.rows.dtypes}
    assert {name: column.dtype for name, column in columns.items()} == dict(view.rows.dtypes)
    assert all(len(column) == view.rows.length for column in columns.values())
    return columns | dict(view.rest())


def as_bytes(arrays):
    return {name: (array.dtype.str, array.shape, array.tobytes()) for name, array in arrays.items()}


class Interleaved:
    """A writer that gathers each piece torn: some cells before `learn` was called once more, some after."""

    def __init__(self, learn, seed):
        self.learn, self.chance = learn, np.random.default_rng(seed)
        self.gathered = 0

    def gather(self, table, addresses, limit):
        before = real_gather(table, addresses, limit)
        self.learn()
        after = real_gather(table, addresses, EVERYTHING)
        torn = (self.chance.random(before.shape) < 0.5) & (before[2] != 0)
        self.gathered += 1
        return np.where(torn, after, before)


real_gather = Table._gather


@both
@bounds
@given(
    seed=st.integers(0, 999),
    begin=st.integers(0, 300),
    step=st.integers(0, 40),
    period=st.sampled_from([7, 64]),
)
@options(max_examples=8)
def test_what_is_written_is_the_moment_of_the_beginning(method, bounds, seed, begin, step, period):
    settings, stream = settings_of(method, **bounds), random_stream(seed, 400)
    with names_swept_every(period), pytest.MonkeyPatch.context() as patch:
        model, uninterrupted = Model(settings), Model(settings)
        feed(model, stream[:begin])
        expected, weights = bytes_of(model), model.weights()
        at = begin

        def learn():
            nonlocal at
            feed(model, stream[at : at + step])
            at += step

        writer = Interleaved(learn, seed)
        patch.setattr(Table, "_gather", lambda *args: writer.gather(*args))
        view = model.begin_saving(weights=True)
        learn()
        assert as_bytes(arrays_of(view)) == expected
        assert_same(view.weights(), weights)
        assert writer.gathered >= view.rows.length / 7
        feed(model, stream[at:])
        feed(uninterrupted, stream)
        assert bytes_of(model) == bytes_of(uninterrupted), "and learning is not touched by it"
        resumed = Model(settings)
        resumed.restore(arrays_from(expected))
        feed(resumed, stream[begin:])
        assert bytes_of(resumed) == bytes_of(uninterrupted)


def assert_same(found, expected):
    """Every field of the weights, bit for bit."""
    for name in ("addresses", "values", "messages"):
        one, other = getattr(found, name), getattr(expected, name)
        assert (one.dtype, one.tobytes()) == (other.dtype, other.tobytes()), name
    for name in ("names", "intercept", "learned", "fingerprint"):
        assert getattr(found, name) == getattr(expected, name), name


def arrays_from(found):
    return {
        name: np.frombuffer(data, dtype).reshape(shape).copy() for name, (dtype, shape, data) in found.items()
    }


@both
def test_a_row_that_was_never_learned_stays_empty_in_the_checkpoint(method):
    model = Model(settings_of(method))
    feed(model, [Example({1: 3e38, 2: 3e38, 3: 3e38}, 1, 1e120), Example({4: 1.0})])
    assert model.refused_updates >= 3
    expected = bytes_of(model)
    view = model.begin_saving()
    feed(model, [Example({1: 1.0, 4: 1.0, 5: 1.0}, 0)])
    assert as_bytes(arrays_of(view)) == expected != bytes_of(model)


def test_each_row_is_kept_once_and_new_rows_never():
    model = Model(settings_of())
    feed(model, [Example({1: 1.0, 2: 1.0}), Example({3: 1.0})])
    view = model.begin_saving()
    feed(model, [Example({2: 1.0, 9: 1.0}), Example({2: 1.0, 1: 1.0, 9: 1.0}), Example({3: 1.0}, None)])
    assert sum(map(len, model._table._saving._kept)) == 2
    view.close()


@both
def test_threads_growth_and_removal_leave_no_trace(method, tmp_path, monkeypatch):
    """Rows stretch over many growths and sweeps while another thread writes them."""
    monkeypatch.setattr(table_module, "SMALL", 1 << 12)
    monkeypatch.setattr(saving, "PIECE", 64)
    settings = settings_of(method, l1_per_example=1e-4, idle_after=700, admit_after=2)
    chance = random.Random(8)
    tokens = [chance.getrandbits(40) for _ in range(30_000)]

    def examples(count, low, high):
        return [
            Example({chance.choice(tokens[low:high]): 1.0 for _ in range(20)}, chance.randint(0, 1))
            for _ in range(count)
        ]

    model = Model(settings)
    feed(model, examples(1500, 0, 6_000))
    begun, slots = model.live, model.memory()["table_bytes"]
    slowly(monkeypatch)
    synchronous = Checkpoints(tmp_path / "one", 1).write(7, model.state(), {"k": 1})
    background = BackgroundCheckpoints(Checkpoints(tmp_path / "two", 1))
    background.begin(7, model.begin_saving(), {"k": 1})
    blocks, path = 0, None
    while path is None:
        assert background.busy
        feed(model, examples(25, 40 * blocks, 40 * blocks + 6_000))
        blocks += 1
        path = background.done()
    assert not background.busy and background.done() is None
    assert begun > 4_000 and blocks > 10
    assert model.memory()["table_bytes"] > slots
    for file in (ARRAYS, MANIFEST):
        assert (path / file).read_bytes() == (synchronous / file).read_bytes()
    assert path.name == synchronous.name
    assert model._table._saving is None


def slowly(patch):
    """A writer that lets the learner get on between two pieces."""

    def gather(*args):
        time.sleep(0.004)
        return real_gather(*args)

    patch.setattr(Table, "_gather", gather)


def test_a_run_goes_on_from_it_as_if_it_had_never_stopped(tmp_path):
    log = tmp_path / "log.jsonl"
    write_log(CourierFeed(seed=4, messages=3_000), log)
    settings = Settings.model_validate(
        {
            "feed": {"paths": [str(log)]},
            "message": {"label": "redelivered"},
            "fields": [{"path": "note", "kind": "words"}, {"path": "route", "kind": "category"}],
            "metrics": {"window": 700, "slice_by": "route"},
            "state": {"idle_after": 500, "admit_after": 2},
        }
    )
    background = BackgroundCheckpoints(Checkpoints(tmp_path / "checkpoints", 2))

    def go_on(run):
        source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
        if run.position is not None:
            source.seek(dict(run.position))
        while run.step(source, 100) is not False:
            if run.messages == 1_300:
                background.begin(run.messages, run.begin_saving(), run.about())
        source.close()
        return as_bytes(run.state()), run.about()

    ended = go_on(LearningRun(settings, tmp_path / "rejects"))
    assert background.wait() == tmp_path / "checkpoints" / "000000000001300"
    saved = Checkpoints(tmp_path / "checkpoints", 2).newest()
    resumed = LearningRun(settings, tmp_path / "rejects", saved.about)
    resumed.restore(saved.arrays)
    assert resumed.messages == 1_300
    assert go_on(resumed) == ended


def begun(tmp_path):
    """A model with a checkpoint of its own behind it, and what writes the next."""
    model = Model(settings_of())
    stream = random_stream(3, 300)
    feed(model, stream[:100])
    checkpoints = Checkpoints(tmp_path, 1)
    checkpoints.write(100, model.state(), {})
    feed(model, stream[100:200])
    return model, stream[200:], checkpoints, BackgroundCheckpoints(checkpoints)


@pytest.mark.parametrize(
    ("call", "code", "expected"),
    [
        ("pwrite", errno.ENOSPC, CannotCreate),
        ("write", errno.EIO, FileTrouble),
        ("preadv", errno.EIO, FileTrouble),
        ("fsync", errno.EIO, FileTrouble),
        ("rename", errno.EIO, FileTrouble),
    ],
)
def test_a_failing_disk_is_told_at_the_next_call_and_the_old_checkpoint_stays(
    tmp_path, monkeypatch, call, code, expected
):
    model, more, checkpoints, background = begun(tmp_path)
    calls = []

    def fail(*args):
        calls.append(args)
        raise OSError(code, os.strerror(code))

    with monkeypatch.context() as patch:
        patch.setattr(durable.os, call, fail)
        background.begin(200, model.begin_saving(), {})
        background._thread.join()
    feed(model, more[:50])
    with pytest.raises(expected, match="000000000000200"):
        background.done()
    assert call == "rename" or len(calls) == 1, "a failed fsync may not be tried again"
    assert [path.name for path in tmp_path.iterdir()] == ["000000000000100"]
    assert checkpoints.newest().messages == 100
    assert not background.busy and background.done() is None, "told once"
    assert_next_is_right(model, background, checkpoints)


def assert_next_is_right(model, background, checkpoints):
    assert model._table._saving is None
    expected = bytes_of(model)
    background.begin(250, model.begin_saving(), {})
    assert background.wait() is not None
    assert as_bytes(checkpoints.newest().arrays) == expected


@pytest.mark.parametrize("where", ["rows", "rest", "gather"])
def test_a_writer_that_dies_is_told_and_learning_stops_keeping_rows_for_it(tmp_path, monkeypatch, where):
    model, more, checkpoints, background = begun(tmp_path)

    def die(*_):
        raise MemoryError("no room for the writer")

    with monkeypatch.context() as patch:
        if where == "gather":
            patch.setattr(Table, "_gather", die)
        view = model.begin_saving()
        if where == "rest":
            view = View(view.rows, die, view.close)
        if where == "rows":
            view = View(Rows(view.rows.length, view.rows.dtypes, map(die, [0])), view.rest, view.close)
        background.begin(200, view, {})
        with pytest.raises(MemoryError, match="no room for the writer"):
            background.wait()
    feed(model, more[:50])
    assert checkpoints.newest().messages == 100
    assert_next_is_right(model, background, checkpoints)


def test_learning_does_not_wait_for_a_disk_that_hangs(tmp_path, monkeypatch):
    model, more, _, background = begun(tmp_path)
    hangs, real = threading.Event(), os.fsync

    def fsync(descriptor):
        assert hangs.wait(20)
        real(descriptor)

    monkeypatch.setattr(durable.os, "fsync", fsync)
    background.begin(200, model.begin_saving(), {})
    feed(model, more)
    assert background.done() is None and background.busy
    with pytest.raises(AssertionError, match="one checkpoint at a time"):
        background.begin(300, model.begin_saving(), {})
    hangs.set()
    assert background.wait() == tmp_path / "000000000000200"


def test_closing_waits_for_the_writer_and_says_nothing_more(tmp_path, monkeypatch):
    model, _, checkpoints, background = begun(tmp_path)
    slowly(monkeypatch)
    background.begin(200, model.begin_saving(), {})
    background.close()
    assert checkpoints.newest().messages == 200
    view = model.begin_saving()
    background.begin(201, View(view.rows, lambda: 1 // 0, view.close), {})
    background.close()
    assert not background.busy and background.done() is None


def test_where_no_thread_can_be_started_nothing_is_under_way(tmp_path, monkeypatch):
    model, _, checkpoints, background = begun(tmp_path)

    def refuse(thread):
        raise RuntimeError("can't start new thread")

    with monkeypatch.context() as patch:
        patch.setattr(threading.Thread, "start", refuse)
        with pytest.raises(RuntimeError, match="new thread"):
            background.begin(200, model.begin_saving(), {})
    assert not background.busy
    assert_next_is_right(model, background, checkpoints)


@given(length=st.integers(0, 40), cuts=st.sets(st.integers(0, 40), max_size=4))
def test_columns_made_meanwhile_give_the_file_of_whole_columns(tmp_path_factory, length, cuts):
    folder = tmp_path_factory.mktemp("rows")
    whole = {
        "b": np.arange(length, dtype=np.uint64),
        "a": np.linspace(0, 1, length),
        "c": np.arange(length, dtype=np.int8),
    }
    rest = {"z": np.arange(3), "aa": np.zeros((2, 0)), "y": np.ones(5, np.float32)}
    ends = sorted({*(cut for cut in cuts if cut < length), length})
    pieces = (
        {name: column[first:last] for name, column in whole.items()}
        for first, last in zip([0, *ends], ends, strict=False)
    )
    rows = Rows(length, {name: column.dtype for name, column in whole.items()}, pieces)
    one = write_array_folder(folder, "one", whole | rest, {})
    two = write_array_folder(folder, "two", rest, {}, rows=rows)
    for file in (ARRAYS, MANIFEST):
        assert (one / file).read_bytes() == (two / file).read_bytes()
    assert read_array_folder(two)[1].keys() == {"a", "b", "c", "z", "aa", "y"}


def test_the_keys_of_all_rows_and_no_others_are_taken():
    table = Table(settings_of().state)
    table.admit(batch_of([Example(dict.fromkeys(range(0, 900, 3), 1.0))]), 0, 1)
    keys = np.empty(table.live + 1, np.uint64)
    probing.keys_in_use(table.cells, table.slots, keys)
    keys = keys[:-1]
    probing.unmix_keys(keys, table._secret)
    assert sorted(keys.tolist()) == list(range(0, 900, 3))
