"""Command lines of `rejects`, `work` and `replay --journal` in; exit codes, tables and JSON out."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from stream.cli.main import main
from stream.runs.work import work
from stream.state_folder import StateFolder
from tests.memory_topic import MemoryPublisher, MemoryTopic, offset_of
from tests.replays import config_for, courier_lines, last_checkpoint, settings_for

ROOT = Path(__file__).parent.parent


@pytest.fixture(scope="module")
def lines(tmp_path_factory):
    return courier_lines(tmp_path_factory.mktemp("feed") / "log.jsonl")[:3_000]


@pytest.fixture(scope="module")
def worked(lines, tmp_path_factory):
    """A settings file beside a state folder that a worker left at the end of the log."""
    folder = tmp_path_factory.mktemp("worked")
    (folder / "log.jsonl").write_bytes(b"".join(line + b"\n" for line in lines))
    config = config_for(settings_for([folder / "log.jsonl"]), folder)
    assert main(["work", "--config", config, "--until-end"]) == 0
    return config


def output(capsys, *arguments, code=0):
    """What the command prints on standard output."""
    capsys.readouterr()
    assert main([str(argument) for argument in arguments]) == code
    return capsys.readouterr().out


def document(capsys, *arguments):
    return json.loads(output(capsys, *arguments, "--json"))


# ---- rejects ---------------------------------------------------------------------------------------------


def test_rejects_are_counted_by_reason_most_first(worked, capsys):
    found = document(capsys, "rejects", "counts", "--config", worked)
    assert found["rejects"] == sum(found["by_reason"].values()) > 5
    assert list(found["by_reason"].values()) == sorted(found["by_reason"].values(), reverse=True)
    table = output(capsys, "rejects", "counts", "--config", worked)
    for reason, number in found["by_reason"].items():
        assert any(row.split() == [reason, str(number)] for row in table.splitlines())


def test_the_latest_rejects_are_listed_without_what_they_say(worked, capsys):
    everything = document(capsys, "rejects", "list", "--config", worked, "--most", 0)
    assert len(everything["rejects"]) == everything["of"] > 5
    some = document(capsys, "rejects", "list", "--config", worked, "--most", 2)
    assert some["rejects"] == everything["rejects"][-2:]
    reason = everything["rejects"][0]["reason"]
    only = document(capsys, "rejects", "list", "--config", worked, "--reason", reason)
    assert {kept["reason"] for kept in only["rejects"]} == {reason}
    table = output(capsys, "rejects", "list", "--config", worked, "--most", 2)
    assert "the latest 2 of" in table
    assert all(len(row) <= 100 for row in table.splitlines())
    assert "line" not in everything["rejects"][0]


def test_one_reject_is_shown_whole_and_safe_to_print(worked, capsys, lines):
    listed = document(capsys, "rejects", "list", "--config", worked, "--most", 0)["rejects"]
    shown = [document(capsys, "rejects", "show", kept["number"], "--config", worked) for kept in listed]
    assert [kept["number"] for kept in shown] == [kept["number"] for kept in listed]
    texts = [kept["line"] for kept in shown if "line" in kept]
    assert len(texts) > 3
    assert all(text.encode() in lines or kept["cut"] for text, kept in zip(texts, shown, strict=False))
    for kept in listed:
        printed = output(capsys, "rejects", "show", kept["number"], "--config", worked)
        assert kept["reason"] in printed
        assert printed.replace("\n", "").isprintable()


def test_a_reject_that_is_not_kept_and_a_state_that_is_not_there_are_named(worked, tmp_path, capsys):
    assert main(["rejects", "show", "99999", "--config", worked]) == 66
    assert "no reject number 99999" in capsys.readouterr().err
    assert main(["rejects", "list", "--state", str(tmp_path / "none")]) == 66
    assert "there is no state folder" in capsys.readouterr().err
    (tmp_path / "empty").mkdir()
    assert main(["rejects", "counts", "--state", str(tmp_path / "empty"), "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == {"rejects": 0, "by_reason": {}}


def test_a_record_that_is_just_being_written_is_passed_over(worked, tmp_path, capsys):
    state = Path(worked).parent / "state"
    content = (state / "rejects/rejects.jsonl").read_bytes()
    (tmp_path / "state/rejects").mkdir(parents=True)
    (tmp_path / "state/rejects/rejects.jsonl").write_bytes(content[:-20])
    found = document(capsys, "rejects", "counts", "--state", tmp_path / "state")
    assert found["rejects"] == content.count(b"\n") - 1


def test_rejects_that_went_to_a_topic_are_counted_and_said_to_be_there(lines, tmp_path, capsys):
    (tmp_path / "log.jsonl").write_bytes(b"".join(line + b"\n" for line in lines))
    kept = settings_for([tmp_path / "log.jsonl"])
    settings = kept.model_copy(update={"rejects": kept.rejects.model_copy(update={"topic": "bad"})})
    config = config_for(settings, tmp_path)
    publisher = MemoryPublisher()
    work(settings, tmp_path / "state", until_end=True, connect=lambda: publisher)
    found = document(capsys, "rejects", "counts", "--config", config)
    assert found["rejects"] == sum(found["by_reason"].values()) == len(publisher.acknowledged) > 0
    assert document(capsys, "rejects", "counts", "--state", tmp_path / "state") == found
    for command in ("counts", "list"):
        assert main(["rejects", command, "--config", config]) == 0
        assert "rejects go to topic bad (rejects.topic)" in capsys.readouterr().err
        assert main(["rejects", command, "--state", str(tmp_path / "state")]) == 0
        assert "they went to rejects.topic" in capsys.readouterr().err


def test_before_the_first_snapshot_a_reader_is_told_when_a_worker_leaves_one(tmp_path, capsys):
    StateFolder(tmp_path / "state").close()
    assert main(["snapshots", "show", "--state", str(tmp_path / "state")]) == 66
    assert "`bedload work` leaves one every worker.snapshot_every_s" in capsys.readouterr().err
    assert main(["snapshots", "list", "--state", str(tmp_path / "absent")]) == 66
    assert "`bedload work` and `bedload replay` make one" in capsys.readouterr().err


# ---- work and replay --journal -----------------------------------------------------------------------------


def test_work_ends_with_one_document_and_goes_on_where_it_was(worked, capsys):
    found = document(capsys, "work", "--config", worked, "--until-end")
    assert found["resumed_from"] == found["messages"] == 3_000
    assert found["interrupted"] is False
    table = output(capsys, "work", "--config", worked, "--until-end")
    assert "3,000 messages" in table


def test_a_journal_is_followed_and_compared(worked, tmp_path, capsys):
    worker = Path(worked).parent / "state"
    arguments = ["replay", "--config", worked, "--state", tmp_path / "again", "--journal", worker]
    assert f"the same bytes as {worker}" in output(capsys, *arguments)
    assert last_checkpoint(tmp_path / "again") == last_checkpoint(worker)
    found = document(capsys, *arguments, "--fresh")
    assert found["differences"] == []
    assert main([str(a) for a in arguments]) == 73
    assert main([*map(str, arguments), "--epochs", "2", "--fresh"]) == 64


def test_what_does_not_agree_exits_65(worked, tmp_path, capsys, lines):
    worker = Path(worked).parent / "state"
    changed = [b'{"redelivered": true, "note": "x"}' if at == 100 else line for at, line in enumerate(lines)]
    size = len(lines[100])
    changed[100] = changed[100][:-1].ljust(size - 1) + b"}"
    assert len(changed[100]) == size
    (tmp_path / "log.jsonl").write_bytes(b"".join(line + b"\n" for line in changed))
    config = config_for(settings_for([tmp_path / "log.jsonl"]), tmp_path)
    assert main(["replay", "--config", config, "--journal", str(worker)]) == 65
    assert "is not what" in capsys.readouterr().err


def test_a_mistaken_command_line_and_a_held_folder_have_their_codes(worked, capsys):
    assert main(["work", "--config", worked, "--on-gap", "jump"]) == 64
    with StateFolder(Path(worked).parent / "state"):
        assert main(["work", "--config", worked, "--until-end"]) == 75
    assert f"process {os.getpid()}" in capsys.readouterr().err


def test_replay_of_a_topic_names_the_commands_for_it_and_removes_nothing(worked, capsys):
    before = last_checkpoint(Path(worked).parent / "state")
    topic = ["--set", "feed.kind=topic", "--set", "feed.topic=t", "--set", 'feed.servers=["localhost:1"]']
    assert main(["replay", "--config", worked, "--fresh", *topic]) == 78
    assert "`bedload work`" in capsys.readouterr().err
    assert last_checkpoint(Path(worked).parent / "state") == before


def test_a_state_that_is_a_file_is_told_apart_from_a_broken_disk(worked, tmp_path, capsys):
    (tmp_path / "state").write_text("a list of depots")
    for state in (tmp_path / "state", tmp_path / "state/inner"):
        assert main(["work", "--config", worked, "--state", str(state), "--until-end"]) == 73
        assert f"{tmp_path / 'state'} is a file" in capsys.readouterr().err
    assert (tmp_path / "state").read_text() == "a list of depots"


def test_messages_that_were_passed_over_are_told_at_the_end_too(worked, tmp_path, capsys, monkeypatch):
    topic = MemoryTopic([[b'{"note": "gate code", "redelivered": true}'] * 9], on_gap="skip")
    topic.start()
    topic.log_starts[0] = offset_of(4)
    monkeypatch.setattr("stream.runs.work.live_source", lambda *_, **__: topic)
    told = output(capsys, "work", "--config", worked, "--state", tmp_path / "state", "--until-end")
    assert f"{offset_of(4)} messages were removed before they were read: passed over" in told


@pytest.mark.parametrize("call", ["work", "work --accept-settings", "replay --fresh --journal"])
def test_a_state_of_logs_does_not_go_on_from_a_topic(worked, tmp_path, capsys, call):
    topic = ["--set", "feed.kind=topic", "--set", "feed.topic=t", "--set", 'feed.servers=["localhost:1"]']
    folder = Path(worked).parent / "state"
    state = [folder, "--state", tmp_path / "again"] if "journal" in call else []
    before = last_checkpoint(folder)
    assert main([*call.split(), *map(str, state), "--config", worked, *topic]) == 78
    assert "the state was learned from logs; the settings read topic t" in capsys.readouterr().err
    assert last_checkpoint(folder) == before


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_the_program_told_to_stop_exits_0_within_seconds(lines, tmp_path, number):
    (tmp_path / "log.jsonl").write_bytes(b"".join(line + b"\n" for line in lines))
    config = config_for(settings_for([tmp_path / "log.jsonl"]), tmp_path)
    program = [sys.executable, "-c", "from stream.cli.main import run; run()"]
    with subprocess.Popen(
        [*program, "work", "--config", config, "--json"],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as process:
        deadline = time.monotonic() + 120
        while not any(tmp_path.glob("state/checkpoints/[0-9]*")):
            assert time.monotonic() < deadline and process.poll() is None
            time.sleep(0.05)
        began = time.monotonic()
        process.send_signal(number)
        out, _ = process.communicate(timeout=30)
    assert time.monotonic() - began < 10
    assert process.returncode == 0
    found = json.loads(out)
    assert found["interrupted"] is True
    assert int(last_checkpoint(tmp_path / "state")[0]) == found["messages"]
