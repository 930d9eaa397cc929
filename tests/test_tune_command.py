"""`bedload tune` as its users meet it: options, streams, exit codes, files, going on when it was stopped."""

import csv
import json
import os
import pty
import re
import signal
import subprocess
import sys
import time
import tomllib
from datetime import datetime, timedelta, timezone

import pytest

from simulator import CourierFeed, write_log
from stream.cli.main import main

RUN = [sys.executable, "-c", "from stream.cli.main import run; run()"]
MESSAGES = 1_600
SETTINGS = """\
# The depot's feed.
[feed]
paths = ["log.jsonl"]
[message]
id = "id"
time = "at"
label = "redelivered"
[[fields]]
path = "note"
kind = "words"
[[fields]]
path = "route"
kind = "category"
[learner]
learning_rate = 0.2 # as ever
l1_per_example = 1e-4
"""


@pytest.fixture(scope="module")
def log(tmp_path_factory):
    path = tmp_path_factory.mktemp("courier") / "log.jsonl"
    write_log(CourierFeed(seed=3, messages=MESSAGES), path)
    return path


@pytest.fixture
def here(log, tmp_path, monkeypatch):
    """A folder of one's own with a log and a bedload.toml; the working folder."""
    (tmp_path / "log.jsonl").symlink_to(log)
    (tmp_path / "bedload.toml").write_text(SETTINGS)
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture(scope="module")
def tuned(log, tmp_path_factory):
    """A folder after a tune of two learning rates and nine strengths, with what went to each stream."""
    folder = tmp_path_factory.mktemp("tuned")
    (folder / "log.jsonl").symlink_to(log)
    (folder / "bedload.toml").write_text(SETTINGS)
    done = run(
        *("tune", "--out", "found", "--strengths", "9", "--learning-rates", "0.1,0.3"),
        *("--write-settings", "chosen.toml"),
        folder=folder,
    )
    assert done.returncode == 0, done.stderr
    return folder, done.stdout.decode(), done.stderr.decode()


@pytest.fixture
def ask(here, capsys):
    """Runs `tune --json` with the rest of the arguments, in two learning rates unless they say otherwise."""

    def ask(*arguments, strengths="9"):
        capsys.readouterr()
        code = main(["tune", "--out", "found", "--strengths", strengths, "--json", *arguments])
        out, err = capsys.readouterr()
        assert code == 0, err
        return json.loads(out)

    return ask


def run(*arguments, folder=None, **options):
    return subprocess.run([*RUN, *arguments], cwd=folder, capture_output=True, timeout=180, **options)


def document(folder, out="found"):
    return json.loads((folder / out / "tuning.json").read_text())


# What is shown


def test_people_get_a_table_of_the_chosen_rate_the_reasons_and_the_place_of_the_report(tuned):
    _, out, err = tuned
    lines = out.splitlines()
    assert re.fullmatch(r"At learning rate 0\.[13]; the log's last part, .*:", lines[0])
    assert lines[2].split("  ")[0] == "l1_per_example"
    assert sum("chosen" in line for line in lines[3:12]) == 1
    assert "Rule: the lowest log loss of 18 candidates." in lines
    assert any(line.startswith("Runner-up: ") for line in lines)
    assert "Report: found/report.html" in lines and "Settings with the choice: chosen.toml" in lines
    assert all(len(line) <= 100 for line in lines[2:12])
    assert "first pass: 1,600 messages" in err
    assert "\x1b" not in out + err and "\r" not in out + err


def test_the_folder_has_report_document_and_tables_for_nobody_else_to_read(tuned):
    found = tuned[0] / "found"
    names = {path.name for path in found.iterdir()}
    assert {"report.html", "tuning.json", "trials"} <= names
    tables = [path for path in found.iterdir() if path.suffix == ".csv"]
    assert tables
    for path in (found, found / "report.html", found / "tuning.json", *tables):
        assert path.stat().st_mode & 0o077 == 0, path
    with (found / "candidates.csv").open(newline="") as table:
        rows = list(csv.DictReader(table))
    assert [int(row["nnz"]) for row in rows] == [one["nnz"] for one in document(tuned[0])["candidates"]]


def test_json_has_the_choice_and_every_candidate_and_nothing_else_is_on_that_stream(ask):
    found = ask("--learning-rates", "0.1,0.3")
    row = {"l1_per_example", "l1", "learning_rate", "log_loss", "nnz", "log_loss_se"}
    assert set(found) == {
        *("chosen", "candidates", "rule", "said", "warnings", "seconds", "messages", "report")
    }
    assert len(found["candidates"]) == 18 and all(set(one) == row for one in found["candidates"])
    assert found["chosen"] == min(found["candidates"], key=lambda one: one["log_loss"])
    assert found["chosen"]["log_loss_se"] == 0.0
    assert (found["messages"], found["report"], found["rule"]) == (
        MESSAGES,
        "found/report.html",
        "lowest_loss",
    )
    assert found["seconds"] > 0


def test_on_a_terminal_progress_is_drawn_and_wiped_away(here):
    terminal, end = pty.openpty()
    with subprocess.Popen(
        [*RUN, "tune", "--out", "found", "--strengths", "8", "--json"],
        stdout=subprocess.PIPE,
        stderr=end,
        env={**os.environ, "TERM": "xterm"},
    ) as child:
        os.close(end)
        seen = b""
        while True:
            try:
                piece = os.read(terminal, 4096)
            except OSError:
                break
            seen += piece
        assert child.stdout is not None
        json.loads(child.stdout.read())
    os.close(terminal)
    assert child.returncode == 0
    assert b"settings side by side" in seen and b"left" in seen


# Which candidate


def test_strengths_are_short_numbers_but_for_the_strongest(ask):
    strengths = [one["l1_per_example"] for one in ask()["candidates"]]
    assert strengths == sorted(strengths, reverse=True)
    assert all(float(f"{strength:.6g}") == strength for strength in strengths[1:])
    assert strengths[0] / strengths[-1] == pytest.approx(1000, rel=1e-4)


def test_strengths_and_learning_rates_may_be_given_and_twice_the_same_counts_once(ask):
    found = ask("--learning-rates", "0.3,0.1,0.3", strengths="1e-3,1e-2,1e-3")
    pairs = [(one["learning_rate"], one["l1_per_example"]) for one in found["candidates"]]
    assert pairs == [(0.3, 1e-2), (0.3, 1e-3), (0.1, 1e-2), (0.1, 1e-3)]


def test_without_learning_rates_the_one_of_the_settings_is_tried(ask):
    assert {one["learning_rate"] for one in ask()["candidates"]} == {0.2}


def test_a_limit_of_weights_is_kept_and_the_best_within_it_taken(ask):
    found = ask("--max-weights", "12")
    within = [one for one in found["candidates"] if one["nnz"] <= 12]
    assert 0 < len(within) < 9
    assert found["chosen"]["log_loss"] == min(one["log_loss"] for one in within)
    assert "at most 12 non-zero weights" in found["said"][0]


def test_a_limit_of_bytes_is_kept(ask, here):
    everything = ask() and document(here)["candidates"]
    limit = sorted(one["bytes"] for one in everything)[4]
    found = ask("--max-bytes", f"{limit / 1000}KB")
    chosen = everything[document(here)["choice"]["index"]]
    assert found["rule"] == "max_bytes" and chosen["bytes"] <= limit
    assert chosen["log_loss"] == min(one["log_loss"] for one in everything if one["bytes"] <= limit)


def test_sparsest_within_one_standard_error_takes_fewer_weights_or_says_that_none_qualifies(ask, here):
    found = ask("--pick", "sparsest_within_one_se")
    candidates, choice = document(here)["candidates"], document(here)["choice"]
    best = candidates[choice["best"]]
    within = [
        one for one in candidates if one["nnz"] < best["nnz"] and one["difference"] <= one["log_loss_se"]
    ]
    chosen = candidates[choice["index"]]
    if within:
        assert chosen["nnz"] == min(one["nnz"] for one in within)
    else:
        assert chosen == best and "No sparser candidate qualifies" in found["said"][0]


def test_the_penalty_on_the_sum_is_tuned_on_request(ask, here):
    found = ask("--over", "l1", "--set", "learner.l1_per_example=1e-3")
    assert [one["l1"] for one in found["candidates"]] == sorted(
        (one["l1"] for one in found["candidates"]), reverse=True
    )
    assert {one["l1_per_example"] for one in found["candidates"]} == {1e-3}
    grid = document(here)["grid"]
    assert grid["unit"] == "l1" and grid["strongest"] == found["candidates"][0]["l1"]


def test_the_other_learner_is_tuned_too(ask):
    truncated = ("--set", 'learner.method="truncated-gradient"')
    found = ask(*truncated, "--learning-rates", "0.05,0.2")
    assert len(found["candidates"]) == 18
    assert found["candidates"][0]["nnz"] < found["candidates"][8]["nnz"]


# A forward test


def test_a_forward_test_scores_what_was_not_learned(ask, here):
    ask("--forward-from", "70%")
    share = [one["forward_log_loss"] for one in document(here)["candidates"]]
    assert all(0 < loss < 1 for loss in share)
    assert share != [one["log_loss"] for one in document(here)["candidates"]]
    ask("--forward-from", "0.7")
    assert share == [one["forward_log_loss"] for one in document(here)["candidates"]]
    ask()
    assert {one["forward_log_loss"] for one in document(here)["candidates"]} == {None}


def test_a_forward_test_may_begin_at_a_time(ask, here, log):
    """That of the message after 70 % of them, written in another zone, and the moment before."""
    lines = log.read_text().splitlines()
    at = json.loads(lines[MESSAGES * 7 // 10])["at"]
    assert at > json.loads(lines[MESSAGES * 7 // 10 - 1])["at"] and at.endswith("Z")
    there = datetime.fromisoformat(at).astimezone(timezone(timedelta(hours=5, minutes=30))).isoformat()

    def losses(forward_from, **options):
        ask("--forward-from", forward_from, **options)
        return [one["forward_log_loss"] for one in document(here)["candidates"]]

    share, given = losses("70%"), "1e-2,1e-3"
    assert losses(at) == losses(there) == share
    assert any(f"learned {MESSAGES * 7 // 10:,} of" in text for text in document(here)["passes"])
    assert losses("71%") != share
    assert losses(at, strengths=given) == losses("70%", strengths=given)


def test_a_forward_test_from_a_time_on_wants_to_know_where_times_are(here, capsys):
    (here / "bedload.toml").write_text(SETTINGS.replace('time = "at"\n', ""))
    assert main(["tune", "--out", "x", "--forward-from", "2031-03-03T00:00:00Z"]) == 78
    assert "needs message.time; or give a share" in capsys.readouterr().err


# The settings with the choice


def test_the_copy_of_the_settings_has_the_choice_keeps_its_remarks_and_replays_to_the_figures_shown(
    tuned, capsys
):
    folder = tuned[0]
    found = document(folder)
    chosen = found["candidates"][found["choice"]["index"]]
    text = (folder / "chosen.toml").read_text()
    assert text.startswith("# The depot's feed.\n") and "# as ever" in text
    assert f"learning_rate = {chosen['learning_rate']} # as ever" in text
    before, after = tomllib.loads(SETTINGS), tomllib.loads(text)
    assert {**before, "learner": after["learner"]} == after
    assert after["learner"] == {key: chosen[key] for key in ("learning_rate", "l1_per_example")}
    assert main(["replay", "--config", str(folder / "chosen.toml"), "--fresh", "--json"]) == 0
    replayed = json.loads(capsys.readouterr().out)
    assert (replayed["log_loss"], replayed["nnz"]) == (chosen["log_loss_whole"], chosen["nnz"])


def test_a_file_that_is_there_is_not_written_over(here, capsys):
    before = (here / "bedload.toml").read_text()
    assert main(["tune", "--out", "found", "--write-settings", "bedload.toml"]) == 73
    assert "bedload.toml" in capsys.readouterr().err
    assert (here / "bedload.toml").read_text() == before
    assert not (here / "found").exists()


# Mistakes


@pytest.mark.parametrize(
    ("arguments", "code", "said"),
    [
        ([], 64, "--out"),
        (["--out", "x", "--strengths", "0"], 64, "--strengths takes numbers above 0"),
        (["--out", "x", "--strengths", "many"], 64, "for example 0.05,0.1; got 'many'"),
        (["--out", "x", "--strengths", "2.5"], 64, "whole number of them, or strengths set apart by commas"),
        (["--out", "x", "--strengths", "1e-3,-1"], 64, "--strengths takes numbers above 0"),
        (["--out", "x", "--learning-rates", "0.1,,0.2"], 64, "--learning-rates takes numbers above 0"),
        (["--out", "x", "--span", "1"], 64, "--span takes a number above 1"),
        (["--out", "x", "--memory", "lots"], 64, "--memory takes bytes, or a number with KB, MB or GB"),
        (["--out", "x", "--memory", "10KB"], 78, "--memory allows"),
        (["--out", "x", "--forward-from", "7"], 64, "--forward-from takes a share of the log such as 70%"),
        (["--out", "x", "--forward-from", "0.01%"], 78, "share or time in between"),
        (["--out", "x", "--forward-from", "2031-03-03"], 64, "2031-03-03T06:00:00Z; got '2031-03-03'"),
        (["--out", "x", "--forward-from", "2001-03-03T00:00:00Z"], 78, "share or time in between"),
        (["--out", "x", "--forward-from", "2041-03-03T00:00:00Z"], 65, "no message of the log has the time"),
        (["--out", "x", "--pick", "boldest"], 64, "lowest_loss"),
        (["--out", "x", "--max-weights", "5", "--max-bytes", "1MB"], 64, "give one of them"),
        (["--out", "x", "--max-weights", "5", "--pick", "sparsest_within_one_se"], 64, "give one of them"),
        (["--out", "x", "--max-bytes", "100"], 78, "the smallest has"),
        (["--out", "x", "--workers", "0"], 64, "--workers"),
        (["--out", "x", "--config", "absent.toml"], 66, "absent.toml"),
        (["--out", "x", "--set", 'feed.paths=["-"]'], 78, "standard input"),
        (["--out", "x", "--set", 'feed.paths=["absent.jsonl"]'], 66, "absent.jsonl"),
        (["--out", "x", "--set", "feed.kind=topic"], 78, "feed"),
        (["--out", "x", "--set", "message.label=absent"], 65, "message.label"),
        (["--out", "x", "--set", "message.label=absent", "--strengths", "0.1,0.01"], 65, "has a label"),
        (
            ["--out", "x", "--over", "l1", "--set", 'learner.method="truncated-gradient"'],
            78,
            "takes l1_per_example alone",
        ),
    ],
)
def test_a_mistake_ends_with_its_code_and_a_cure(arguments, code, said, here, capsys):
    assert main(["tune", *arguments]) == code
    out, err = capsys.readouterr()
    assert out == ""
    last = err.splitlines()[-1]
    assert last.startswith("bedload: ") and said in last, err
    assert not (here / "x" / "report.html").exists()


@pytest.mark.parametrize(
    ("arguments", "code", "said"),
    [
        (["--out", "log.jsonl"], 73, "is no folder: give another --out"),
        (["--out", "log.jsonl/deeper/x"], 73, "is no folder: give another --out"),
        (["--out", "x", "--truth", "bedload.toml"], 65, "is no truth file"),
        (["--out", "x", "--truth", "absent.json"], 66, "absent.json"),
    ],
)
def test_what_would_fail_in_the_end_is_told_before_the_log_is_gone_through(
    arguments, code, said, here, capsys
):
    before = sorted(here.iterdir())
    assert main(["tune", *arguments]) == code
    err = capsys.readouterr().err
    assert said in err and "first pass" not in err
    assert sorted(here.iterdir()) == before


def test_a_copy_of_settings_wants_a_file_to_copy(here, capsys, monkeypatch):
    (here / "bedload.toml").rename(here / "other.toml")
    monkeypatch.setenv("BEDLOAD_FEED__PATHS", '["log.jsonl"]')
    assert main(["tune", "--out", "x", "--write-settings", "chosen.toml"]) == 64
    assert "--config" in capsys.readouterr().err


def test_a_feed_from_a_topic_is_sent_to_its_recorded_log(here, capsys):
    topic = '[feed]\nkind = "topic"\nservers = ["127.0.0.1:1"]\ntopic = "handoffs"\nstart = "earliest"\n'
    (here / "bedload.toml").write_text(topic + SETTINGS.split("[message]")[0].split("[feed]")[0])
    (here / "bedload.toml").write_text(topic + "[message]" + SETTINGS.split("[message]")[1])
    assert main(["tune", "--out", "x"]) == 78
    assert 'feed.kind = "log" with feed.paths' in capsys.readouterr().err


def test_a_log_whose_last_outcomes_are_not_known_yet_says_so(here, capsys, log):
    lines = [json.loads(line) for line in log.read_text().splitlines()]
    for message in lines[MESSAGES * 6 // 10 :]:
        del message["redelivered"]
    (here / "log.jsonl").unlink()
    (here / "log.jsonl").write_text("".join(json.dumps(message) + "\n" for message in lines))
    assert main(["tune", "--out", "x", "--strengths", "4"]) == 65
    assert "leave out the messages whose outcome is not known yet" in capsys.readouterr().err


def test_a_log_that_is_too_short_is_refused(here, capsys, log):
    lines = log.read_text().splitlines(keepends=True)
    (here / "log.jsonl").unlink()
    (here / "log.jsonl").write_text("".join(lines[:399]))
    assert main(["tune", "--out", "x"]) == 65
    assert "too few" in capsys.readouterr().err


# Going on


def test_what_was_tried_is_not_tried_again_and_nothing_changes(ask, here):
    first = ask()
    report = document(here)
    again = ask()
    same = ("chosen", "candidates", "said", "rule", "messages", "report", "warnings")
    assert {key: again[key] for key in same} == {key: first[key] for key in same}
    assert any("were tried before" in text for text in document(here)["passes"])
    assert document(here)["candidates"] == report["candidates"]
    assert document(here)["paths"] == report["paths"]


def test_an_interrupted_tune_goes_on_and_ends_as_one_that_was_let_run(here, log):
    """Memory for some of the lanes at a time, so that it takes several passes; killed after the first."""
    lines = log.read_text()
    (here / "log.jsonl").unlink()
    (here / "log.jsonl").write_text(lines * 6)
    words = ("--strengths", "32", "--json", "--memory", "1.2MB")
    child = subprocess.Popen(
        [*RUN, "tune", "--out", "found", *words], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    trials = here / "found" / "trials"
    until = time.monotonic() + 120
    while child.poll() is None and time.monotonic() < until:
        if trials.exists() and [path for path in trials.iterdir() if not path.name.startswith(".")]:
            child.send_signal(signal.SIGKILL)
            break
        time.sleep(0.002)
    child.communicate()
    assert child.returncode == -signal.SIGKILL
    assert not (here / "found" / "report.html").exists()
    went_on = run("tune", "--out", "found", *words, folder=here)
    assert went_on.returncode == 0 and b"were tried before" in went_on.stderr
    let_run = run("tune", "--out", "other", "--strengths", "32", "--json", folder=here)
    one, other = json.loads(went_on.stdout), json.loads(let_run.stdout)
    assert one["candidates"] == other["candidates"]


def test_ctrl_c_ends_with_its_code_and_one_line(here, log):
    lines = log.read_text()
    (here / "log.jsonl").unlink()
    (here / "log.jsonl").write_text(lines * 60)
    child = subprocess.Popen(
        [*RUN, "tune", "--out", "found"], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    said = child.stderr.readline()
    while "first pass" not in said:
        assert said, "ended before it was interrupted"
        said = child.stderr.readline()
    child.send_signal(signal.SIGINT)
    out, err = child.communicate(timeout=60)
    assert (child.returncode, out) == (130, "")
    assert err == "bedload: stopped before the end\n"
