"""What a newcomer gets wrong is said at once: settings that learn nothing, paths that no message has."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from stream.cli.main import main

NOTES = ("gate left", "dog rings", "porch wet")


def message(i):
    return {"id": f"h{i}", "note": NOTES[i % 3], "stop": f"S{i % 4}", "redelivered": i % 3 == 0}


@pytest.fixture
def here(tmp_path, monkeypatch):
    """A working folder with a log and settings that fit it."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "log.jsonl").write_text("".join(json.dumps(message(i)) + "\n" for i in range(300)))
    (tmp_path / "bedload.toml").write_text(SETTINGS)
    return tmp_path


SETTINGS = """
feed.paths = "log.jsonl"
message.label = "redelivered"
message.id = "id"
learner.l1_per_example = 1e-6
fields = [{path = "note", kind = "words"}, {path = "stop", kind = "category"}]
"""


def replay_json(capsys, *arguments):
    code = main(["replay", "--json", *arguments])
    out, err = capsys.readouterr()
    said = [line for line in err.splitlines(keepends=True) if "compiling, the first time" not in line]
    return code, json.loads(out) if out else None, "".join(said)


# Settings that learn nothing


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ('message.label = "redelivered"', "message.label"),
        ('fields = [{path = "note", kind = "words"}, {path = "stop", kind = "category"}]', "[[fields]]"),
    ],
)
def test_settings_without_outcome_or_fields_are_refused_before_anything_is_made(here, line, said, capsys):
    (here / "bedload.toml").write_text(SETTINGS.replace(line, ""))
    assert main(["replay"]) == 78
    out, err = capsys.readouterr()
    assert out == ""
    assert said in err
    assert not (here / "state").exists()


def test_a_label_path_that_no_message_has_is_warned_of(here, capsys):
    code, document, err = replay_json(capsys, "--set", "message.label=redeliverd")
    assert code == 0
    assert document["labelled"] == 0
    (warning,) = document["warnings"]
    assert "`redeliverd` (message.label)" in warning
    assert err == f"bedload: {warning}\n"


def test_a_field_path_that_no_message_has_is_warned_of(here, capsys):
    (here / "bedload.toml").write_text(SETTINGS.replace('path = "stop"', 'path = "stp", name = "place"'))
    _, document, err = replay_json(capsys)
    assert document["warnings"] == ["no message had `stp` (field place): is the path right?"]
    assert err.count("\n") == 1


def test_what_only_the_last_message_has_is_no_cause_for_a_warning(here, capsys):
    log = here / "log.jsonl"
    late = [{**message(i), "stop": None, "redelivered": None} for i in range(2_000)]
    log.write_text("".join(json.dumps(m) + "\n" for m in [*late, message(1)]))
    _, document, err = replay_json(capsys)
    assert (document["warnings"], err) == ([], "")


def test_going_on_warns_of_nothing_that_was_there_before(here, capsys):
    assert replay_json(capsys)[0] == 0
    assert replay_json(capsys, "--resume")[1]["warnings"] == []
    with (here / "log.jsonl").open("a") as log:
        log.write('{"id": "h300", "note": "gate"}\n')
    _, document, _ = replay_json(capsys, "--resume")
    assert (document["messages"], document["warnings"]) == (301, [])


# A first settings file


def test_init_says_at_once_what_of_the_sample_is_doubtful(here, capsys):
    with (here / "log.jsonl").open("a") as log:
        log.write('{"note": "gate", "redelivered": "maybe"}\n' + "nonsense\n" * 9)
    assert main(["init", "--sample", "log.jsonl", "--out", "new.toml"]) == 0
    malformed, many, label = capsys.readouterr().err.splitlines()
    assert "9 of the sample's 310 lines are malformed and will be rejected" in malformed
    assert "With 10 of 310 lines rejected, more than message.max_reject_share = 0.01 allows" in many
    assert '"redelivered" is true / false or 1 / 0 but for 1 of 301 values' in label


# The first run


def test_the_first_run_says_that_it_compiles_and_the_second_does_not(here):
    (here / "doubling.py").write_text(
        "from stream.kernel import kernel\n@kernel\ndef twice(x): return 2 * x\n"
    )
    code = (
        "import doubling; from stream.cli.compiling import note_compiling; "
        "note_compiling('doubling'); doubling.twice(1)"
    )
    paths = ":".join([str(here), *filter(None, sys.path), str(Path(__file__).parents[1])])
    call = [sys.executable, "-c", code]
    environment = {**os.environ, "NUMBA_CACHE_DIR": str(here / "cache"), "PYTHONPATH": paths}
    said = [
        subprocess.run(call, env=environment, capture_output=True, text=True, check=True).stderr
        for _ in range(2)
    ]
    assert said == ["bedload: compiling, the first time only (about a minute)\n", ""]


def test_errors_before_the_first_message_stand_alone(here, capsys):
    assert main(["replay", "--set", "feed.paths=absent.jsonl"]) == 66
    assert capsys.readouterr().out == ""


# Going on with nothing new


def test_going_on_with_nothing_new_says_so_and_leaves_every_snapshot_as_it_is(here, capsys):
    assert main(["replay"]) == 0
    before = sorted(path.name for path in (here / "state/snapshots").iterdir())
    capsys.readouterr()
    assert main(["replay", "--resume", "--set", "state.checkpoint_every=50"]) == 0
    out = capsys.readouterr().out
    assert out.splitlines()[-1].startswith("nothing new since message 300; snapshot ")
    assert "strongest" not in out
    assert sorted(path.name for path in (here / "state/snapshots").iterdir()) == before


def test_the_summary_calls_an_exact_auc_exact(here, capsys):
    assert main(["replay"]) == 0
    assert re.search(r"^AUC [0-9.]+, (exact|within [0-9.e-]+)$", capsys.readouterr().out, re.MULTILINE)


# Outputs


@pytest.fixture
def learned(here, capsys):
    assert main(["replay"]) == 0
    capsys.readouterr()
    return here


def test_an_export_has_the_format_of_its_ending(learned, capsys):
    for ending, start in (("csv", b"address,"), ("json", b"["), ("parquet", b"PAR1"), ("txt", b"address,")):
        assert main(["snapshots", "export", "--out", f"e.{ending}"]) == 0
        assert (learned / f"e.{ending}").read_bytes().startswith(start)
    assert main(["snapshots", "export", "--out", "f.parquet", "--format", "csv"]) == 64
    assert not (learned / "f.parquet").exists()
    assert main(["snapshots", "export", "--out", "f.txt", "--format", "json"]) == 0
    assert "differ" in capsys.readouterr().err


def test_simulate_never_replaces_a_log(here, capsys):
    before = (here / "log.jsonl").read_bytes()
    assert main(["simulate", "--out", "log.jsonl", "--messages", "10"]) == 73
    assert "give another --out" in capsys.readouterr().err
    assert (here / "log.jsonl").read_bytes() == before


@pytest.mark.parametrize(
    "arguments",
    [
        ["simulate", "--out", "{}/x", "--messages", "10"],
        ["init", "--sample", "log.jsonl", "--out", "{}/x"],
        ["snapshots", "export", "--out", "{}/x"],
    ],
    ids=lambda arguments: arguments[0],
)
def test_where_nothing_can_be_written_the_cure_is_told(arguments, learned, capsys, monkeypatch):
    assert main([text.format("absent") for text in arguments]) == 73
    assert capsys.readouterr().err.startswith(
        "bedload: absent/x: there is no folder absent: make it, or give"
    )
    (learned / "fixed").mkdir()
    allowed = os.access
    monkeypatch.setattr(os, "access", lambda path, mode: str(path) != "fixed" and allowed(path, mode))
    assert main([text.format("fixed") for text in arguments]) == 77
    assert "may not be written by this user: give another --out" in capsys.readouterr().err


# Scores


def test_a_log_that_is_not_there_is_named_without_talk_of_settings(learned, capsys):
    for command in ("score", "explain"):
        assert main([command, "absent.jsonl"]) == 66
        err = capsys.readouterr().err
        assert "absent.jsonl: no such log" in err
        assert "feed.paths" not in err


def test_a_log_whose_name_looks_like_a_pattern_is_scored(learned, capsys):
    (learned / "a[1].jsonl").write_text(json.dumps(message(1)) + "\n")
    assert main(["score", "a[1].jsonl", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["id"] == "h1"


def test_a_rejected_message_says_why_once(learned, capsys):
    (learned / "bad.jsonl").write_text('{"note": 7}\n')
    for command in ("score", "explain"):
        assert main([command, "bad.jsonl"]) == 65
        (line,) = capsys.readouterr().err.splitlines()
        assert "1 of 1 message was rejected (bad.jsonl, byte 0: note is a whole number" in line


def test_other_settings_than_the_snapshots_are_told_one_a_line(learned, capsys):
    (learned / "other.toml").write_text(SETTINGS.replace('"stop"', '"place"') + "space.seed = 9\n")
    assert main(["score", "log.jsonl", "--config", "other.toml", "--state", "state"]) == 78
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) >= 4
    assert max(map(len, lines)) < 250
    assert "leave --config out" in lines[-1]


def test_an_explanation_has_room_for_a_long_field_name_and_no_empty_heading(learned, capsys):
    long = "vehicle.telemetry.last_depot_code"
    settings = SETTINGS.replace('path = "stop"', f'path = "stop", name = "{long}"')
    (learned / "long.toml").write_text(settings)
    assert main(["replay", "--config", "long.toml", "--state", "long"]) == 0
    capsys.readouterr()
    assert main(["explain", "log.jsonl", "--state", "long", "--id", "h0"]) == 0
    out = capsys.readouterr().out
    assert f"  {long} " in out
    assert max(map(len, out.splitlines())) <= 100
    headed = re.findall(r"^towards .*\n(.)", out, re.MULTILINE)
    assert headed and set(headed) == {" "}


# Troubles and unknown keys


def test_damage_is_told_whole_below_the_list(learned, capsys):
    (path,) = (learned / "state/checkpoints").glob("*/*.safetensors")
    path.write_bytes(path.read_bytes()[:-1])
    assert main(["checkpoints", "list"]) == 0
    _, row, trouble = capsys.readouterr().out.splitlines()
    assert row.endswith("damaged")
    assert str(path.name) in trouble and "…" not in trouble


@pytest.mark.parametrize("key", ["learner.banana", "banana.l1x", "banana", "state.colour"])
def test_a_key_like_no_other_gets_no_foolish_suggestion(key, here, capsys):
    assert main(["replay", "--set", f"{key}=1"]) == 78
    err = capsys.readouterr().err
    assert "unknown key; there are " in err
    assert "nearest" not in err


def test_a_suggestion_ends_with_one_mark(capsys):
    assert main(["reply"]) == 64
    assert "?;" not in capsys.readouterr().err
