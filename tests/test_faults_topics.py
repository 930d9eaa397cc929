"""Topics that are other ones than before, and retention that took messages, in; refusals and gaps out."""

import signal
import time

import pytest

from stream.journal import Kind, Span
from tests.fault_rig import (
    Worker,
    kept_whole,
    notes,
    refused,
    same_when_learned_again,
    send,
    settings_of,
    spans_of,
    worked,
)
from tests.replays import tree

ANSWERED_S = 0.5


@pytest.fixture
def filled(broker, topic):
    """A topic of two partitions, of which the first has 500 messages."""
    broker.make_topic(topic, 2)
    send(broker, topic, notes(0, 500))
    return topic


def made_again(broker, topic):
    """Another topic of that name, with more messages than the one before."""
    broker.delete_topic(topic)
    broker.make_topic(topic, 2)
    send(broker, topic, notes(1_000, 1_700))


# ---- another topic or other settings -----------------------------------------------------------------------


def test_a_topic_that_was_made_again_is_refused_at_the_start_and_nothing_is_changed(broker, filled, tmp_path):
    settings = settings_of(broker, filled)
    assert worked(settings, tmp_path)["messages"] == 500
    before, first = tree(tmp_path / "state"), broker.topic_id(filled)
    made_again(broker, filled)
    told = refused(settings, tmp_path, 78, "was deleted and made again", str(first))
    assert str(broker.topic_id(filled)) in told
    assert tree(tmp_path / "state") == before


def test_a_topic_that_is_made_again_under_a_worker_stops_it_before_it_learns_of_the_new_one(
    broker, filled, tmp_path
):
    settings = settings_of(broker, filled)
    with Worker(settings, tmp_path) as worker:
        worker.learned(500)
        worker.ready()
        made_again(broker, filled)
        assert worker.wait() == 78, worker.said
        assert "deleted and made again" in worker.said
    assert [span for span in spans_of(tmp_path / "state", Kind.READ) if span.last > 500] == []
    assert kept_whole(tmp_path / "state") <= 500
    refused(settings, tmp_path, 78, "was deleted and made again")


def test_settings_that_do_not_fit_the_state_are_refused_with_the_difference(broker, filled, tmp_path):
    worked(settings_of(broker, filled), tmp_path)
    send(broker, filled, notes(500, 600))
    before = tree(tmp_path / "state")
    for changes, *words in (
        ({"space": {"address_bits": 39}}, "address_bits", "39", "40"),
        ({"learner": {"l1_per_example": 2e-4}}, "l1_per_example", "0.0002", "0.0005"),
    ):
        refused(settings_of(broker, filled, **changes), tmp_path, 78, *words)
        assert tree(tmp_path / "state") == before
    assert worked(settings_of(broker, filled), tmp_path)["messages"] == 600


# ---- retention ---------------------------------------------------------------------------------------------


def test_retention_past_the_saved_offset_is_refused_with_its_size_or_passed_over_and_counted(
    broker, filled, tmp_path
):
    settings = settings_of(broker, filled)
    worked(settings, tmp_path)
    send(broker, filled, notes(500, 900))
    broker.delete_records(filled, {0: 730})
    before = tree(tmp_path / "state")
    refused(settings, tmp_path, 78, "230 offsets were removed", "partition 0: 500 to 730", "--on-gap skip")
    assert tree(tmp_path / "state") == before
    done = worked(settings, tmp_path, "--on-gap", "skip")
    assert (done["passed_over"], done["messages"]) == (230, 500 + 170)
    assert spans_of(tmp_path / "state", Kind.GAP) == [Span(Kind.GAP, 0, 500, 730)]
    assert kept_whole(tmp_path / "state") == 670


def overtaken(broker, topic, worker):
    """Retention takes 80 of 200 messages of partition 1, of which the worker has got none.

    Its request for records of both partitions waits at the broker and is answered by one of the other.
    """
    worker.learned(500)
    worker.tell(signal.SIGSTOP)
    send(broker, topic, notes(500, 501))
    time.sleep(ANSWERED_S)
    send(broker, topic, notes(501, 701), partition=1)
    broker.delete_records(topic, {1: 80})
    worker.tell(signal.SIGCONT)


def test_retention_that_overtakes_a_running_worker_stops_it_and_going_on_is_a_choice(
    broker, filled, tmp_path
):
    settings = settings_of(broker, filled)
    with Worker(settings, tmp_path) as worker:
        overtaken(broker, filled, worker)
        assert worker.wait() == 78, worker.said
        assert "80 offsets were removed" in worker.said and "partition 1: 0 to 80" in worker.said
    done = worked(settings, tmp_path, "--on-gap", "skip")
    assert (done["passed_over"], done["messages"]) == (80, 621)


def test_with_leave_a_running_worker_passes_over_what_retention_took_and_its_journal_says_so(
    broker, filled, tmp_path
):
    settings = settings_of(broker, filled)
    with Worker(settings, tmp_path, "--on-gap", "skip") as worker:
        overtaken(broker, filled, worker)
        worker.learned(621)
        worker.ready()
        assert any("80 messages were removed" in event["text"] for event in worker.events("warning"))
        worker.saved(621)
        worker.tell(signal.SIGKILL)
        worker.wait()
    done = worked(settings, tmp_path)
    assert (done["passed_over"], done["messages"]) == (0, 621)
    assert spans_of(tmp_path / "state", Kind.GAP) == [Span(Kind.GAP, 1, 0, 80)]
    assert next(s for s in spans_of(tmp_path / "state", Kind.READ) if s.partition == 1).first == 80
    same_when_learned_again(settings, tmp_path)
