"""A replay, however it was stopped, cut or resumed, ends with the bytes of one that was let run."""

import json
import os
import random
import signal
import subprocess
import sys
import time
from itertools import pairwise
from pathlib import Path

import pytest

from stream.arrays_file import ARRAYS
from stream.checkpoints import Checkpoints
from stream.cli import learning as commands
from stream.cli.main import main
from stream.errors import BadSettings
from stream.runs import steps
from stream.runs.replay import replay
from stream.snapshots import Snapshots
from tests.replay_child import Children
from tests.replays import (
    BAD,
    BOUNDED,
    EVERY,
    LONG,
    MESSAGES,
    VARIANTS,
    config_for,
    courier_lines,
    last_checkpoint,
    model_of,
    newest,
    rejects,
    settings_for,
    tree,
    write,
)


@pytest.fixture(scope="module")
def lines(tmp_path_factory):
    return courier_lines(tmp_path_factory.mktemp("feed") / "log.jsonl")


@pytest.fixture(scope="module")
def log(lines, tmp_path_factory):
    """The feed as three files, two of them compressed."""
    folder = tmp_path_factory.mktemp("log")
    third = len(lines) // 3
    return (
        write(folder / "1.jsonl.gz", lines[:third]),
        write(folder / "2.jsonl", lines[third : 2 * third]),
        write(folder / "3.jsonl.zst", lines[2 * third :]),
    )


@pytest.fixture(scope="module")
def short(lines, tmp_path_factory):
    """The first 4,000 messages in one plain file."""
    return write(tmp_path_factory.mktemp("short") / "log.jsonl", lines[:4_000])


@pytest.fixture(scope="module")
def whole(log, tmp_path_factory):
    """By variant: settings, epochs, folder and result of a replay that nobody disturbed."""
    found = {}

    def of(name):
        if name not in found:
            variant, epochs = VARIANTS[name]
            settings = settings_for(log, variant)
            folder = tmp_path_factory.mktemp("whole") / "state"
            found[name] = settings, epochs, folder, replay(settings, folder, epochs=epochs)
        return found[name]

    return of


@pytest.fixture(scope="module")
def children():
    started = Children()
    yield started
    started.close()


# Killed


def test_the_reference_replays_use_what_they_are_about(whole):
    *_, plain = whole("plain")
    assert plain.summary.messages == MESSAGES + 120
    assert plain.summary.labelled == MESSAGES
    assert plain.summary.rejected == 60
    assert len(plain.rejects_by_reason) >= 7
    assert plain.checkpoints == -(-plain.summary.messages // EVERY)
    assert 0 < plain.nnz < plain.live
    *_, bounded = whole("bounded")
    assert bounded.live <= 1_000 < plain.live
    assert bounded.refused_coordinates > 0
    assert any(row.live < before.live for before, row in pairwise(bounded.windows))
    *_, twice = whole("two epochs")
    assert twice.summary == bounded.summary
    assert twice.learned == 2 * bounded.learned


def kill_after_a_checkpoint(children, settings, folder, draw, epochs):
    """A replay killed at a random instant after its k-th new checkpoint; False when it ended before."""
    checkpoints = folder / "checkpoints"
    before = max((int(path.name) for path in checkpoints.glob("[0-9]*")), default=0)
    ahead = epochs * (MESSAGES + 120) // EVERY - before // EVERY
    awaited = checkpoints / f"{before + EVERY * draw.randint(1, max(ahead, 1)):015d}"
    children.start(settings, folder, resume=True, epochs=epochs)
    while not awaited.exists() and os.path.exists(f"/proc/{children.pid}/exe"):
        time.sleep(0.0005)
    time.sleep(draw.uniform(0, 0.03))
    os.kill(children.pid, signal.SIGKILL)
    return children.wait() == -signal.SIGKILL


@pytest.mark.slow
@pytest.mark.parametrize("name", VARIANTS)
def test_killed_at_any_instant_it_resumes_to_the_same_bytes(name, whole, children, tmp_path):
    settings, epochs, undisturbed, _ = whole(name)
    draw = random.Random(name)
    expected = tree(undisturbed)
    one_more = Path("checkpoints", f"{(int(newest(undisturbed).name) // EVERY - 2) * EVERY:015d}")
    kills = runs = 0
    while kills < (13 if LONG else 3):
        runs += 1
        folder = tmp_path / f"state{runs}"
        folder.mkdir()
        killed = 0
        while kill_after_a_checkpoint(children, settings, folder, draw, epochs):
            killed += 1
            if draw.random() < 0.5:
                break
        if killed:
            resumed = replay(settings, folder, resume=True, epochs=epochs)
            assert resumed.resumed_from >= EVERY
            kills += killed
        found = tree(folder)
        assert {file: found.get(file) for file in expected} == expected
        # Killed between its last checkpoint and the removal of the oldest, there is one more until the next.
        assert {Path(file).parent for file in found.keys() - expected.keys()} <= {one_more}
        assert runs < 100


def test_the_command_killed_twice_resumes_to_the_same_bytes(log, tmp_path):
    settings = settings_for(log, state={"checkpoint_every": 250})
    config = config_for(settings, tmp_path)
    state = tmp_path / "state"
    for awaited in (250, 1_250):
        with command("replay", "--config", config, "--resume") as child:
            while not (state / "checkpoints" / f"{awaited:015d}").exists() and child.poll() is None:
                time.sleep(0.0005)
            child.kill()
        assert child.returncode == -signal.SIGKILL, "it ended before it was killed"
    with command("replay", "--config", config, "--resume", "--json") as child:
        found = json.loads(child.stdout.read())
    assert child.returncode == 0
    assert found["resumed_from"] >= 1_250
    replay(settings, tmp_path / "whole")
    assert tree(state) == tree(tmp_path / "whole")


def command(*arguments):
    code = "from stream.cli.main import run; run()"
    return subprocess.Popen([sys.executable, "-c", code, *arguments], stdout=subprocess.PIPE)


# Stopped


def stopping_at(window, signals=1):
    """An `on_window` that sends the process SIGINT while it handles the given window."""
    rows = []

    def on_window(row):
        rows.append(row)
        if len(rows) == window:
            for _ in range(signals):
                signal.raise_signal(signal.SIGINT)

    return on_window


@pytest.mark.parametrize("name", VARIANTS)
def test_ctrl_c_leaves_a_snapshot_and_resumes_to_the_same_bytes(name, whole, tmp_path):
    settings, epochs, undisturbed, _ = whole(name)
    stopped = replay(settings, tmp_path, epochs=epochs, on_window=stopping_at(3))
    assert stopped.interrupted
    assert 4_500 <= stopped.summary.messages < 6_000
    [(checked, trouble)] = Snapshots(tmp_path / "snapshots", keep=9).check()
    assert (checked, trouble) == (stopped.snapshot.name, None)
    assert int(newest(tmp_path).name) == stopped.summary.messages
    resumed = replay(settings, tmp_path, resume=True, epochs=epochs)
    assert not resumed.interrupted
    assert resumed.resumed_from == stopped.summary.messages
    assert last_checkpoint(tmp_path) == last_checkpoint(undisturbed)
    assert tree(resumed.snapshot) == tree(newest_snapshot(undisturbed))


def newest_snapshot(folder):
    return max((folder / "snapshots").glob("[0-9]*"))


def test_a_second_ctrl_c_ends_at_once_and_loses_only_what_came_after_the_checkpoint(short, tmp_path):
    settings = settings_for([short], state={"checkpoint_every": 1_000})
    with pytest.raises(KeyboardInterrupt):
        replay(settings, tmp_path / "state", on_window=stopping_at(1, signals=2))
    assert newest(tmp_path / "state").name.endswith("01000")
    assert not list((tmp_path / "state" / "snapshots").glob("[0-9]*"))
    replay(settings, tmp_path / "state", resume=True)
    replay(settings, tmp_path / "whole")
    assert tree(tmp_path / "state") == tree(tmp_path / "whole")


def test_ctrl_c_ends_the_command_with_130_and_its_results(short, tmp_path, monkeypatch, capsys):
    config = config_for(settings_for([short]), tmp_path)
    monkeypatch.setattr(commands, "_no_window", stopping_at(1))
    assert main(["replay", "--config", config, "--json"]) == 130
    found = json.loads(capsys.readouterr().out)
    assert found["interrupted"]
    assert 1_500 <= found["messages"] < 4_000
    assert main(["snapshots", "check", "--config", config]) == 0
    monkeypatch.undo()
    assert main(["replay", "--config", config, "--resume", "--json"]) == 0


def test_too_many_rejects_end_with_65_and_a_whole_checkpoint(lines, tmp_path, capsys):
    bad = [BAD[0]] * 40
    log = write(tmp_path / "log.jsonl", [*lines[:3_000], *bad, *lines[3_000:4_000]])
    settings = settings_for([log], state={"checkpoint_every": 1_000})
    config = config_for(settings, tmp_path)
    assert main(["replay", "--config", config, "--set", "message.max_reject_share=0.01"]) == 65
    said = capsys.readouterr().err
    assert "max_reject_share" in said and "rejects.jsonl" in said
    state = tmp_path / "state"
    assert newest(state).name.endswith("03000")
    assert [entry.trouble for entry in Checkpoints(state / "checkpoints", keep=9).list()] == [None] * 3
    assert main(["replay", "--config", config, "--resume"]) == 0
    replay(settings.placed_in(tmp_path), tmp_path / "whole")
    assert last_checkpoint(state) == last_checkpoint(tmp_path / "whole")
    assert rejects(state) == rejects(tmp_path / "whole")


def test_a_newest_checkpoint_that_broke_is_set_aside_and_the_one_before_goes_on(whole, tmp_path):
    settings, _, undisturbed, _ = whole("bounded")
    replay(settings, tmp_path, on_window=stopping_at(7))
    broken = newest(tmp_path) / ARRAYS
    content = bytearray(broken.read_bytes())
    content[len(content) // 3] ^= 4
    broken.write_bytes(content)
    resumed = replay(settings, tmp_path, resume=True)
    assert resumed.resumed_from == 10_000
    assert len(resumed.warnings) == 1
    assert last_checkpoint(tmp_path) == last_checkpoint(undisturbed)


# Cut


@pytest.mark.parametrize(
    ("name", "block", "every"),
    [
        ("plain", 1, 4_000),
        ("bounded", 1, 4_000),
        ("gravity", 1, 4_000),
        ("bounded", 7, 331),
        ("two epochs", 61, 700),
        ("plain", 333, 1_000),
        ("gravity", 333, 1_000),
        ("bounded", 100_000, 3_999),
        ("two epochs", 100_000, 3_999),
    ],
)
def test_neither_batches_nor_checkpoints_change_a_byte(name, block, every, short, tmp_path, monkeypatch):
    variant, epochs = VARIANTS[name]
    replay(settings_for([short], variant), tmp_path / "usual", epochs=epochs)
    monkeypatch.setattr(steps, "BLOCK", block)
    settings = settings_for([short], variant, state={"checkpoint_every": every})
    replay(settings, tmp_path / "cut", epochs=epochs)
    assert last_checkpoint(tmp_path / "cut") == last_checkpoint(tmp_path / "usual")


@pytest.mark.parametrize(
    "files", [("log.jsonl",), ("log.jsonl.gz",), ("log.jsonl.zst",), ("a.jsonl", "b.jsonl.gz", "c.jsonl.zst")]
)
def test_packing_and_files_do_not_change_the_model(files, lines, short, tmp_path):
    share = -(-4_000 // len(files))
    for at, file in enumerate(files):
        write(tmp_path / file, lines[:4_000][at * share : (at + 1) * share])
    replay(settings_for([tmp_path / "*.jsonl*"], BOUNDED), tmp_path / "packed")
    replay(settings_for([short], BOUNDED), tmp_path / "plain")
    assert model_of(tmp_path / "packed") == model_of(tmp_path / "plain")


def test_bad_lines_never_touch_a_weight(lines, tmp_path):
    good = [line for line in lines[:4_000] if line not in BAD]
    draw = random.Random(8)
    mixed = list(good)
    for _ in range(1_500):
        mixed.insert(draw.randrange(len(mixed) + 1), draw.choice(BAD))
    for name, log in (("good", good), ("mixed", mixed)):
        write(tmp_path / f"{name}.jsonl", log)
        replay(settings_for([tmp_path / f"{name}.jsonl"], BOUNDED), tmp_path / name)
    assert model_of(tmp_path / "mixed") == model_of(tmp_path / "good")
    assert rejects(tmp_path / "mixed").count(b"\n") == 1_500


# Gone on with


def test_a_finished_log_resumes_with_0_and_changes_nothing(short, tmp_path, capsys):
    settings = settings_for([short])
    config = config_for(settings, tmp_path)
    assert main(["replay", "--config", config]) == 0
    before, times = tree(tmp_path / "state"), changed_at(tmp_path / "state")
    capsys.readouterr()
    assert main(["replay", "--config", config, "--resume", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert (found["resumed_from"], found["messages"], found["checkpoints"]) == (4_000, 4_000, 0)
    assert tree(tmp_path / "state") == before
    assert changed_at(tmp_path / "state") == times


def changed_at(folder):
    return {
        path: path.stat().st_mtime_ns for path in folder.rglob("*") if path.is_file() and path.name != "LOCK"
    }


def test_a_log_that_grew_is_learned_from_where_it_ended(lines, tmp_path):
    log = write(tmp_path / "log.jsonl", lines[:3_000])
    settings = settings_for([tmp_path / "*.jsonl"], BOUNDED)
    replay(settings, tmp_path / "state")
    write(log, lines[:3_700])
    write(tmp_path / "later.jsonl", [])
    (tmp_path / "later.jsonl").rename(tmp_path / "log2.jsonl")
    write(tmp_path / "log2.jsonl", lines[3_700:4_500])
    grown = replay(settings, tmp_path / "state", resume=True)
    assert (grown.resumed_from, grown.messages_read) == (3_000, 1_500)
    at_once = replay(settings, tmp_path / "whole")
    assert at_once.messages_read == 4_500
    assert last_checkpoint(tmp_path / "state") == last_checkpoint(tmp_path / "whole")
    assert rejects(tmp_path / "state") == rejects(tmp_path / "whole")


def test_resume_in_an_empty_folder_begins_at_the_beginning(short, tmp_path):
    begun = replay(settings_for([short]), tmp_path / "resumed", resume=True)
    assert begun.resumed_from is None
    replay(settings_for([short]), tmp_path / "plain")
    assert tree(tmp_path / "resumed") == tree(tmp_path / "plain")


def test_a_used_folder_is_refused_with_73_and_started_anew_only_when_asked(short, tmp_path, capsys):
    settings = settings_for([short])
    config = config_for(settings, tmp_path)
    state = tmp_path / "state"
    other = ["--set", "learner.learning_rate=0.05"]
    assert main(["replay", "--config", config, *other]) == 0
    before = tree(state)
    assert main(["replay", "--config", config]) == 73
    assert "--resume" in capsys.readouterr().err
    assert tree(state) == before
    assert main(["replay", "--config", config, "--fresh"]) == 0
    replay(settings, tmp_path / "new")
    assert last_checkpoint(state) == last_checkpoint(tmp_path / "new")
    assert rejects(state) == rejects(tmp_path / "new")
    kept = [path for path in (state / "snapshots").iterdir() if path.name.startswith("earlier-")]
    assert len(kept) == 1, "the snapshots of before stay"


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ("learner.learning_rate=0.3", "learner.learning_rate: 0.3 here, 0.2 there"),
        ("learner.l1_per_example=1e-3", "learner.l1_per_example: 0.001 here, 0.0005 there"),
        ("learner.horizon=77", "learner.horizon: 77 here"),
        ("space.seed=3", "space.seed: 3 here, 0 there"),
        ("space.address_bits=41", "space.address_bits: 41 here, 40 there"),
        ("crosses=[]", "crosses"),
        ("state.max_live=5000", "state.max_live: 5000 here"),
        ("metrics.window=999", "metrics.window: 999 here, 1500 there"),
    ],
)
def test_resume_with_other_settings_is_refused_with_78_and_the_difference(
    change, said, short, tmp_path, capsys
):
    config = config_for(settings_for([short]), tmp_path)
    assert main(["replay", "--config", config]) == 0
    before = tree(tmp_path / "state")
    capsys.readouterr()
    assert main(["replay", "--config", config, "--resume", "--set", change]) == 78
    assert said in capsys.readouterr().err
    assert tree(tmp_path / "state") == before


def test_how_often_checkpoints_are_written_may_change_between_runs(short, tmp_path):
    replay(
        settings_for([short], state={"checkpoint_every": 700}), tmp_path / "state", on_window=stopping_at(1)
    )
    replay(settings_for([short], state={"checkpoint_every": 900}), tmp_path / "state", resume=True)
    replay(settings_for([short]), tmp_path / "whole")
    assert last_checkpoint(tmp_path / "state") == last_checkpoint(tmp_path / "whole")


def test_a_second_process_on_the_folder_is_told_to_try_later(log, children, tmp_path, capsys):
    settings = settings_for(log, state={"checkpoint_every": 250})
    config = config_for(settings, tmp_path)
    children.start(settings, tmp_path / "state")
    while not (tmp_path / "state" / "checkpoints" / f"{250:015d}").exists():
        time.sleep(0.0005)
    os.kill(children.pid, signal.SIGSTOP)
    assert main(["replay", "--config", config, "--resume"]) == 75
    assert f"process {children.pid}" in capsys.readouterr().err
    os.kill(children.pid, signal.SIGCONT)
    assert children.wait() == 0
    replay(settings, tmp_path / "whole")
    assert tree(tmp_path / "state") == tree(tmp_path / "whole")


# More than one pass


def test_metrics_count_the_first_pass_only(short, tmp_path):
    once = replay(settings_for([short]), tmp_path / "once")
    thrice = replay(settings_for([short]), tmp_path / "thrice", epochs=3)
    assert thrice.summary == once.summary
    assert thrice.windows[:2] == once.windows[:2]
    assert thrice.rejects_by_reason == once.rejects_by_reason
    assert thrice.learned == 3 * once.learned
    assert rejects(tmp_path / "thrice") == rejects(tmp_path / "once")


def test_a_finished_pass_can_be_followed_by_more(short, tmp_path):
    settings = settings_for([short], BOUNDED)
    replay(settings, tmp_path / "steps")
    more = replay(settings, tmp_path / "steps", resume=True, epochs=3)
    assert (more.resumed_from, more.messages_read) == (4_000, 8_000)
    replay(settings, tmp_path / "whole", epochs=3)
    assert last_checkpoint(tmp_path / "steps") == last_checkpoint(tmp_path / "whole")
    with pytest.raises(BadSettings, match="epoch 3"):
        replay(settings, tmp_path / "steps", resume=True, epochs=2)
