"""What a newcomer gets wrong is said at once: settings that learn nothing, paths that no message has."""

import json
import os
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
    malformed, label = capsys.readouterr().err.splitlines()
    assert "9 of the sample's 310 lines are malformed" in malformed
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
