"""Brokers that go away, stop and pause under `bedload work` in; not ready, no spin and no loss out."""

import shutil
import time

import pytest

from tests.broker import start_or_skip
from tests.fault_rig import (
    Worker,
    note,
    notes,
    nothing_lost_or_doubled,
    refused,
    send,
    settings_of,
)
from tests.replays import tree

REQUEST_TIMEOUT_S = 30
IDLE_SHARE = 0.25
"""Of one processor that a worker may use while nobody answers it; one that spins takes all of it."""


@pytest.fixture(scope="module")
def frail_broker(tmp_path_factory):
    with start_or_skip(tmp_path_factory.mktemp("frail") / "broker") as running:
        yield running


def idles(worker, seconds):
    """It lives on for so long and waits for what it has no hold on."""
    cpu, began = worker.cpu_s(), time.monotonic()
    while time.monotonic() - began < seconds:
        assert worker.lives, worker.said
        status, why = worker.ask("/readyz")
        assert status == 503, why
        assert worker.ask("/healthz")[0] == 200, "a new start would not bring the brokers back"
        time.sleep(0.5)
    assert worker.cpu_s() - cpu < IDLE_SHARE * (time.monotonic() - began), "it spins"


@pytest.mark.slow
def test_brokers_that_are_away_stop_and_come_back_cost_no_message(frail_broker, topic, tmp_path):
    """Away at the start; then stopped while it works, and killed, and each time started on the same port."""
    broker = frail_broker
    broker.make_topic(topic)
    settings = settings_of(broker, topic, feed={"group": f"{topic}-worker"})
    send(broker, topic, notes(0, 1_000))
    broker.stop()
    with Worker(settings, tmp_path / "worker") as worker:
        try:
            worker.not_ready("waiting for the feed to answer", "the brokers cannot be reached")
            idles(worker, 3)
        finally:
            broker.start_again()
        worker.ready()
        worker.learned(1_000)
        sent = 1_000
        for away in (broker.stop, broker.kill):
            away()
            try:
                worker.not_ready("the brokers cannot be reached")
                idles(worker, 2)
            finally:
                broker.start_again()
            send(broker, topic, notes(sent, sent + 500))
            sent += 500
            worker.learned(sent)
            worker.ready()
        assert worker.stop()["messages"] == sent
        assert [len(worker.events(name)) for name in ("feed_away", "feed_back")] == [3, 3]
    nothing_lost_or_doubled(settings, tmp_path / "worker", {0: sent})


@pytest.mark.slow
def test_a_broker_that_is_paused_is_waited_for_longer_than_requests_last_or_given_up_with_69(
    frail_broker, topic, tmp_path
):
    """One worker waits; one has worker.unavailable_after_s and is started again afterwards."""
    broker = frail_broker
    broker.make_topic(topic)
    bad = f"{topic}.bad"
    broker.make_topic(bad)
    settings = settings_of(broker, topic, worker={"stale_after_s": 2}, rejects={"topic": bad})
    hasty = settings_of(broker, topic, worker={"unavailable_after_s": 4})
    send(broker, topic, [*notes(0, 500), b"[]"])
    with Worker(settings, tmp_path / "worker") as worker, Worker(hasty, tmp_path / "hasty") as other:
        for one in (worker, other):
            one.learned(501)
            one.ready()
        broker.pause()
        began = time.monotonic()
        try:
            worker.not_ready("the brokers have not answered for")
            assert other.wait() == 69, other.said
            assert "has not answered for" in other.said and "worker.unavailable_after_s = 4" in other.said
            assert [event["exit_code"] for event in other.events("failed")] == [69]
            idles(worker, REQUEST_TIMEOUT_S + 3 - (time.monotonic() - began))
        finally:
            broker.resume()
        send(broker, topic, [*notes(500, 1_000), note(1_000, note=7)])
        worker.learned(1_002)
        worker.ready()
        assert worker.stop()["messages"] == 1_002
    nothing_lost_or_doubled(settings, tmp_path / "worker", {0: 1_002})
    with Worker(hasty, tmp_path / "hasty", "--until-end") as again:
        assert again.ended()["messages"] == 1_002
    nothing_lost_or_doubled(hasty, tmp_path / "hasty", {0: 1_002})


@pytest.mark.slow
def test_a_broker_that_lost_its_log_is_refused_by_a_running_worker_and_at_the_start(
    frail_broker, topic, tmp_path
):
    """The same topic ends before what was read, as after a disk was replaced by an empty one."""
    broker = frail_broker
    broker.make_topic(topic)
    settings = settings_of(broker, topic)
    send(broker, topic, notes(0, 500))
    with Worker(settings, tmp_path) as worker:
        worker.learned(500)
        worker.saved(500)
        broker.stop()
        try:
            shutil.rmtree(broker.folder / "data" / f"{topic}-0")
        finally:
            broker.start_again()
        assert worker.wait() == 78, worker.said
        assert "the log was cut back" in worker.said
    before = tree(tmp_path / "state")
    refused(settings, tmp_path, 78, "ends at offset 0", "500 more were read before", "the log was cut back")
    assert tree(tmp_path / "state") == before
    send(broker, topic, notes(1_000, 1_700))
    refused(settings, tmp_path, 78, "the log was cut back")
    assert tree(tmp_path / "state") == before
