"""Faults of a simulated feed, its late outcomes and its pace: what the truth file counts is what is there."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections import Counter
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from kafka import KafkaConsumer, TopicPartition

from simulator import CourierFeed, Faults, Pace, write_log
from simulator.faults import MALFORMED, Records, Transport
from simulator.feed import BLOCK
from simulator.log_file import FileSink
from simulator.outcomes import DELAYS, LateOutcomes, time_text
from simulator.scenarios import SCENARIOS
from stream.cli.main import main
from stream.cli.topic_sink import TopicSink
from stream.errors import Unavailable
from stream.runs.replay import replay
from tests import replays

MESSAGES = 10_000
FEED = CourierFeed(seed=5, messages=MESSAGES, messages_per_day=500)
ALL = Faults(duplicates=0.03, reordering=0.05, malformed=0.02, gaps=0.04)
RUN = [sys.executable, "-c", "from stream.cli.main import run; run()"]


def read(path: Path) -> list[bytes]:
    return path.read_bytes().splitlines()


def number_of(line: bytes) -> int:
    """Of the message; the id is whole in malformed ones too."""
    return int(line[line.index(b'"h') + 2 :][:9])


@pytest.fixture(scope="module")
def clean(tmp_path_factory: pytest.TempPathFactory) -> list[bytes]:
    path = tmp_path_factory.mktemp("clean") / "log"
    write_log(FEED, path)
    return read(path)


@pytest.fixture(scope="module")
def faulty(tmp_path_factory: pytest.TempPathFactory) -> tuple[list[bytes], dict[str, Any]]:
    path = tmp_path_factory.mktemp("faulty") / "log"
    write_log(FEED, path, faults=ALL)
    return read(path), json.loads(Path(f"{path}.truth.json").read_text("utf-8"))


# Records


def test_every_record_is_a_message_or_a_spoilt_one_and_each_is_counted(
    clean: list[bytes], faulty: tuple[list[bytes], dict[str, Any]]
) -> None:
    lines, truth = faulty
    told = truth["records"]
    spoilt = Counter[str]()
    good = Counter[int]()
    for line in lines:
        message = clean[number_of(line)]
        ways = [name for name, spoil in MALFORMED.items() if line == spoil(message)]
        if line == message:
            good[number_of(line)] += 1
        else:
            (way,) = ways
            spoilt[way] += 1
    assert told["written"] == len(lines)
    assert told["malformed"] == dict(spoilt) and min(spoilt.values()) > 10
    assert told["duplicates"] == sum(good.values()) - len(good)
    assert told["missing"] == MESSAGES - len(good) - sum(spoilt.values())
    latest = np.maximum.accumulate([-1, *map(number_of, lines)])
    assert told["reordered"] == int(np.sum(np.array([number_of(line) for line in lines]) < latest[:-1]))


def test_faults_have_their_shares(faulty: tuple[list[bytes], dict[str, Any]]) -> None:
    told = faulty[1]["records"]
    assert told["missing"] == pytest.approx(0.04 * MESSAGES, rel=0.35)
    assert sum(told["malformed"].values()) == pytest.approx(0.02 * MESSAGES, rel=0.3)
    assert told["duplicates"] == pytest.approx(0.03 * MESSAGES, rel=0.3)
    assert told["reordered"] == pytest.approx(0.08 * MESSAGES, rel=0.3)
    assert faulty[1]["faults"]["gaps"] == 0.04


def test_gaps_are_runs_and_what_is_reordered_stays_near(clean: list[bytes], tmp_path: Path) -> None:
    write_log(FEED, tmp_path / "log", faults=Faults(gaps=0.2))
    numbers = [number_of(line) for line in read(tmp_path / "log")]
    gaps = np.diff([-1, *numbers, MESSAGES]) - 1
    assert numbers == sorted(numbers)
    assert 20 < gaps[gaps > 0].mean() < 90
    write_log(FEED, tmp_path / "log", faults=Faults(reordering=0.1))
    lines = read(tmp_path / "log")
    assert sorted(lines) == clean and lines != clean
    behind = np.arange(MESSAGES) - [number_of(line) for line in lines]
    assert 50 < behind.max() <= 100


def test_no_fault_changes_no_byte_and_same_faults_give_the_same_bytes(
    clean: list[bytes], faulty: tuple[list[bytes], dict[str, Any]], tmp_path: Path
) -> None:
    write_log(FEED, tmp_path / "log", faults=Faults())
    assert read(tmp_path / "log") == clean
    write_log(FEED, tmp_path / "log", faults=ALL, pace=Pace(10_000_000.0))
    assert read(tmp_path / "log") == faulty[0]


def test_a_replay_counts_what_the_truth_file_counts(
    faulty: tuple[list[bytes], dict[str, Any]], tmp_path: Path
) -> None:
    (tmp_path / "log.jsonl").write_bytes(b"\n".join(faulty[0]) + b"\n")
    settings_for: Any = replays.settings_for
    chosen = settings_for([tmp_path / "log.jsonl"], message={"max_reject_share": 1.0})
    summary = replay(chosen, tmp_path / "state").summary
    told = faulty[1]["records"]
    assert summary.messages == told["written"]
    assert summary.rejected == sum(told["malformed"].values())


def taken(source: Transport, lines: list[bytes], step: int) -> list[tuple[int, bytes]]:
    """What a transport hands over of these messages when it is given `step` of them at a time."""
    parts = [source.take(first, lines[first : first + step]) for first in range(0, len(lines), step)]
    return [pair for part in (*parts, source.rest()) for pair in zip(part.number, part.values, strict=True)]


SHARES = st.floats(0, 0.5)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**63 - 1), st.tuples(SHARES, SHARES, SHARES, SHARES), st.integers(1, 400))
def test_counts_add_up_whatever_the_shares_and_however_the_feed_is_cut(
    seed: int, shares: tuple[float, float, float, float], step: int
) -> None:
    feed, faults = CourierFeed(seed=seed, messages=400), Faults(*shares)
    lines = [b'{"id":"h%09d","note":"n"}' % number for number in range(400)]
    source = Transport(feed, faults)
    records = taken(source, lines, step)
    assert records == taken(Transport(feed, faults), lines, 400)
    told, good = source.counts(), [number for number, line in records if line == lines[number]]
    assert told["written"] == len(records)
    assert told["duplicates"] == len(good) - len(set(good))
    assert sum(told["malformed"].values()) == len(records) - len(good)
    assert told["missing"] == 400 - len({number for number, _ in records})
    assert sorted(set(good)) == sorted(good) or faults.duplicates > 0


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 2**63 - 1), SHARES, SHARES, st.integers(1, 400))
def test_outcomes_add_up_and_come_in_time_however_the_feed_is_cut(
    seed: int, lost: float, repeated: float, step: int
) -> None:
    feed = CourierFeed(seed=seed, messages=400)
    faults = Faults(lost_outcomes=lost, repeated_outcomes=repeated)
    second, outcome = np.arange(400) * 700, np.arange(400) % 3 == 0

    def written(step: int) -> tuple[list[bytes], dict[str, Any]]:
        late, found = LateOutcomes(feed, faults), list[bytes]()
        for first in range(0, 400, step):
            rows = slice(first, min(first + step, 400))
            late.take(first, second[rows], outcome[rows])
            now = late.due(int(second[rows.stop - 1]))
            assert all(json.loads(line)["at"] <= time_text(int(second[rows.stop - 1])) for line in now.values)
            found += now.values
        return found + list(late.rest().values), late.counts()

    lines, told = written(step)
    assert (lines, told) == written(400)
    assert told["written"] == len(lines) == 400 - told["lost"] + told["repeated"]
    assert told["lost"] == 400 - len({json.loads(line)["id"] for line in lines})


# Late outcomes


@pytest.fixture(scope="module")
def late(tmp_path_factory: pytest.TempPathFactory) -> tuple[list[Any], list[Any], dict[str, Any]]:
    folder = tmp_path_factory.mktemp("late")
    faults = Faults(lost_outcomes=0.1, repeated_outcomes=0.05)
    write_log(FEED, folder / "log", outcome_path=folder / "outcomes", faults=faults)
    found = [[json.loads(line) for line in read(folder / name)] for name in ("log", "outcomes")]
    return found[0], found[1], json.loads((folder / "log.truth.json").read_text("utf-8"))


def test_messages_have_no_outcome_and_the_outcomes_have_them_in_the_order_of_time(
    clean: list[bytes], late: tuple[list[Any], list[Any], dict[str, Any]]
) -> None:
    messages, outcomes, truth = late
    whole = [json.loads(line) for line in clean]
    assert messages == [{k: v for k, v in m.items() if k != "redelivered"} for m in whole]
    assert [o["at"] for o in outcomes] == sorted(o["at"] for o in outcomes)
    labels = {m["id"]: m["redelivered"] for m in whole}
    assert all(list(o) == ["id", "at", "redelivered"] for o in outcomes)
    assert all(o["redelivered"] == labels[o["id"]] for o in outcomes)
    times = Counter(o["id"] for o in outcomes)
    assert truth["outcomes"] == {
        "written": len(outcomes),
        "lost": MESSAGES - len(times),
        "repeated": len(outcomes) - len(times),
        "waiting": 0,
    }
    assert max(times.values()) == 2
    assert truth["outcomes"]["lost"] == pytest.approx(0.1 * MESSAGES, rel=0.15)
    assert truth["outcomes"]["repeated"] == pytest.approx(0.05 * MESSAGES, rel=0.2)


def test_delays_have_their_quantiles(late: tuple[list[Any], list[Any], dict[str, Any]]) -> None:
    messages, outcomes, _ = late
    came = {m["id"]: datetime.fromisoformat(m["at"]) for m in messages}
    first = {o["id"]: datetime.fromisoformat(o["at"]) for o in reversed(outcomes)}
    delays = np.array([(at - came[id_]).total_seconds() for id_, at in first.items()])
    for share, seconds in DELAYS:
        assert (delays <= seconds).mean() == pytest.approx(share, abs=0.02)
    assert delays.min() >= 60
    assert timedelta(seconds=delays.max()) < timedelta(days=30)


def test_outcomes_do_not_depend_on_the_faults_of_messages(
    late: tuple[list[Any], list[Any], dict[str, Any]], tmp_path: Path
) -> None:
    faults = Faults(0.1, 0.1, 0.1, 0.1, lost_outcomes=0.1, repeated_outcomes=0.05)
    write_log(FEED, tmp_path / "log", outcome_path=tmp_path / "outcomes", faults=faults)
    assert [json.loads(line) for line in read(tmp_path / "outcomes")] == late[1]


# Pace


class Watch:
    """A clock that sleeping moves."""

    def __init__(self) -> None:
        self.now = 100.0

    def sleep(self, seconds: float) -> None:
        self.now += seconds


def test_a_rate_is_kept_and_nothing_is_early(tmp_path: Path) -> None:
    watch, sent = Watch(), []
    pace = Pace(1_000.0, clock=lambda: watch.now, sleep=watch.sleep)
    write_log(
        CourierFeed(messages=3_000),
        tmp_path / "log",
        pace=pace,
        progress=lambda done, _: sent.append((watch.now - 100.0, done)),
    )
    assert sent[-1][0] == pytest.approx(3.0, abs=0.1)
    assert all(done <= seconds * 1_000 + 51 for seconds, done in sent)


def test_a_stop_leaves_whole_lines_and_the_truth_of_what_is_written(
    clean: list[bytes], tmp_path: Path
) -> None:
    done = [0]
    pace = Pace(50_000.0, stopped=lambda: done[0] >= BLOCK + 1_000, sleep=lambda _: None)

    def progress(count: int, _: int) -> None:
        done[0] = count

    path, outcomes = tmp_path / "log", tmp_path / "outcomes"
    truth = write_log(FEED, path, outcome_path=outcomes, faults=ALL, pace=pace, progress=progress)
    lines = read(path)
    assert path.read_bytes().endswith(b"\n")
    assert BLOCK + 1_000 <= truth.messages < BLOCK + 4_000
    assert len({number_of(line) for line in lines}) + truth.records["missing"] == truth.messages
    assert truth.records["written"] == len(lines)
    assert truth.outcomes is not None and truth.outcomes["waiting"] > 1_000
    assert truth.outcomes["written"] + truth.outcomes["waiting"] == truth.messages
    assert truth.outcomes["written"] == len(read(outcomes))
    p = [json.loads(line)["redelivered"] for line in clean[: truth.messages]]
    assert truth.redelivered_share == pytest.approx(sum(p) / len(p))


# The command


def test_a_signal_ends_a_paced_log_with_its_truth(tmp_path: Path) -> None:
    options = ["--out", "log", "--rate", "200", "--messages", "100000", "--outcomes", "late"]
    child = subprocess.Popen([*RUN, "simulate", *options], cwd=tmp_path, stderr=subprocess.PIPE)
    log = tmp_path / "log"
    deadline = time.monotonic() + 60
    while not (log.exists() and log.stat().st_size > 5_000) and time.monotonic() < deadline:
        time.sleep(0.02)
    child.send_signal(signal.SIGINT)
    _, said = child.communicate(timeout=60)
    assert child.returncode == 130
    truth = json.loads((tmp_path / "log.truth.json").read_text("utf-8"))
    assert f"stopped after {truth['messages']:,} of 100,000 messages".encode() in said
    assert len(read(log)) == truth["messages"] > 0
    assert sorted(os.listdir(tmp_path)) == ["late", "log", "log.truth.json"]


def test_the_command_tells_what_went_wrong_on_the_way(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    arguments = ["--messages", "2000", "--fault", "gaps=0.1", "--fault", "malformed=0.1"]
    arguments += ["--outcomes", "late.jsonl", "--fault", "lost_outcomes=0.2", "--scenario", "slow-drift"]
    assert main(["simulate", "--out", "log.jsonl", *arguments]) == 0
    said = capsys.readouterr().out.splitlines()
    truth = json.loads(Path("log.jsonl.truth.json").read_text("utf-8"))
    assert len(said) == 3 and all(len(line) <= 130 for line in said)
    assert said[1].startswith(f"on the way: {truth['records']['missing']} missing, ")
    assert said[2].startswith(f"late.jsonl: {truth['outcomes']['written']:,} outcomes, ")
    assert truth["settings"]["scenario"] == "slow-drift" and len(truth["course"]) == 33


@pytest.mark.parametrize(
    ("arguments", "code", "told"),
    [
        (["--out", "x", "--fault", "dup=0.1"], 64, "there are duplicates, reordering"),
        (["--out", "x", "--fault", "gaps=0.95"], 64, "gaps is 0.95; allowed is 0 to 0.9"),
        (["--out", "x", "--fault", "gaps=much"], 64, "gaps must be a number"),
        (["--out", "x", "--fault", "malformed=0.6", "--fault", "duplicates=0.6"], 64, "together"),
        (["--out", "x", "--fault", "lost_outcomes=0.1"], 64, "need --outcomes PLACE"),
        (["--out", "x", "--rate", "0"], 64, "rate is 0.0; allowed is above 0"),
        (["--out", "x", "--rate", "nan"], 64, "rate is nan"),
        (["--out", "x", "--outcomes", "x"], 64, "--out and --outcomes are both x"),
        (["--out", "x", "--topic", "t"], 64, "give one of --out FILE"),
        (["--topic", "t"], 64, "--topic needs --servers HOST:PORT"),
        (["--out", "x", "--servers", "h:1"], 64, "say where a --topic is"),
        (["--topic", "t", "--servers", "h"], 78, "--servers: feed.servers (item 1)"),
        (["--topic", "a/b", "--servers", "h:1"], 78, "--topic: feed.topic"),
        (
            ["--out", "x", "--scenario", "fast-drift"],
            64,
            "--scenario: scenario is 'fast-drift'; there are st",
        ),
        (["--out", "x", "--messages", "0"], 64, "--messages: messages is 0; allowed is 1 to"),
        (["--out", "x", "--seed", "-1"], 64, "--seed: seed is -1; allowed is 0 to"),
        (["--out", "x", "--set", "messages=5"], 78, "there is no messages; there are words_per_note"),
        (["--out", "x", "--messages", "10000000", "--set", "growth=1"], 78, "lower growth"),
        (["--out", "x", "--set", "moving=0.1"], 78, "it counts in sudden-change, slow-drift, seasonal"),
    ],
)
def test_what_cannot_be_is_refused_with_the_cure(
    arguments: list[str],
    code: int,
    told: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(["simulate", *arguments]) == code
    assert told in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []


def test_the_help_names_every_scenario() -> None:
    pages = (Path(__file__).parent.parent / "docs" / "commands.md").read_text("utf-8")
    text = " ".join(pages.split("## bedload simulate\n")[1].split("\n## ")[0].split())
    names = text.split("--scenario NAME One of ")[1].split(". ")[0]
    assert sorted(names.split(", ")) == sorted(SCENARIOS)


# Topics


class Brokers:
    """A publisher whose brokers are away at some calls."""

    def __init__(self, *away: int) -> None:
        self.calls, self.away, self.sent = 0, away, list[bytes]()

    def send(self, topic: str, key: bytes, value: bytes, headers: dict[str, bytes]) -> None:
        self.calls += 1
        if self.calls in self.away:
            raise Unavailable("nobody there")
        self.sent.append(value)


def test_brokers_that_went_away_are_waited_for_and_those_that_never_came_are_not() -> None:
    records = Records(np.arange(4), [b"a", b"b", b"c", b"d"])
    brokers: Any = Brokers(3, 4, 6)
    TopicSink(brokers, "t", None, FileSink(None)).messages(records)
    assert brokers.sent == records.values
    never: Any = Brokers(1)
    with pytest.raises(Unavailable):
        TopicSink(never, "t", None, FileSink(None)).messages(records)
    assert never.calls == 1


def everything(servers: list[str], topic: str) -> list[Any]:
    """Every record of a topic."""
    consumer = KafkaConsumer(bootstrap_servers=servers, auto_offset_reset="earliest")
    places = [TopicPartition(topic, number) for number in consumer.partitions_for_topic(topic)]
    consumer.assign(places)
    consumer.seek_to_beginning(*places)
    end = sum(consumer.end_offsets(places).values())
    found: list[Any] = []
    while len(found) < end:
        found += [record for part in consumer.poll(500).values() for record in part]
    consumer.close()
    return found


def test_messages_and_late_outcomes_go_to_topics_each_beside_its_message(
    broker: Any, topic: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:

    monkeypatch.chdir(tmp_path)
    for name in (topic, f"{topic}.late"):
        broker.make_topic(name, partitions=3)
    faults = ["duplicates=0.05", "malformed=0.02", "gaps=0.05", "lost_outcomes=0.1"]
    options = [
        "--messages",
        "1500",
        "--seed",
        "5",
        *(part for fault in faults for part in ("--fault", fault)),
    ]
    to_topics = ["--topic", topic, "--servers", broker.servers[0], "--outcomes", f"{topic}.late"]
    assert main(["simulate", *to_topics, *options, "--truth", "truth", "--probabilities", "p"]) == 0
    assert main(["simulate", "--out", "log", "--outcomes", "late", *options, "--probabilities", "p2"]) == 0
    written, late = (everything(broker.servers, name) for name in (topic, f"{topic}.late"))
    for records, file in ((written, "log"), (late, "late")):
        assert sorted(record.value for record in records) == sorted(read(Path(file)))
        assert all(record.key == b"h%09d" % number_of(record.value) for record in records)
        assert {record.partition for record in records} == {0, 1, 2}
    where = {record.key: record.partition for record in written}
    assert all(where.get(record.key, record.partition) == record.partition for record in late)
    assert Path("truth").read_bytes() == Path("log.truth.json").read_bytes()
    assert Path("p").read_bytes() == Path("p2").read_bytes()


def test_a_topic_that_is_not_there_is_told_and_no_file_is_left(
    broker: Any,
    topic: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(["simulate", "--topic", topic, "--servers", broker.servers[0], "--truth", "truth"]) == 69
    assert f"topic {topic}" in (said := capsys.readouterr().err)
    assert "whether the topics of --topic and --outcomes are there" in said
    assert list(tmp_path.iterdir()) == []
