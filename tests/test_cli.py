"""The command line as its users see it: help, exit codes, what stands on which stream, tables that add up."""

import errno
import fcntl
import json
import math
import os
import pty
import re
import subprocess
import sys
from decimal import Decimal
from pathlib import Path

import pytest

from stream.cli.exits import BROKEN_PIPE, INTERRUPTED, exit_code_of
from stream.cli.main import main
from stream.cli.screen import Column, show_table
from stream.errors import BedloadError
from tests.help_pages import commands, page

DOCS = Path(__file__).parent.parent / "docs"
RUN = [sys.executable, "-c", "from stream.cli.main import run; run()"]


@pytest.fixture(scope="module")
def learned(tmp_path_factory):
    """A folder with log.jsonl, bedload.toml and the state of a replay with checkpoints."""
    folder = tmp_path_factory.mktemp("courier")
    log, config = str(folder / "log.jsonl"), str(folder / "bedload.toml")
    assert main(["simulate", "--out", log, "--messages", "3000", "--set", "first_words=400"]) == 0
    assert main(["init", "--sample", log, "--out", config]) == 0
    small = ["--set", "state.checkpoint_every=1000", "--set", "learner.l1_per_example=5e-4"]
    assert main(["replay", "--config", config, *small]) == 0
    return folder


@pytest.fixture
def config(learned):
    return str(learned / "bedload.toml")


def run(*arguments, folder=None, **options):
    """A process of its own, as a shell would start it."""
    return subprocess.run([*RUN, *arguments], cwd=folder, capture_output=True, timeout=120, **options)


# Help


def test_help_starts_without_anything_heavy():
    heavy = {"numpy", "numba", "pydantic", "rich", "msgspec", "zstandard", "mmh3", "simulator"}
    code = (
        "import sys; from stream.cli.main import main; main(['--help']); "
        f"print(sorted({heavy!r} & set(sys.modules)), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stderr.strip() == "[]"


def test_every_command_stands_in_the_docs_with_its_help_as_it_is():
    assert (DOCS / "commands.md").read_text() == page(), "python -m tests.help_pages > docs/commands.md"


def test_every_command_takes_json():
    for command in commands():
        if command and command not in {("snapshots",), ("checkpoints",), ("rejects",)}:
            assert "--json" in page_of(command), command


def page_of(command):
    title = f"## {' '.join(('bedload', *command))}\n"
    return (DOCS / "commands.md").read_text().split(title)[1].split("\n## ")[0]


# Exit codes


@pytest.mark.parametrize(
    ("arguments", "code", "said"),
    [
        ([], 64, "Missing command"),
        (["reply"], 64, "No such command"),
        (["replay", "--presto"], 64, "`bedload replay --help` says what there is"),
        (["replay", "--epochs", "0"], 64, "--epochs"),
        (["replay", "--resume", "--fresh"], 64, "give one of them"),
        (["replay"], 64, "no bedload.toml here"),
        (["replay", "--config", "absent.toml"], 66, "absent.toml"),
        (["init", "--sample", "absent.jsonl"], 66, "absent.jsonl"),
        (["snapshots", "list", "--state", "absent"], 66, "no such state folder"),
        (["checkpoints", "restore", "1", "--state", "absent"], 66, "no such state folder"),
        (["simulate"], 64, "--out FILE"),
        (["simulate", "--out", "x.jsonl", "--set", "base_rate=2"], 78, "base_rate is 2"),
        (["simulate", "--out", "x.jsonl", "--set", "base_rat=0.2"], 78, "there are words_per_note"),
        (["simulate", "--out", "x.jsonl", "--set", "first_words=x"], 78, "must be a whole number"),
        (["simulate", "--out", "absent/x.jsonl"], 73, "absent/x.jsonl: there is no folder absent"),
    ],
)
def test_a_mistake_ends_with_its_code_and_one_line(arguments, code, said, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    assert main(arguments) == code
    out, err = capsys.readouterr()
    assert out == ""
    assert said in err
    assert err.startswith("bedload: ")
    assert err.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "code", "said"),
    [
        (["replay"], 73, "--resume"),
        (["replay", "--set", "learner.l1=oops", "--fresh"], 78, "learner.l1"),
        (["replay", "--resume", "--set", "learner.l2=1"], 78, "learner.l2"),
        (["snapshots", "show", "--snapshot", "77"], 66, "77"),
        (["snapshots", "pin", "77"], 66, "77"),
        (["snapshots", "export", "--format", "xls", "--out", "x"], 64, "xls"),
        (["checkpoints", "restore", "77"], 66, "77"),
        (["explain", "log.jsonl", "--id", "h999"], 66, "h999"),
        (["score", "absent.jsonl"], 66, "absent.jsonl"),
    ],
)
def test_a_mistake_over_a_state_ends_with_its_code(arguments, code, said, learned, monkeypatch, capsys):
    monkeypatch.chdir(learned)
    assert main(arguments) == code
    assert said in capsys.readouterr().err


def test_a_state_folder_in_use_is_for_later(learned, config, capsys):
    with open(learned / "state" / "LOCK", "rb") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        assert main(["replay", "--config", config, "--resume"]) == 75
        assert main(["checkpoints", "restore", "1000", "--config", config]) == 75
    assert "in use" in capsys.readouterr().err


def test_settings_of_another_feature_space_do_not_score(learned, config, tmp_path, capsys):
    other = tmp_path / "other.toml"
    text = Path(config).read_text().replace("seed = 0", "seed = 9")
    other.write_text(f"{text}\n")
    (tmp_path / "state").symlink_to(learned / "state")
    assert main(["score", str(learned / "log.jsonl"), "--config", str(other)]) == 78
    assert "space.seed: 9 here, 0 there" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (BedloadError("x"), 70),
        (ZeroDivisionError("x"), 70),
        (FileNotFoundError(errno.ENOENT, "x", "f"), 66),
        (PermissionError(errno.EACCES, "x", "f"), 77),
        (FileExistsError(errno.EEXIST, "x", "f"), 73),
        (OSError(errno.ENOSPC, "x", "f"), 73),
        (OSError(errno.EIO, "x", "f"), 74),
        (KeyboardInterrupt(), INTERRUPTED),
    ],
)
def test_errors_that_nobody_caught_have_codes_and_no_traceback(error, code, capsys, monkeypatch):
    def call():
        raise error

    monkeypatch.delenv("BEDLOAD_TRACEBACK", raising=False)
    assert exit_code_of(call) == code
    assert "Traceback" not in capsys.readouterr().err
    monkeypatch.setenv("BEDLOAD_TRACEBACK", "1")
    assert exit_code_of(call) == code
    assert "Traceback" in capsys.readouterr().err


def test_asking_for_a_traceback_is_no_setting(learned, config, monkeypatch, capsys):
    monkeypatch.setenv("BEDLOAD_TRACEBACK", "1")
    assert main(["snapshots", "list", "--config", config]) == 0
    assert capsys.readouterr().err == ""


def test_a_reader_that_goes_away_is_not_an_error_message(learned):
    call = [*RUN, "score", "--json", "log.jsonl"]
    with subprocess.Popen(
        call, cwd=learned, stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE
    ) as process:
        process.stdout.close()
        assert process.stderr.read() == b""
        assert process.wait(60) == BROKEN_PIPE


# JSON


JSON_COMMANDS = [
    ["init", "--sample", "log.jsonl", "--out", "again.toml"],
    ["replay", "--state", "again"],
    ["snapshots", "list"],
    ["snapshots", "show"],
    ["snapshots", "show", "--most", "0"],
    ["snapshots", "compare", "3000", "3000"],
    ["snapshots", "check"],
    ["snapshots", "export", "--out", "w.csv"],
    ["snapshots", "pin", "3000"],
    ["snapshots", "pin", "3000", "--off"],
    ["snapshots", "use", "3000"],
    ["snapshots", "use"],
    ["snapshots", "prune"],
    ["checkpoints", "list"],
]


@pytest.mark.parametrize("arguments", JSON_COMMANDS, ids=" ".join)
def test_json_is_one_document_and_nothing_else(arguments, learned, monkeypatch, capsys):
    monkeypatch.chdir(learned)
    for made in ("again.toml", "w.csv"):
        Path(made).unlink(missing_ok=True)
    assert main([*arguments, "--json"]) == 0
    out, err = capsys.readouterr()
    assert isinstance(json.loads(out), dict)
    assert out.count("\n") == 1
    assert err == ""


def test_replay_tells_what_the_contract_names(learned, config, tmp_path, capsys):
    assert main(["replay", "--config", config, "--state", str(tmp_path / "s"), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    names = """messages labelled rejected tokens log_loss normalised_entropy auc nnz live seconds
        messages_per_s peak_rss_bytes resumed_from checkpoints snapshot"""
    assert set(names.split()) <= set(document)
    assert document["messages"] == document["labelled"] == 3000
    assert document["resumed_from"] is None
    assert Path(document["snapshot"]).is_dir()


def test_the_demo_needs_nothing_and_can_be_run_again(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert main(["demo", "--messages", "2000"]) == 0
    text = capsys.readouterr().out
    assert "true weight" in text
    assert "probability" in text
    assert main(["demo", "--messages", "2000", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["replay"]["messages"] == 2000
    assert len(document["scores"]) == 8
    assert main(["snapshots", "list", "--config", "demo/bedload.toml"]) == 0


def test_the_demo_leaves_a_folder_of_somebody_else_alone(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    Path("demo").mkdir()
    Path("demo/mine").write_text("mine")
    assert main(["demo"]) == 73
    assert [path.name for path in Path("demo").iterdir()] == ["mine"]


def test_simulate_writes_the_same_bytes_to_a_file_and_to_standard_output(tmp_path, capfdbinary):
    log, truth = tmp_path / "log.jsonl", tmp_path / "truth.json"
    arguments = ["simulate", "--messages", "500", "--seed", "4"]
    assert main([*arguments, "--out", str(log)]) == 0
    capfdbinary.readouterr()
    assert main([*arguments, "--json", "--truth", str(truth)]) == 0
    assert capfdbinary.readouterr().out == log.read_bytes()
    assert json.loads(truth.read_text())["settings"]["seed"] == 4


@pytest.mark.parametrize(
    ("more", "told"),
    [
        ([], "; the truth is in no file: --truth FILE keeps it"),
        (["--truth", "truth.json"], "; the truth is in truth.json"),
        (["--outcomes", "late.jsonl"], "; the truth is in no file: --truth FILE keeps it"),
    ],
)
def test_a_log_on_standard_output_has_nothing_else_there_and_the_truth_is_where_it_is_told(
    more, told, tmp_path, monkeypatch, capfdbinary
):
    monkeypatch.chdir(tmp_path)
    assert main(["simulate", "--out", "-", "--messages", "3", *more]) == 0
    out, said = capfdbinary.readouterr()
    assert [json.loads(line)["id"] for line in out.splitlines()] == ["h000000000", "h000000001", "h000000002"]
    first = said.decode().splitlines()[0]
    assert first.startswith("standard output: 3 messages, ") and first.endswith(told)
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(more[1:])


# Scores and their reasons


def lines_of(done):
    return [json.loads(line) for line in done.stdout.decode().splitlines()]


def test_score_answers_each_message_in_order_and_says_which_it_cannot_use(learned):
    good = (learned / "log.jsonl").read_bytes().splitlines(keepends=True)
    bad = [b"nonsense\n", b'{"id":"x","note":7}\n']
    done = run("score", "--json", folder=learned, input=b"".join([good[0], bad[0], *good[1:200], bad[1]]))
    found = lines_of(done)
    assert done.returncode == 0
    assert [line["id"] for line in found[2:-1]] == [json.loads(line)["id"] for line in good[1:200]]
    assert [line.get("rejected") for line in (found[0], found[1], found[-1])] == [
        None,
        "bad_json",
        "wrong_type",
    ]
    assert found[1]["probability"] is None
    assert "standard input, byte" in found[1]["detail"]
    assert b"2 of 202 messages were rejected" in done.stderr
    for line in found[2:-1]:
        assert math.isclose(line["probability"], 1 / (1 + math.exp(-line["margin"])), rel_tol=1e-12)


def test_score_ends_with_bad_data_where_too_many_messages_are_rejected(learned):
    done = run("score", "--json", folder=learned, input=b"{}\n{\n")
    assert done.returncode == 65
    assert [line.get("rejected") for line in lines_of(done)] == [None, "bad_json"]
    assert b"max_reject_share" in done.stderr


def test_outcomes_in_the_log_change_no_score(learned):
    lines = [json.loads(line) for line in (learned / "log.jsonl").read_text().splitlines()[:50]]
    bare = [{k: v for k, v in line.items() if k != "redelivered"} for line in lines]
    texts = ["".join(json.dumps(line) + "\n" for line in group).encode() for group in (lines, bare)]
    first, second = (run("score", "--json", folder=learned, input=text).stdout for text in texts)
    assert first == second != b""


def test_effects_and_intercept_are_the_margin_to_the_last_digit(learned):
    done = run("score", "log.jsonl", "--json", folder=learned)
    scores = {line["id"]: line for line in lines_of(done)}
    done = run("explain", "log.jsonl", "--json", folder=learned)
    explained = lines_of(done)
    assert len(explained) == len(scores) == 3000
    for message in explained:
        effects = [*message["towards_yes"], *message["towards_no"]]
        assert math.fsum([message["intercept"], *(e["effect"] for e in effects)]) == message["margin"]
        assert message["margin"] == scores[message["id"]]["margin"]
        assert message["probability"] == scores[message["id"]]["probability"]
        assert all(e["effect"] == e["weight"] * e["value"] for e in effects)
        assert [e["running"] for e in effects[-1:]] in ([], [message["margin"]])
        assert message["tokens"] - message["zero_or_unseen"] == len(effects)
        for block, sign in ((message["towards_yes"], 1), (message["towards_no"], -1)):
            sizes = [sign * e["effect"] for e in block]
            assert sizes == sorted(sizes, reverse=True)
            assert all(size > 0 for size in sizes)


def test_the_printed_explanation_adds_up_by_hand(learned):
    done = run("explain", "log.jsonl", folder=learned)
    messages = done.stdout.decode().split("message h")[1:]
    assert len(messages) == 3000
    for text in messages:
        rows = re.findall(r"^(.*?)((?: +[+-]\d+\.\d{4})+)$", text, re.MULTILINE)
        intercept, *effects, last = [numbers.split() for _, numbers in rows]
        margin = Decimal(intercept[-1])
        for effect, running in (numbers[-2:] for numbers in effects):
            margin += Decimal(effect)
            assert margin == Decimal(running)
        assert [margin] == [Decimal(number) for number in last]
        assert sum(line.startswith("rounding") for line in text.splitlines()) == 1


def test_explain_takes_the_messages_that_were_asked_for(learned):
    done = run("explain", "log.jsonl", "--json", "--id", "h000000007", "--id", "h000000003", folder=learned)
    assert [line["id"] for line in lines_of(done)] == ["h000000003", "h000000007"]


# Going back


def test_going_back_to_an_older_checkpoint_and_on_again_ends_where_it_was(learned, config, tmp_path, capsys):
    state = ["--config", config, "--state", str(tmp_path / "s")]
    every = ["--set", "state.checkpoint_every=1000"]
    assert main(["replay", *state, *every]) == 0
    before = {p.name: p.read_bytes() for p in (tmp_path / "s/checkpoints/000000000003000").iterdir()}
    assert main(["checkpoints", "restore", "2000", *state, "--json"]) == 0
    capsys.readouterr()
    assert main(["checkpoints", "list", *state, "--json"]) == 0
    names = [entry["name"] for entry in json.loads(capsys.readouterr().out)["checkpoints"]]
    assert names == ["000000000002000", "000000000001000"]
    assert main(["snapshots", "list", *state]) == 0
    assert "earlier-1-000000000003000" in capsys.readouterr().out
    assert main(["replay", *state, *every, "--resume", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["resumed_from"] == 2000
    after = {p.name: p.read_bytes() for p in (tmp_path / "s/checkpoints/000000000003000").iterdir()}
    assert after == before


def test_check_finds_a_flipped_bit(learned, config, tmp_path, capsys):
    state = ["--config", config, "--state", str(tmp_path / "s")]
    assert main(["replay", *state]) == 0
    (path,) = (tmp_path / "s/snapshots").glob("[0-9]*/*.safetensors")
    content = bytearray(path.read_bytes())
    content[-3] ^= 4
    path.write_bytes(content)
    capsys.readouterr()
    assert main(["snapshots", "check", *state]) == 65
    assert main(["score", str(learned / "log.jsonl"), *state]) == 65


# Screens


@pytest.mark.parametrize(
    "arguments",
    [
        ["replay", "--state", "wide"],
        ["snapshots", "show", "--most", "0"],
        ["snapshots", "compare", "3000", "3000"],
        ["snapshots", "list"],
        ["checkpoints", "list"],
        ["score", "log.jsonl"],
        ["explain", "log.jsonl"],
    ],
    ids=" ".join,
)
def test_tables_are_plain_text_within_100_columns(arguments, learned):
    done = run(*arguments, folder=learned)
    text = done.stdout.decode()
    assert done.returncode == 0
    lines = [line for line in text.splitlines() if not line.startswith("snapshot ")]  # a path may be long
    assert max(map(len, lines)) <= 100
    assert all(c.isprintable() or c == "\n" for c in text)


def test_a_token_cannot_command_the_terminal(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    routes = ["\x1b[31mred\x07", "R\u202e2"]
    lines = [
        {"id": f"\x1b]0;{i}", "route": routes[i % 2], "redelivered": bool(i % 2), "note": "at the door"}
        for i in range(300)
    ]
    Path("log.jsonl").write_text("".join(json.dumps(line) + "\n" for line in lines))
    fields = 'fields=[{path="route", kind="category"}, {path="note", kind="words"}]'
    base = ["--set", "feed.paths=['log.jsonl']", "--set", fields]
    names = ["--set", "message.label=redelivered", "--set", "message.id=id"]
    assert main(["replay", *base, *names, "--set", "learner.l1_per_example=0"]) == 0
    for command in ("score", "explain"):
        assert main([command, "log.jsonl", "--state", "state"]) == 0
    assert main(["snapshots", "show", "--state", "state"]) == 0
    text = capsys.readouterr().out
    assert "\\x1b[31mred\\x07" in text
    assert all(c.isprintable() or c == "\n" for c in text)


def test_a_table_keeps_its_columns_beside_wide_and_long_texts(capsys):
    columns = [Column("token", right=False), Column("note", right=False), Column("weight")]
    show_table(columns, [["東京都", "x" * 200, "+1.0"], ["plain", "y", "-1.0"]])
    head, wide, plain = capsys.readouterr().out.splitlines()
    assert len(wide) + 3 == len(plain) == len(head) == 100  # three wide characters fill six cells
    assert "…" in wide


def test_progress_is_drawn_on_a_terminal_only(learned, tmp_path):
    ours, theirs = pty.openpty()
    environment = {**os.environ, "TERM": "xterm", "COLUMNS": "100"}
    with subprocess.Popen(
        [*RUN, "replay", "--json", "--state", str(tmp_path / "s")],
        cwd=learned,
        env=environment,
        stdout=subprocess.PIPE,
        stderr=theirs,
    ) as process:
        os.close(theirs)
        out = process.stdout.read()
        assert process.wait(60) == 0
    seen = b""
    while chunk := read_terminal(ours):
        seen += chunk
    os.close(ours)
    assert b"messages" in seen
    assert json.loads(out)["messages"] == 3000


def read_terminal(descriptor):
    try:
        return os.read(descriptor, 65536)
    except OSError as error:  # what Linux says once the other side is closed and all is read
        assert error.errno == errno.EIO
        return b""
