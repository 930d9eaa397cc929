"""The store of waiting messages: kept moments, crashes at every place, damage told with place and cure."""

import os
import random
import signal
import stat
import subprocess
import sys
import time
from pathlib import Path

import pytest

from stream.errors import BadData
from stream.labels import segments
from stream.labels.segments import ROWS, WaitingRow
from stream.labels.store import WaitingStore

ROOT = Path(__file__).parent.parent


def row_number(number):
    return WaitingRow(1000 + number, number % 3, number, number * 7, number * 11, b"payload %d" % number * 20)


def fill(store, first, last, fate=1):
    return [store.append(row_number(number), fate) for number in range(first, last)]


def content(store):
    """Everything that a reader can ask for, of all rows not forgotten; payloads of unsettled ones."""
    rows = []
    for segment, columns, fates in store.segments():
        for at in range(len(columns)):
            handle = segment * ROWS + at
            payload = store.payload(handle) if fates[at] == 1 else None
            rows.append((store.row(handle)._replace(payload=b""), int(fates[at]), payload))
    return rows


class Killed(BaseException):
    pass


class Dying:
    """A transaction that is killed before its call number `calls`, and so are those after it."""

    def __init__(self, real, left):
        self._real, self._left = real, left

    def __getattr__(self, name):
        if name in ("put", "replace", "commit", "cursor", "delete"):
            self._left[0] -= 1
            if self._left[0] < 0:
                raise Killed(name)
        return getattr(self._real, name)


def work(store, kept):
    """Three kept moments with everything that a store does between them; says which are durable."""
    handles = fill(store, 0, 150)
    store.keep(10)
    kept[10] = True
    for handle in handles[:90]:
        store.settle(handle, 4)
    fill(store, 150, 260)
    store.forget(0, handles[80] // ROWS)
    store.keep(20)
    kept[20] = True
    store.drop_before(10)
    for handle in handles[90:]:
        store.settle(handle, 5)
    store.forget(handles[40] // ROWS, handles[120] // ROWS)
    fill(store, 260, 300)
    store.keep(30)
    kept[30] = True
    store.drop_before(20)
    del kept[10]
    store.drop_before(30)
    del kept[20]


@pytest.fixture
def expected(tmp_path):
    """What the store holds at each moment, from runs without a crash."""
    found = {}
    for stop in (10, 20, 30):
        store = WaitingStore(tmp_path / f"until-{stop}")
        with pytest.raises(KeyError):
            work(store, StoppedAt(stop))
        store.close()
        store = WaitingStore(tmp_path / f"until-{stop}", stop)
        found[stop] = content(store)
        store.close()
    return found


class StoppedAt(dict):
    def __init__(self, moment):
        self._moment = moment

    def __setitem__(self, moment, durable):
        if moment == self._moment:
            raise KeyError(moment)
        super().__setitem__(moment, durable)


@pytest.fixture(autouse=True)
def small_segments(monkeypatch):
    monkeypatch.setattr(segments, "SIZE", 3000)


def test_killed_before_any_call_of_the_database_it_opens_at_every_kept_moment(
    tmp_path, expected, monkeypatch
):
    begin = WaitingStore._begin
    calls, whole = 0, False
    while not whole:
        folder, left, kept = tmp_path / f"killed-{calls}", [10**9], {}
        with monkeypatch.context() as patch:

            def dying(self, left=left):
                begin(self)
                self._transaction = Dying(self._transaction, left)

            patch.setattr(WaitingStore, "_begin", dying)
            store = WaitingStore(folder)
            left[0] = calls
            try:
                work(store, kept)
                whole = True
            except Killed:
                pass
            store._transaction._real.abort()
            store._environment.close()
        for moment in sorted(kept, reverse=True):  # a newer checkpoint may turn out damaged
            store = WaitingStore(folder, moment)
            assert content(store) == expected[moment], (calls, moment)
            store.close()
        calls += 1 if calls < 12 else 7
    assert calls > 60


def test_what_is_ahead_of_the_checkpoint_is_taken_back(tmp_path, expected):
    store = WaitingStore(tmp_path / "waiting")
    handles = fill(store, 0, 150)
    store.keep(10)
    for handle in handles[::2]:
        store.settle(handle, 4)
    fill(store, 150, 400)
    store.keep(15)
    store.settle(handles[1], 5)
    store.keep(17)
    store.close()
    store = WaitingStore(tmp_path / "waiting", 10)
    assert content(store) == expected[10]
    with pytest.raises(BadData, match="no moment 15"):
        store.close()
        WaitingStore(tmp_path / "waiting", 15)


CHILD = """
import sys
from pathlib import Path
from tests.test_waiting_store import fill
from stream.labels.store import WaitingStore
folder, moment = Path(sys.argv[1]), int(sys.argv[2])
store = WaitingStore(folder, moment)
list(store.segments())
while True:
    first = moment * 50
    for handle in fill(store, first, first + 50):
        store.settle(handle, 4 if handle % 5 == 0 else 1)
    moment += 1
    store.keep(moment)
    print(moment, flush=True)
    if moment % 3 == 0:
        store.drop_before(moment - 2)
"""


def test_a_killed_process_leaves_a_store_that_agrees_with_its_last_kept_moment(tmp_path):
    chance, moment = random.Random(5), 0
    folder = tmp_path / "waiting"
    for _ in range(3):
        child = subprocess.Popen(
            [sys.executable, "-c", CHILD, str(folder), str(moment)],
            cwd=ROOT,
            stdout=subprocess.PIPE,
            text=True,
        )
        moment = int(child.stdout.readline())
        time.sleep(chance.random() * 0.1)
        os.kill(child.pid, signal.SIGKILL)
        moment = max([moment, *(int(line) for line in child.stdout.read().split())])
        child.wait()
        child.stdout.close()
        store = WaitingStore(folder, moment)
        rows = content(store)
        assert [row.time for row, _, _ in rows] == [1000 + number for number in range(50 * moment)]
        assert all(fate in (1, 4) for _, fate, _ in rows)
        store.close()


def test_the_room_of_what_is_forgotten_is_used_again(tmp_path):
    store = WaitingStore(tmp_path / "waiting")
    sizes = []
    for moment in range(1, 41):
        first = (moment - 1) * 2000
        fill(store, first, first + 2000)
        gone = max(store.first, (store.next_handle // ROWS) * (moment - 4) // moment)
        store.forget(gone, gone)
        store.keep(moment)
        store.drop_before(moment)
        sizes.append((tmp_path / "waiting" / "data.mdb").stat().st_size)
    store.close()
    assert sizes[-1] < 1.3 * sizes[12]


def test_only_its_owner_may_read_it(tmp_path):
    WaitingStore(tmp_path / "waiting").close()
    assert stat.S_IMODE((tmp_path / "waiting").stat().st_mode) == 0o700
    assert [stat.S_IMODE(path.stat().st_mode) for path in (tmp_path / "waiting").iterdir()] == [0o600]


def kept_store(folder):
    store = WaitingStore(folder)
    fill(store, 0, 2000)
    store.keep(1)
    store.close()
    return folder / "data.mdb"


def test_a_missing_store_is_told_with_place_and_cure(tmp_path):
    path = kept_store(tmp_path / "waiting")
    path.unlink()
    with pytest.raises(BadData, match=rf"{path} is missing.*copy"):
        WaitingStore(tmp_path / "waiting", 1)


def test_a_store_of_another_run_is_refused(tmp_path):
    kept_store(tmp_path / "waiting")
    with pytest.raises(BadData, match=r"waiting has no moment 7.*state\.folder"):
        WaitingStore(tmp_path / "waiting", 7)


@pytest.mark.parametrize("damage", ["cut", "halved", "zeroed", "other"])
def test_a_damaged_store_is_told_and_never_read(tmp_path, damage):
    path = kept_store(tmp_path / "waiting")
    data = bytearray(path.read_bytes())
    if damage == "cut":
        path.write_bytes(data[:100])
    elif damage == "halved":
        path.write_bytes(data[: len(data) // 2])
    elif damage == "zeroed":
        path.write_bytes(bytes(len(data)))
    else:
        path.write_bytes(b"not a database" * 10_000)
    with pytest.raises(BadData, match="waiting"):
        WaitingStore(tmp_path / "waiting", 1)


def test_a_flipped_bit_in_the_columns_of_a_segment_is_found_when_it_is_opened(tmp_path):
    path = kept_store(tmp_path / "waiting")
    data = bytearray(path.read_bytes())
    at = data.index(row_number(1500).payload) - 2000
    while data[at : at + 8] != (1000 + 1490).to_bytes(8, "little"):
        at -= 1
    data[at] ^= 64
    path.write_bytes(data)
    store = WaitingStore(tmp_path / "waiting", 1)
    with pytest.raises(BadData, match=r"segment \d+ of the waiting messages is damaged"):
        list(store.segments())
    store.close()


def test_a_flipped_bit_in_what_became_of_rows_is_found_when_it_is_opened(tmp_path):
    path = kept_store(tmp_path / "waiting")
    data = bytearray(path.read_bytes())
    path.write_bytes(data.replace(bytes([1]) * 8 + bytes(200), bytes([1]) * 7 + bytes([5]) + bytes(200)))
    store = WaitingStore(tmp_path / "waiting", 1)
    with pytest.raises(BadData, match=r"what became of segment \d+ is damaged"):
        list(store.segments())
    store.close()
