"""A worker that is watched: what its port and its log lines say, against what it does."""

import io
import json
import logging
import os
import re
import signal
import socket
import threading
import time
import urllib.error
import urllib.request
from dataclasses import dataclass, field, replace
from pathlib import Path

import pytest
from prometheus_client.openmetrics.parser import text_string_to_metric_families as parse_openmetrics
from prometheus_client.parser import text_string_to_metric_families as parse

from stream.errors import BadSettings, CannotCreate, FileTrouble
from stream.operating import Exposition, Figures, Port, log_lines, not_ready, progress_fields, stuck
from stream.operating.figures import STUCK_S
from stream.runs.watching import Watch
from stream.runs.work import work
from stream.settings import Settings
from tests.memory_topic import MemoryTopic

STALE_S = 60.0
SECRET = "zanzibarquokka"


@dataclass(frozen=True)
class Feed:
    """A feed that answers, unless told otherwise."""

    since_contact_s: float | None = 0.5
    lags: dict = field(default_factory=lambda: {0: 7, 1: None, 2: 0})
    stalled: tuple = ()
    reconnects: int = 0
    trouble: str | None = None


GOOD, GONE, SILENT = Feed(), Feed(trouble="connection refused"), Feed(since_contact_s=61.0)
LIVE = Figures(phase="live", turned_s=1000.0, checkpoint_s=900.0, message_s=999.0)


def values(page):
    """{name, or name and labels: value} of every sample."""
    return {
        (sample.name, *sorted(sample.labels.items())): sample.value
        for family in parse(page)
        for sample in family.samples
    }


def free_port():
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        return taken.getsockname()[1]


def ask(port, path, accept="text/plain"):
    request = urllib.request.Request(f"http://127.0.0.1:{port}{path}", headers={"Accept": accept})
    try:
        with urllib.request.urlopen(request, timeout=10) as answer:
            return answer.status, answer.read().decode()
    except urllib.error.HTTPError as answer:
        return answer.code, answer.read().decode()


# ---- ready, stuck ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("figures", "feed", "now", "stopping", "ready", "healthy"),
    [
        (LIVE, GOOD, 1001.0, False, None, True),
        (LIVE, None, 1001.0, False, None, True),
        (LIVE, GOOD, 1001.0, True, "stopping", True),
        (replace(LIVE, phase="ending"), GOOD, 1001.0, False, "stopping", True),
        (replace(LIVE, phase="starting"), None, 9999.0, False, "starting", True),
        (replace(LIVE, phase="opening"), GONE, 9999.0, False, "connection refused", True),
        (replace(LIVE, phase="replaying"), GOOD, 1001.0, False, "journal", True),
        (LIVE, GONE, 1001.0, False, "cannot be reached: connection refused", True),
        (LIVE, SILENT, 1001.0, False, "not answered for 61 s", True),
        (LIVE, Feed(stalled=(3, 5)), 1001.0, False, "3, 5", True),
        (replace(LIVE, waiting=True), GOOD, 9999.0, False, "dead letters", True),
        (LIVE, GOOD, 1000.0 + STALE_S + 1, False, "not moved for 61 s", True),
        (LIVE, GOOD, 1000.0 + STUCK_S + 1, False, "not moved", False),
        (LIVE, None, 1000.0 + STUCK_S + 1, False, "not moved", False),
        (replace(LIVE, phase="replaying"), GOOD, 1000.0 + STUCK_S + 1, False, "journal", False),
        (replace(LIVE, phase="replaying", to_compile=True), GOOD, 1006.0, False, "compiling", True),
        (replace(LIVE, to_compile=True), GOOD, 1000.0 + STUCK_S + 1, False, "compiling", True),
        (replace(LIVE, to_compile=True), GOOD, 1001.0, False, None, True),
        (replace(LIVE, to_compile=True, checkpoints=1), GOOD, 1000.0 + STUCK_S + 1, False, "moved", False),
        (LIVE, GONE, 1000.0 + STUCK_S + 1, False, "cannot be reached", True),
        (LIVE, SILENT, 1000.0 + STUCK_S + 1, False, "not answered", True),
    ],
)
def test_ready_tells_the_truth_and_healthy_fails_only_where_a_new_start_would_help(
    figures, feed, now, stopping, ready, healthy
):
    found = not_ready(figures, feed, now, STALE_S, stopping)
    assert (found is None) if ready is None else (ready in found)
    assert (stuck(figures, feed, now, STALE_S) is None) == healthy


# ---- the page of metrics ---------------------------------------------------------------------------------


def page_of(figures, feed, ready=True):
    page = Exposition(figures, lambda: feed, lambda: ready, lambda: 1001.0)
    page.checkpoint(2.0)
    page.pause(0.04)
    return page


def test_the_page_has_every_figure_under_its_name():
    figures = replace(
        LIVE, messages=12, learned=112, rejects={"bad_json": 2}, live=9, log_loss=0.5, nonzeros=4
    )
    found = values(page_of(figures, GOOD).page()[0].decode())
    assert found[("bedload_messages_total",)] == 12
    assert found[("bedload_learned_messages",)] == 112
    assert found[("bedload_rejects_total", ("reason", "bad_json"))] == 2
    assert found[("bedload_lag_messages", ("partition", "0"))] == 7
    assert ("bedload_lag_messages", ("partition", "1")) not in found, "an unknown lag is no lag of 0"
    assert found[("bedload_last_fetch_age_seconds",)] == 0.5
    assert found[("bedload_last_checkpoint_age_seconds",)] == 101.0
    assert found[("bedload_last_message_age_seconds",)] == 2.0
    assert found[("bedload_window_log_loss",)] == 0.5
    assert ("bedload_window_calibration_ratio",) not in found, "undefined is left out"
    assert found[("bedload_nonzeros",)] == 4
    assert found[("bedload_live",)] == 9
    assert found[("bedload_ready",)] == 1
    assert found[("bedload_checkpoint_seconds_sum",)] == 2.0
    assert found[("bedload_pause_seconds_bucket", ("le", "0.05"))] == 1
    assert found[("bedload_pause_seconds_bucket", ("le", "0.025"))] == 0
    assert found[("process_resident_memory_bytes",)] > 1e6


def test_the_page_is_well_formed_in_both_formats_and_labels_hold_no_token():
    page = page_of(LIVE, GOOD)
    text, kind = page.page("application/openmetrics-text; version=1.0.0")
    assert "openmetrics" in kind
    assert any(family.name == "bedload_messages" for family in parse_openmetrics(text.decode()))
    labels = {name for key in values(page.page()[0].decode()) for name, _ in key[1:]}
    assert labels <= {"reason", "partition", "le", "implementation"}


# ---- the port --------------------------------------------------------------------------------------------


def test_a_port_answers_and_says_why_not():
    trouble = ["away"]
    port = Port("127.0.0.1", 0, page_of(LIVE, GOOD).page, {"/readyz": lambda: trouble[0]})
    try:
        assert ask(port.number, "/readyz") == (503, "away\n")
        trouble[0] = None
        assert ask(port.number, "/readyz?verbose") == (200, "ok\n")
        assert ask(port.number, "/metrics")[0] == 200
        assert ask(port.number, "/etc/passwd")[0] == 404
    finally:
        port.close()
    with pytest.raises(OSError, match="refused"):
        ask(port.number, "/readyz")


def test_a_taken_port_and_a_strange_address_are_said_clearly():
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        number = taken.getsockname()[1]
        with pytest.raises(CannotCreate, match=f"127.0.0.1:{number}.*another worker"):
            Port("127.0.0.1", number, lambda accept: (b"", ""), {})
    with pytest.raises(BadSettings, match=r"192\.0\.2\.1"):  # a block that RFC 5737 keeps for examples
        Port("192.0.2.1", 9464, lambda accept: (b"", ""), {})


# ---- log lines -------------------------------------------------------------------------------------------


def test_lines_are_json_objects_whatever_is_logged():
    out = io.StringIO()
    with log_lines("json", out):
        log = logging.getLogger("stream.topics.reading")
        log.warning("offsets could not be committed to group %s: %s", "g", 'odd "text"\nof two lines')
        fields = progress_fields(replace(LIVE, messages=500, learned=800), GOOD, 1001.0, 300, 10.0)
        log.info("x", extra={"event": "progress", "fields": fields})
    log.warning("after it was taken away")
    note, progress = map(json.loads, out.getvalue().splitlines())
    assert note["event"] == "note" and "two lines" in note["text"] and note["level"] == "warning"
    assert progress["messages"] == 800 and progress["messages_per_s"] == 20.0 and progress["lag"] == 7
    assert progress["checkpoint_age_s"] == 101.0 and progress["log_loss"] is None


def test_text_lines_stay_on_one_line():
    out = io.StringIO()
    with log_lines("text", out):
        logging.getLogger("stream.x").warning("one\ntwo\x1b[31m")
    assert re.fullmatch(r'\S+Z warning note text="one\\ntwo\\u001b\[31m" part=stream\.x\n', out.getvalue())


def test_a_warning_is_called_that_once():
    out = io.StringIO()
    with log_lines("text", out):
        fields = {"event": "warning", "fields": {"text": "watch out"}}
        logging.getLogger("stream.x").warning("warning", extra=fields)
    assert re.fullmatch(r'\S+Z warning text="watch out"\n', out.getvalue())


# ---- a worker --------------------------------------------------------------------------------------------


class Endless(MemoryTopic):
    """A topic whose cluster can go away."""

    trouble = None

    def health(self):
        """As a topic's."""
        return Feed(lags={0: self.end(0) - self._next.get(0, 0)}, trouble=self.trouble)


def lines_of(count):
    good = [{"note": f"left with porter {SECRET}{n % 7}", "late": n % 3 == 0} for n in range(count)]
    return [json.dumps(line).encode() for line in good] + [b'{"note": "' + SECRET.encode()] * 3


def worker_settings(port, **worker):
    return Settings.model_validate(
        {
            "message": {"label": "late"},
            "fields": [{"path": "note", "kind": "words"}],
            "metrics": {"window": 100},
            "worker": {"metrics_port": port, "log_every_s": 0.1, "log_format": "json", **worker},
        }
    )


def eventually(check):
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline:
        found = check()
        if found:
            return found
        time.sleep(0.05)
    raise AssertionError("it did not come to that")


class Client(threading.Thread):
    """Asks a worker in this process, whose loop has the main thread; then sends it SIGTERM."""

    def __init__(self, port, topic):
        super().__init__()
        self.port, self.topic, self.found = port, topic, {}

    def run(self):
        try:
            self.look()
        except Exception as error:
            self.found["error"] = repr(error)
        finally:
            os.kill(os.getpid(), signal.SIGTERM)

    def try_ask(self, path):
        try:
            return ask(self.port, path)
        except OSError:
            return 0, ""

    def look(self):
        eventually(lambda: self.try_ask("/readyz")[0] == 200)
        self.found["healthz"] = ask(self.port, "/healthz")
        eventually(lambda: values(ask(self.port, "/metrics")[1])[("bedload_messages_total",)] == 503)
        self.found["metrics"] = values(ask(self.port, "/metrics")[1])
        self.topic.trouble = "nobody there"
        self.found["away"] = ask(self.port, "/readyz")
        self.found["healthz_away"] = ask(self.port, "/healthz")
        time.sleep(0.5)
        self.topic.trouble = None
        self.found["back"] = ask(self.port, "/readyz")
        time.sleep(0.5)


@pytest.fixture(scope="module", autouse=True)
def compiled(tmp_path_factory):
    """Kernels are there, so that nobody waits for them while a worker is asked."""
    folder = tmp_path_factory.mktemp("compiled") / "state"
    work(worker_settings(None), folder, source=Endless([lines_of(500)]), until_end=True)


def test_a_worker_is_watched_from_its_start_to_its_stop(tmp_path, capsys):
    port = free_port()
    topic = Endless([lines_of(500)])
    client = Client(port, topic)
    client.start()
    work(worker_settings(port, checkpoint_every_s=0.1), tmp_path / "state", source=topic)
    client.join()
    found = client.found
    assert "error" not in found, found
    assert found["healthz"] == found["back"] == found["healthz_away"] == (200, "ok\n")
    assert found["away"] == (503, "the brokers cannot be reached: nobody there\n")
    assert sum(v for k, v in found["metrics"].items() if k[0] == "bedload_rejects_total") == 3
    assert found["metrics"][("bedload_lag_messages", ("partition", "0"))] == 0
    assert found["metrics"][("bedload_window_log_loss",)] > 0
    text = capsys.readouterr().err
    assert SECRET not in text
    lines = [json.loads(line) for line in text.splitlines()]
    events = [line["event"] for line in lines]
    assert events[0] == "started" and events[-1] == "stopped"
    for event in ("began", "live", "progress", "feed_away", "feed_back", "stopping"):
        assert event in events
    assert lines[-1]["messages"] == 503
    assert "messages" not in lines[events.index("began")]
    with pytest.raises(OSError, match="refused"):
        ask(port, "/metrics")


def test_counters_of_a_resumed_worker_begin_at_nothing_and_a_failed_checkpoint_is_told(
    tmp_path, capsys, monkeypatch
):
    settings = worker_settings(None)
    work(settings, tmp_path / "state", source=Endless([lines_of(500)]), until_end=True)
    capsys.readouterr()

    def broken(*args, **kwargs):
        raise FileTrouble("cannot write here: input/output error")

    monkeypatch.setattr("stream.checkpoints.write_array_folder", broken)
    more = Endless([lines_of(500) + lines_of(200)])
    with pytest.raises(FileTrouble):
        work(settings, tmp_path / "state", source=more, until_end=True)
    lines = [json.loads(line) for line in capsys.readouterr().err.splitlines()]
    by_event = {line["event"]: line for line in lines}
    assert by_event["resumed"]["messages"] == 503
    assert "input/output error" in by_event["checkpoint_failed"]["text"]
    assert by_event["failed"]["exit_code"] == 74
    assert by_event["failed"]["messages"] == 706


def test_a_feed_that_is_silent_since_the_start_has_an_age_to_alert_on():
    with Watch(worker_settings(None), []) as watch:
        age = values(watch.exposition.page()[0].decode())[("bedload_last_message_age_seconds",)]
    assert 0 <= age < 60


def test_the_line_of_a_failure_has_the_exit_code_of_a_bug_too(tmp_path, capsys):
    class Broken(Endless):
        def read(self, limit):
            raise KeyError("files")

    with pytest.raises(KeyError):
        work(worker_settings(None), tmp_path / "state", source=Broken([[]]))
    line = json.loads(capsys.readouterr().err.splitlines()[-1])
    assert (line["event"], line["exit_code"]) == ("failed", 70)


def test_a_worker_whose_port_is_taken_does_not_begin(tmp_path):
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        with pytest.raises(CannotCreate, match=r"worker\.metrics_port"):
            work(worker_settings(port), Path(tmp_path, "state"), source=Endless([lines_of(5)]))
    assert not (tmp_path / "state" / "journal").exists()
