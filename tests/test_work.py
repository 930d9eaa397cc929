"""A worker that is stopped, killed and crossed in; the state that an uninterrupted run leaves, out."""

import json
import os
import random
import shutil
import signal
import threading
import time
from pathlib import Path

import pytest

from stream.checkpoints import Checkpoints
from stream.errors import BadData, BadSettings, CannotCreate, TryLater, Unavailable
from stream.journal import FILE_NAME, Kind, Mark, spans_after
from stream.manifest import MANIFEST
from stream.runs.learning import LearningRun
from stream.runs.pacing import LivePacer
from stream.runs.replay import replay
from stream.runs.retracing import retrace
from stream.runs.work import work
from stream.snapshots import Snapshots, read_snapshot
from stream.state_folder import StateFolder
from tests.memory_topic import MemoryPublisher, MemoryTopic, offset_of
from tests.replays import (
    BAD,
    BOUNDED,
    LONG,
    UNLABELLED,
    courier_lines,
    last_checkpoint,
    rejects,
    settings_for,
)
from tests.work_child import Workers, topic_from

KILLS = 40 if LONG else 8
PARTITIONS = 4


@pytest.fixture(scope="module")
def lines(tmp_path_factory):
    return courier_lines(tmp_path_factory.mktemp("log") / "log.jsonl")


@pytest.fixture(scope="module")
def topic_file(lines, tmp_path_factory):
    """The messages in four partitions, of which one has few."""
    draw = random.Random(3)
    partitions = [[] for _ in range(PARTITIONS)]
    for line in lines[:12_000]:
        partitions[draw.choice((0, 0, 1, 1, 2, 2, 2, 3))].append(line.decode("latin-1"))
    path = tmp_path_factory.mktemp("topic") / "topic.json"
    path.write_text(json.dumps(partitions))
    return path


@pytest.fixture(scope="module")
def workers():
    children = Workers()
    yield children
    children.close()


def quick(variant=None, **sections):
    """Settings that write checkpoints often; by messages, unless seconds are asked for."""
    worker = {"checkpoint_every_s": 1000, "snapshot_every_s": 1000, **sections.pop("worker", {})}
    return settings_for([], variant, worker=worker, **sections)


def messages_in(topic_file):
    return sum(map(len, json.loads(topic_file.read_text())))


def reads(folder):
    return [span for span, _ in spans_after(folder / FILE_NAME, Mark()) if span.kind is Kind.READ]


# ---- the same bytes --------------------------------------------------------------------------------------


@pytest.mark.parametrize("variant", [None, BOUNDED], ids=["plain", "bounded"])
def test_retracing_the_journal_gives_the_bytes_of_the_worker(topic_file, tmp_path, variant):
    settings = quick(variant)
    done = work(settings, tmp_path / "state", source=topic_from(topic_file, 1), until_end=True)
    assert done.run.summary.messages == messages_in(topic_file)
    found = retrace(settings, tmp_path / "again", tmp_path / "state", source=topic_from(topic_file, 2))
    assert found.differences == []
    assert last_checkpoint(tmp_path / "again") == last_checkpoint(tmp_path / "state")
    assert rejects(tmp_path / "again") == rejects(tmp_path / "state")
    other = work(settings, tmp_path / "other", source=topic_from(topic_file, 3), until_end=True)
    assert other.run.summary.messages == done.run.summary.messages
    assert last_checkpoint(tmp_path / "other") != last_checkpoint(tmp_path / "state")


def test_killed_at_any_instant_it_ends_as_an_uninterrupted_run_of_its_journal(topic_file, tmp_path, workers):
    """Kills spread over reading, learning and writing; each process has an order of its own to offer."""
    draw = random.Random(7)
    settings = quick(BOUNDED, worker={"checkpoint_every_s": 0.02, "snapshot_every_s": 0.05})
    folder = tmp_path / "state"
    for kill in range(KILLS):
        workers.start(settings, folder, topic=str(topic_file), seed=kill, until_end=True)
        time.sleep(draw.uniform(0.0, 0.4))
        os.kill(workers.pid, signal.SIGKILL)
        assert workers.wait() in (-signal.SIGKILL, 0)
        torn = draw.randbytes(draw.randrange(32))
        if (folder / FILE_NAME).exists():
            with (folder / FILE_NAME).open("ab") as file:
                file.write(torn)
    workers.start(settings, folder, topic=str(topic_file), seed=KILLS, until_end=True)
    assert workers.wait() == 0
    name, *_ = last_checkpoint(folder)
    assert int(name) == messages_in(topic_file)
    found = retrace(settings, tmp_path / "again", folder, source=topic_from(topic_file, 99))
    assert found.differences == []
    assert last_checkpoint(tmp_path / "again") == last_checkpoint(folder)
    assert rejects(tmp_path / "again") == rejects(folder)
    for entry in Snapshots(folder / "snapshots", 9).list():
        read_snapshot(entry.path)
        assert entry.name.isdecimal(), "no snapshot was ever ahead of what a restart goes on from"


def test_learning_and_checkpoints_do_not_wait_for_a_snapshot_that_hangs(topic_file, tmp_path, monkeypatch):
    """The disk lets no snapshot through until the worker has learned all and written its last checkpoint."""
    settings = quick(worker={"checkpoint_every_s": 0.01, "snapshot_every_s": 0.01})
    every, last, real = settings.state.checkpoint_every, messages_in(topic_file), Snapshots.write
    written = []

    def write(snapshots, messages, weights, about):
        deadline = time.monotonic() + 20
        while not written and not (tmp_path / f"state/checkpoints/{last:015d}").exists():
            assert time.monotonic() < deadline, "the worker waits for its snapshot"
            time.sleep(0.01)
        written.append(messages)
        return real(snapshots, messages, weights, about)

    monkeypatch.setattr(Snapshots, "write", write)
    work(settings, tmp_path / "state", source=topic_from(topic_file, 1), until_end=True)
    assert written[-1] == last and len(written) >= 2 and written[0] < last
    assert every < last


def test_before_the_first_message_there_is_no_snapshot(tmp_path):
    settings, now = quick(), [0.0]
    run = LearningRun(settings, tmp_path / "rejects")
    parts = Checkpoints(tmp_path / "checkpoints", 2), Snapshots(tmp_path / "snapshots", 2)
    pacer = LivePacer(run, settings, *parts, lambda: True, lambda position: None, lambda: now[0])
    for _ in range(3):
        now[0] += 10_000
        pacer.keep_up()
    pacer.close()
    assert not (tmp_path / "snapshots").exists() and not (tmp_path / "checkpoints").exists()
    topic = MemoryTopic([[UNLABELLED]])
    topic.start()
    run.step(topic, 10)
    pacer.keep_up()
    pacer.checkpoint()
    assert [entry.messages for entry in parts[1].list()] == [1]


def test_a_flipped_bit_in_what_was_read_shows_in_retracing(topic_file, tmp_path):
    settings = quick()
    work(settings, tmp_path / "state", source=topic_from(topic_file, 1), until_end=True)
    changed = topic_from(topic_file, 1)
    changed.partitions[1][100] = UNLABELLED
    found = retrace(settings, tmp_path / "again", tmp_path / "state", source=changed)
    assert found.differences


def test_retracing_a_living_worker_ends_where_its_newest_checkpoint_is(topic_file, tmp_path):
    settings = quick(state={"checkpoint_every": 2_500})
    source = topic_from(topic_file, 1)
    work(settings, tmp_path / "state", source=source, until_end=True)
    newest = max((tmp_path / "state/checkpoints").iterdir())
    for path in newest.iterdir():
        path.unlink()
    newest.rmdir()
    found = retrace(settings, tmp_path / "again", tmp_path / "state", source=topic_from(topic_file, 2))
    assert found.differences == []
    assert found.run.summary.messages == 10_000
    with pytest.raises(BadSettings, match="the worker's own state folder"):
        retrace(settings, tmp_path / "state", tmp_path / "state", source=topic_from(topic_file, 2))


def test_retracing_can_be_stopped_and_gone_on_with(topic_file, tmp_path):
    settings = quick()
    work(settings, tmp_path / "state", source=topic_from(topic_file, 1), until_end=True)

    def stop(row):
        if row.through == 6_000:
            os.kill(os.getpid(), signal.SIGTERM)

    source = topic_from(topic_file, 2)
    half = retrace(settings, tmp_path / "again", tmp_path / "state", source=source, on_window=stop)
    assert half.run.interrupted
    assert half.differences is None
    with pytest.raises(CannotCreate, match="holds a state already"):
        retrace(settings, tmp_path / "again", tmp_path / "state", source=topic_from(topic_file, 4))
    source = topic_from(topic_file, 3)
    found = retrace(settings, tmp_path / "again", tmp_path / "state", source=source, resume=True)
    assert found.differences == []
    assert found.run.resumed_from == half.run.summary.messages


def test_a_worker_goes_on_from_an_older_checkpoint_where_the_newest_is_broken(topic_file, tmp_path):
    settings = quick()
    work(settings, tmp_path / "state", source=topic_from(topic_file, 1), until_end=True)
    expected = last_checkpoint(tmp_path / "state")
    (tmp_path / "state/checkpoints" / expected[0] / MANIFEST).write_bytes(b"{}")
    warnings = []
    work(settings, tmp_path / "state", source=topic_from(topic_file, 8), until_end=True, warn=warnings.append)
    assert last_checkpoint(tmp_path / "state") == expected
    assert any("moved to" in warning for warning in warnings)
    records = reads(tmp_path / "state")
    assert records == sorted(records, key=records.index)


# ---- starts and stops --------------------------------------------------------------------------------------


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_told_to_stop_it_writes_its_state_and_ends_well(topic_file, tmp_path, workers, number):
    settings = quick()
    workers.start(settings, tmp_path / "state", topic=str(topic_file), seed=1)
    wait_for(lambda: any((tmp_path / "state").glob("checkpoints/[0-9]*/manifest.json")))
    began = time.monotonic()
    os.kill(workers.pid, number)
    assert workers.wait() == 0
    assert time.monotonic() - began < 10
    name, *_ = last_checkpoint(tmp_path / "state")
    assert [entry.name for entry in Snapshots(tmp_path / "state/snapshots", 9).list()] == [name]
    found = retrace(settings, tmp_path / "again", tmp_path / "state", source=topic_from(topic_file, 5))
    assert found.differences == []


def test_a_worker_with_nothing_to_read_waits_without_using_the_processor(tmp_path):
    stop_after(1.0)
    began = time.process_time()
    done = work(quick(), tmp_path / "state", source=MemoryTopic([[], []]))
    assert time.process_time() - began < 0.6
    assert done.run.interrupted
    assert done.run.summary.messages == 0


def test_messages_that_come_while_it_waits_are_learned(tmp_path):
    topic = MemoryTopic([[], []])
    note = b'{"id": "%d", "note": "left with porter", "redelivered": true}'
    timer = threading.Timer(0.3, lambda: topic.partitions[1].extend(note % n for n in range(10)))
    timer.start()
    stop_after(1.0)
    done = work(quick(worker={"checkpoint_every_s": 0.1}), tmp_path / "state", source=topic)
    assert done.run.summary.messages == 10
    assert done.run.checkpoints == 1, "by the clock, and none where nothing came"
    assert topic.commits == [topic.position()]


@pytest.mark.parametrize("resumed", [False, True])
def test_told_to_stop_before_the_feed_ever_answered_it_ends_well(topic_file, tmp_path, resumed):
    class Away(MemoryTopic):
        def start(self, position=None):
            os.kill(os.getpid(), signal.SIGTERM)
            raise Unavailable("stopped while waiting for the cluster")

        seek = start

    if resumed:
        work(quick(), tmp_path / "state", source=topic_from(topic_file), until_end=True)
    done = work(quick(), tmp_path / "state", source=Away([[]]))
    assert done.run.interrupted
    assert done.run.summary.messages == (messages_in(topic_file) if resumed else 0)
    later = work(quick(), tmp_path / "state", source=topic_from(topic_file), until_end=True)
    assert later.run.summary.messages == messages_in(topic_file)


def test_a_second_worker_is_told_who_holds_the_folder(tmp_path):
    with StateFolder(tmp_path / "state"), pytest.raises(TryLater, match=f"process {os.getpid()}") as caught:
        work(quick(), tmp_path / "state", source=MemoryTopic([[]]), until_end=True)
    assert caught.value.exit_code == 75


def test_a_first_start_needs_to_be_told_where(tmp_path):
    with pytest.raises(BadSettings, match=r"feed\.start") as caught:
        work(quick(), tmp_path / "state", source=MemoryTopic([[]], start=None), until_end=True)
    assert caught.value.exit_code == 78


def test_states_of_replay_and_of_work_are_not_mistaken_for_each_other(lines, tmp_path):
    log = tmp_path / "log.jsonl"
    log.write_bytes(b"".join(line + b"\n" for line in lines[:100]))
    settings = settings_for([log])
    replay(settings, tmp_path / "replayed")
    with pytest.raises(BadSettings, match="was left by `bedload replay`"):
        work(settings, tmp_path / "replayed", until_end=True)
    work(settings, tmp_path / "worked", until_end=True)
    with pytest.raises(BadSettings, match="was left by `bedload work`"):
        replay(settings, tmp_path / "worked", resume=True)
    replay(settings, tmp_path / "worked", fresh=True)
    assert not (tmp_path / "worked" / FILE_NAME).exists()


def test_other_settings_are_refused_with_the_difference(topic_file, tmp_path):
    source = topic_from(topic_file)
    work(quick(), tmp_path / "state", source=source, until_end=True)
    with pytest.raises(BadSettings, match="l1_per_example"):
        changed = quick(learner={"l1_per_example": 1e-5})
        work(changed, tmp_path / "state", source=topic_from(topic_file), until_end=True)


def test_a_state_of_a_topic_does_not_go_on_from_logs(topic_file, tmp_path):
    class Named(MemoryTopic):
        def position(self):
            return {**super().position(), "topic": "handoffs"}

    source = Named(topic_from(topic_file).partitions)
    work(quick(), tmp_path / "state", source=source, until_end=True)
    (tmp_path / "log.jsonl").write_bytes(b"{}\n")
    logs = settings_for([tmp_path / "log.jsonl"])
    said = "the state was learned from topic handoffs; the settings read logs"
    for accept in (False, True):
        with pytest.raises(BadSettings, match=said):
            work(logs, tmp_path / "state", until_end=True, accept_settings=accept)
    with pytest.raises(BadSettings, match=said):
        retrace(logs, tmp_path / "again", tmp_path / "state")


def test_a_gap_is_refused_and_with_leave_passed_over_and_counted(topic_file, tmp_path):
    settings = quick()
    first = topic_from(topic_file)
    for values in first.partitions:
        del values[500:]
    work(settings, tmp_path / "state", source=MemoryTopic(first.partitions, 1), until_end=True)

    def later(**options):
        topic = MemoryTopic(topic_from(topic_file).partitions, 2, **options)
        topic.log_starts[2] = offset_of(900)
        return topic

    with pytest.raises(BadSettings, match="gone"):
        work(settings, tmp_path / "state", source=later(), until_end=True)
    warnings = []
    done = work(
        settings, tmp_path / "state", source=later(on_gap="skip"), until_end=True, warn=warnings.append
    )
    assert done.passed_over == offset_of(900) - offset_of(500)
    assert done.to_json()["passed_over"] == done.passed_over
    assert any("passed over" in warning for warning in warnings)
    found = retrace(settings, tmp_path / "again", tmp_path / "state", source=topic_from(topic_file, 9))
    assert found.differences == []


# ---- what goes out ----------------------------------------------------------------------------------------


def test_dead_letters_and_scores_go_out_once_the_journal_is_durable(topic_file, tmp_path, monkeypatch):
    log = []
    publisher = MemoryPublisher(log)
    settings = quick(rejects={"topic": "bad"}, scores={"topic": "scored"})
    real = os.fsync

    def fsync(descriptor):
        if os.readlink(f"/proc/self/fd/{descriptor}").endswith("/journal"):
            log.append("journal")
        elif os.readlink(f"/proc/self/fd/{descriptor}").endswith(MANIFEST):
            log.append("checkpoint")
        real(descriptor)

    monkeypatch.setattr(os, "fsync", fsync)
    source = topic_from(topic_file, 1)
    done = work(settings, tmp_path / "state", source=source, connect=lambda: publisher, until_end=True)
    assert not (tmp_path / "state/rejects/rejects.jsonl").exists()
    assert publisher.closed
    assert log.index("journal") < log.index("send") < log.index("flush") < log.index("checkpoint")
    for at, what in enumerate(log):
        if what == "checkpoint":
            since = [w for w in log[:at] if w in ("send", "flush")]
            assert since[-1] == "flush", "a checkpoint came before what it covers was acknowledged"
    bad = [record for record in publisher.acknowledged if record[0] == "bad"]
    scored = [json.loads(value) for topic, _, value, _ in publisher.acknowledged if topic == "scored"]
    assert len(bad) == done.run.summary.rejected > 20
    assert len(scored) == done.run.summary.messages - len(bad)
    assert {record[2] for record in bad} <= set(BAD)
    _, key, value, headers = bad[0]
    partition, offset = int(headers["partition"]), int(headers["offset"])
    assert source.partitions[partition][offset - offset // 3] == value
    assert key == b"key of %d" % offset
    assert headers["topic"] == b"memory"
    assert headers["reason"].decode() in done.run.rejects_by_reason
    assert len({(s["partition"], s["offset"]) for s in scored}) == len(scored)
    assert set(scored[0]) == {"id", "probability", "margin", "topic", "partition", "offset", "snapshot"}
    last = scored[-1]
    message = json.loads(source.partitions[last["partition"]][last["offset"] - last["offset"] // 3])
    assert message["id"] == last["id"]


def test_scores_that_come_again_after_a_crash_are_the_same_numbers(topic_file, tmp_path):
    settings = quick(scores={"topic": "scored"}, state={"checkpoint_every": 5_000})
    sent = []
    for seed in (1, 2):
        publisher = MemoryPublisher()
        work(
            settings,
            tmp_path / "state",
            source=topic_from(topic_file, seed),
            connect=lambda p=publisher: p,
            until_end=True,
        )
        sent.append({(s["partition"], s["offset"]): s["margin"] for s in map(value_of, publisher.sent)})
        for path in sorted((tmp_path / "state/checkpoints").iterdir())[1:]:
            shutil.rmtree(path)  # as if the crash had come before it
    assert len(sent[1]) > 1_000
    assert sent[1].items() <= sent[0].items()


def value_of(record):
    return json.loads(record[2])


def test_while_the_brokers_of_dead_letters_are_away_nothing_is_lost_and_no_checkpoint_lies(
    topic_file, tmp_path
):
    publisher = MemoryPublisher()
    publisher.away = True
    settings = quick(scores={"topic": "scored"}, worker={"checkpoint_every_s": 0.05})
    back = threading.Timer(1.5, lambda: setattr(publisher, "away", False))
    back.start()
    source = topic_from(topic_file, 1)
    seen = []

    def look():
        seen.append(list((tmp_path / "state/checkpoints").glob("[0-9]*")))

    early = threading.Timer(1.2, look)
    early.start()
    done = work(settings, tmp_path / "state", source=source, connect=lambda: publisher, until_end=True)
    assert seen == [[]]
    assert len(publisher.acknowledged) == done.run.summary.messages - done.run.summary.rejected


def test_after_so_long_without_the_brokers_it_gives_up_with_69(topic_file, tmp_path):
    publisher = MemoryPublisher()
    publisher.away = True
    settings = quick(rejects={"topic": "bad"}, worker={"checkpoint_every_s": 0.05, "unavailable_after_s": 1})
    with pytest.raises(Unavailable) as caught:
        work(settings, tmp_path / "state", source=topic_from(topic_file, 1), connect=lambda: publisher)
    assert caught.value.exit_code == 69
    publisher.away = False
    source = topic_from(topic_file, 2)
    done = work(settings, tmp_path / "state", source=source, connect=lambda: publisher, until_end=True)
    assert len(publisher.acknowledged) == done.run.summary.rejected


def test_topics_to_write_to_need_a_cluster(tmp_path):
    with pytest.raises(BadSettings, match=r"feed\.servers"):
        work(quick(scores={"topic": "scored"}), tmp_path / "state", source=MemoryTopic([[]]))


@pytest.mark.parametrize("action", ["halt", "keep"])
def test_a_feed_gone_bad_stops_it_at_the_same_message_each_time(topic_file, tmp_path, action):
    settings = quick(
        message={"max_reject_share": 0.01},
        rejects={"action": action},
        state={"checkpoint_every": 500},
    )
    topic = topic_from(topic_file, 1)
    topic.partitions[0][2_000:] = [b"{"] * 900
    said = set()
    for seed in range(3):
        source = MemoryTopic(topic.partitions, seed)
        with pytest.raises(BadData) as caught:
            work(settings, tmp_path / "state", source=source)
        assert caught.value.exit_code == 65
        said.add(str(caught.value))
    assert len(said) == 1, "the order of the journal decides, not that of the day"


def test_the_closing_document_has_the_keys_of_a_replay_but_for_what_has_no_end(topic_file, tmp_path):
    done = work(quick(), tmp_path / "state", source=topic_from(topic_file), until_end=True).to_json()
    assert {"messages", "labelled", "rejected", "log_loss", "nnz", "live", "resumed_from"} <= set(done)
    assert {"checkpoints", "snapshot", "interrupted", "warnings", "passed_over"} <= set(done)
    assert not {"windows", "epochs"} & set(done)
    assert done["checkpoints"] == 6
    assert len(list((tmp_path / "state/checkpoints").glob("[0-9]*"))) == 5
    assert Path(done["snapshot"]).is_dir()
    assert Checkpoints(tmp_path / "state/checkpoints", 5).newest().messages == done["messages"]


def test_a_strength_that_grows_for_ever_is_warned_of(tmp_path):
    for learner, warned in (({}, True), ({"horizon": 1_000}, False), ({"l1_per_example": 0.0}, False)):
        warnings = []
        folder = tmp_path / str(len(learner) + warned)
        work(quick(learner=learner), folder, source=MemoryTopic([[]]), until_end=True, warn=warnings.append)
        assert any("learner.horizon is not set" in text for text in warnings) == warned


def stop_after(seconds):
    timer = threading.Timer(seconds, os.kill, (os.getpid(), signal.SIGTERM))
    timer.daemon = True
    timer.start()


def wait_for(holds, seconds=20):
    deadline = time.monotonic() + seconds
    while not holds():
        assert time.monotonic() < deadline
        time.sleep(0.01)
