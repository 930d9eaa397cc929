"""`bedload converge` on the screen, and what it says of options and logs that cannot be compared."""

import re
import sys

import numpy as np
import pytest

from stream.cli.convergence import show_convergence
from stream.cli.converging import RATES
from stream.cli.converging import _Stream as Stream
from stream.cli.converging import _wanted as wanted_of
from stream.cli.main import main
from stream.cli.scenario import courier_settings
from stream.cli.screen import stage_bar
from stream.runs.converging.job import Known, Wanted
from tests import convergence_documents


@pytest.fixture
def shown(capsys):
    """Gives what a document looks like, which no line of leaves the 100 columns."""

    def show(found):
        show_convergence(found, None)
        out = capsys.readouterr().out
        assert max(map(len, out.splitlines())) <= 100
        return out

    return show


def test_a_legend_of_ones_own_log_has_only_what_the_table_has(shown):
    own, simulated = shown(convergence_documents.bare()), shown(convergence_documents.whole())
    assert "planted" in simulated and "excess:" in simulated
    assert "planted" not in own and "excess" not in own


def test_large_gaps_have_their_thousands_set_apart(shown):
    found = convergence_documents.bare()
    found["fits"][0]["learned"][0]["gap"] = 202.3871
    assert "20,238.71 %" in shown(found)


def test_a_batch_fit_that_is_loosely_proved_is_warned_of_under_its_table(shown):
    found = convergence_documents.bare()
    assert "Warning" not in shown(found)
    found["fits"][1]["batch"] |= {"proved_gap": 0.4003, "loose": True}
    assert "Warning: the batch fit of 3,000 messages may be up to 40.03 % above" in shown(found)


def test_each_row_and_column_says_which_of_many_learners_it_is_of(shown):
    wanted = tuple(
        Wanted(method, rate, averaged)
        for method in ("ftrl", "truncated-gradient")
        for rate in (0.1, 0.02)
        for averaged in (False, True)
    )
    found = convergence_documents.whole()
    found |= {"learners": [one.to_json(wanted) for one in wanted], "slopes": [], "epochs": 7}
    for fit in found["fits"]:
        first = fit["learned"][0]
        fit["learned"] = [first | one | {"epochs": n} for one in found["learners"] for n in (1, 7)]
    for windows in found["windows"]:
        first = windows["learners"][0]
        windows["learners"] = [first | one for one in found["learners"] if not one["averaged"]]
        windows["means"]["learners"] = [0.4, 0.5, 0.6, 0.7]
    out = shown(found)
    assert "L8 is averaged truncated-gradient 0.02" in out
    for i in range(1, 9):
        assert out.count(f" L{i} x7 ") == len(found["fits"])
    titles = [line for line in out.splitlines() if line.lstrip().startswith("through")]
    for title in ("ftrl 0.1", "ftrl 0.02", "truncated 0.1", "truncated 0.02"):
        assert sum(title in line for line in titles) == len(found["windows"])


@pytest.mark.parametrize(
    ("settings", "rate"),
    [([], RATES["ftrl"]), (["learner.learning_rate=0.7"], 0.7), (["learner.damping=2"], RATES["ftrl"])],
)
def test_the_settings_rate_is_that_of_their_method_where_they_name_one(settings, rate, tmp_path):
    own = courier_settings(tmp_path / "log.jsonl", settings)
    stream = Stream(own, Known(np.zeros(0), lambda message: ()), 1, 1, {})
    assert wanted_of("ftrl", stream).learning_rate == rate
    assert wanted_of("ftrl:0.3", stream).learning_rate == 0.3
    assert wanted_of("truncated-gradient", stream).learning_rate == RATES["truncated-gradient"]


def test_a_log_without_a_message_or_an_outcome_is_told_so(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "empty.jsonl").write_bytes(b"")
    nothing, one = b'{"note": "a"}\n' * 300, b'{"note": "b", "redelivered": true}\n'
    (tmp_path / "late.jsonl").write_bytes(nothing)
    asked = ["--set", "message.label=redelivered", "--set", 'fields=[{path = "note", kind = "words"}]']
    assert main(["converge", "empty.jsonl", *asked]) == 65
    assert "no messages" in capsys.readouterr().err
    assert main(["converge", "late.jsonl", *asked]) == 65
    assert "none had `redelivered` (message.label)" in capsys.readouterr().err
    (tmp_path / "late.jsonl").write_bytes(nothing + one)
    assert main(["converge", "late.jsonl", *asked, "--learner", "ftrl"]) == 65
    assert "none of these messages has an outcome" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("asked", "code", "said"),
    [
        (["--strength", "1e9"], 64, "below 1e+09"),
        (["--feed", "messages=800"], 64, "--messages (and --fresh) says that"),
        (["--feed", "seed=8"], 64, "--seed says that"),
        (["--feed", "nope=1"], 78, "--feed nope=1"),
        (["--set", "learner.averaging=100"], 64, "--learner METHOD"),
        (["--set", "learner.method=ftrl"], 64, "--learner METHOD"),
        (["log.jsonl", "--seed", "4"], 64, "leave --scenario, --seed and --feed out"),
        (["log.jsonl", "--feed", "effect=1"], 64, "leave --scenario, --seed and --feed out"),
    ],
)
def test_an_option_without_effect_is_refused(asked, code, said, capsys):
    assert main(["converge", "--messages", "300", "--fresh", "100", *asked]) == code
    assert said in capsys.readouterr().err


def test_the_times_of_a_stage_are_whole_on_a_screen_of_80_columns(monkeypatch, capsys):
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    monkeypatch.setenv("COLUMNS", "80")
    monkeypatch.setenv("TERM", "xterm")
    with stage_bar() as tell:
        tell(0.5, "liblinear, strength 0.0004")
        tell(0.6, "learning, truncated-gradient")
    drawn = re.sub("\x1b[^A-Za-z]*[A-Za-z]", "", capsys.readouterr().err)
    lines = [line.strip() for line in re.split("[\r\n]", drawn) if line.strip()]
    assert any("truncated-gradient" in line for line in lines)
    assert all(re.search(r" 0:00:0\d elapsed \S+:\d\d left$", line.replace("--", "00")) for line in lines)
