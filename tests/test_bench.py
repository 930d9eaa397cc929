"""The benches run on tiny sizes and say what they found; nothing here looks at a clock."""

import json
import math
from contextlib import nullcontext

import pytest

from tests.bench import __main__ as command
from tests.bench import benches, worker
from tests.bench.figures import Figure, Seconds, alternating, best

TINY = {
    "learn": {"messages": 300, "rounds": 1, "distinct": 200},
    "kernel": {"messages": 3_000, "rounds": 1, "distinct": 200},
    "width": {"messages": 300, "rounds": 1, "distinct": 200},
    "score": {"messages": 300, "rounds": 1, "distinct": 200},
    "tune": {"messages": 600, "rounds": 1, "distinct": 200},
    "certify": {"messages": 600, "rounds": 1, "distinct": 200},
    "memory": {"live": 200_000},
    "checkpoint": {"live": 100_000, "rounds": 1},
    "worker": {"messages": 300, "rounds": 1, "distinct": 200},
    "sizing": {"live": 5_000},
    "start": {"rounds": 1},
    "entry": {"learned_before": 50_000, "tokens": 2, "block": 20_011},
    "years": {"examples": 60_000, "block": 20_011},
}


@pytest.fixture
def tiny(monkeypatch):
    """Every bench in this process, at sizes that take no time."""
    small = {
        name: benches.Bench(bench.module, TINY[name], TINY[name]) for name, bench in benches.BENCHES.items()
    }
    monkeypatch.setattr(command, "measure", lambda name, quick: small[name](quick=quick))
    return small


@pytest.mark.parametrize("name", TINY)
def test_every_bench_gives_figures_that_can_be_read(name, tiny, request, monkeypatch):
    if name == "worker":
        broker = request.getfixturevalue("broker")
        monkeypatch.setattr(worker, "running_broker", lambda: nullcontext(broker))
    figures = tiny[name](quick=True)
    assert figures
    for figure in figures:
        assert math.isfinite(figure.value)
        assert figure.what
        json.dumps(figure.to_json())


def test_no_bench_is_without_a_tiny_size():
    assert TINY.keys() == benches.BENCHES.keys()


def test_years_hold_the_weights_to_the_twin_and_the_counts_exact(tiny):
    weights, counts = tiny["years"](quick=True)
    assert weights.met and weights.value < 1e-6
    assert counts.value == 0
    assert weights.details["non-zero of 12 and the intercept"] >= 3


def test_a_new_token_waits_longer_after_a_long_feed_and_less_so_with_a_horizon(tiny):
    start, late, horizon = (figure.value for figure in tiny["entry"](quick=True))
    assert start <= horizon < late


def test_the_table_names_what_missed_its_target_and_exits_with_1(monkeypatch, capsys):
    figures = [Figure("good", 3.0, "times", at_least=2), Figure("bad", 3.0, "times", at_most=2)]
    monkeypatch.setattr(command, "measure", lambda name, quick: figures)
    assert command.main(["learn"]) == 1
    good, bad = capsys.readouterr().out.splitlines()
    assert good.split() == ["learn", "good", "3", "times", ">=", "2", "met"]
    assert bad.split() == ["learn", "bad", "3", "times", "<=", "2", "NOT", "MET"]
    figures.pop()
    assert command.main(["learn", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["learn"][0]["met"] is True


def test_a_name_that_is_no_bench_is_refused(capsys):
    with pytest.raises(SystemExit):
        command.main(["speed"])
    assert "no bench is called speed" in capsys.readouterr().err


def test_works_are_timed_in_turn():
    order = []
    works = [lambda name=name: order.append(name) or Seconds(len(order), 1.0) for name in "ab"]
    first, second = alternating(2, *works)
    assert order == ["a", "b", "a", "b"]
    assert (best(first).wall, best(second).wall) == (1, 2)
