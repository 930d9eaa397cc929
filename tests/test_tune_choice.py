"""What `bedload tune` chooses, against an exhaustive search over flights and the truth of a simulated feed.

docs/tuning.md has both worked through, at full size.
"""

import json
from dataclasses import replace

import pytest

from simulator import CourierFeed, write_log
from stream.runs.replay import replay
from stream.runs.tuning.choosing import Rule
from stream.runs.tuning.grid import Grid
from stream.runs.tuning.tune import Job, tune
from stream.settings import Settings
from stream.snapshots import read_snapshot
from stream.token_names import field_and_token
from tests.flights_search import numbered_tokens, one_pass
from tests.test_flights import CROSSES, FIELDS, FIRST, FLIGHTS, flights, message

pytestmark = pytest.mark.slow

BEST_FLIGHTS = 0.40528
"""Lowest log loss over the last 30 % of the flights of 915 passes: `python -m tests.flights_search`."""


# Flights


@pytest.fixture(scope="module")
def departures(tmp_path_factory):
    """The flights' log, settings for it and the folder of trials."""
    folder = tmp_path_factory.mktemp("flights")
    with (folder / "flights.jsonl").open("w", encoding="utf-8") as out:
        out.writelines(json.dumps(message(row)) + "\n" for row in flights())
    settings = Settings.model_validate(
        {
            "feed": {"paths": [str(folder / "flights.jsonl")]},
            "message": {"label": "late"},
            "fields": [{"path": field, "kind": "category"} for field in FIELDS],
            "crosses": [{"paths": paths} for paths in CROSSES],
        }
    )
    return settings, folder / "trials"


JOB = Job(Grid(strengths=16, rates=(0.3, 0.5), span=10_000.0))


@pytest.fixture(scope="module")
def lowest(departures):
    return tune(*departures, JOB)


def test_the_choice_over_the_flights_is_within_a_hundredth_of_an_exhaustive_search(lowest):
    assert lowest["log"]["messages"] == lowest["log"]["labelled"] == FLIGHTS
    last_part = lowest["blocks"]["messages"][lowest["blocks"]["last_part_from"] - 1]
    assert last_part == FIRST
    chosen = lowest["candidates"][lowest["choice"]["index"]]
    assert chosen["log_loss"] <= 0.412
    assert chosen["log_loss"] <= 1.01 * BEST_FLIGHTS


def test_a_plain_pass_with_the_choice_has_its_log_loss_and_its_weights(lowest):
    """Tokens numbered instead of hashed, arithmetic of the C library: a share of hashes in common is all."""
    chosen = lowest["candidates"][lowest["choice"]["index"]]
    rows, labels = numbered_tokens()
    loss, kept = one_pass(rows, labels, FIRST, chosen["learning_rate"], chosen["l1_per_example"])
    assert chosen["log_loss"] == pytest.approx(loss, rel=1e-6)
    assert chosen["nnz"] == pytest.approx(kept, abs=3)


def test_the_report_over_the_flights_says_what_halving_the_weights_costs(lowest):
    choice, candidates = lowest["choice"], lowest["candidates"]
    halved = candidates[choice["halved"]["index"]]
    assert 0 < 2 * halved["nnz"] <= candidates[choice["index"]]["nnz"]
    more = halved["log_loss"] - candidates[choice["index"]]["log_loss"]
    assert choice["halved"]["log_loss_more"] == pytest.approx(more, abs=1e-12)
    assert choice["halved"]["log_loss_se"] > 0


def test_one_standard_error_takes_sparser_flights_or_says_why_none_qualifies(departures, lowest):
    sparser = tune(*departures, replace(JOB, rule=Rule("sparsest_within_one_se")))
    assert sparser["candidates"] == lowest["candidates"]
    choice, candidates = sparser["choice"], sparser["candidates"]
    chosen, best = candidates[choice["index"]], candidates[choice["best"]]
    if choice["index"] == choice["best"]:
        assert "No sparser candidate qualifies" in choice["said"][0]
    else:
        assert chosen["nnz"] < best["nnz"]
        assert chosen["difference"] <= chosen["log_loss_se"]
        assert any("fewer weights and loses" in sentence for sentence in choice["said"])


# A feed whose truth is known


@pytest.fixture(scope="module")
def simulated(tmp_path_factory):
    """A document with the truth, and the settings of its feed."""
    folder = tmp_path_factory.mktemp("courier")
    write_log(CourierFeed(seed=5, messages=40_000), folder / "log.jsonl")
    categories = ("route", "stop", "hour", "sender", "locker")
    settings = Settings.model_validate(
        {
            "feed": {"paths": [str(folder / "log.jsonl")]},
            "message": {"label": "redelivered"},
            "fields": [
                {"path": "note", "kind": "words"},
                *({"path": path, "kind": "category"} for path in categories),
            ],
            "crosses": [{"paths": ["route", "hour"]}],
        }
    )
    grid = Grid(strengths=16, rates=(0.05, 0.1, 0.2))
    return (
        tune(settings, folder / "trials", Job(grid, truth=folder / "log.jsonl.truth.json")),
        settings,
        folder,
    )


def test_the_choice_loses_little_more_against_the_truth_than_the_best_of_the_grid(simulated):
    truth = simulated[0]["truth"]
    assert (
        0 < truth["best_excess_log_loss"] <= truth["excess_log_loss"] <= 1.1 * truth["best_excess_log_loss"]
    )


def test_precision_and_recall_are_of_the_tokens_of_a_replay_with_the_choice(simulated):
    document, settings, folder = simulated
    chosen = document["candidates"][document["choice"]["index"]]
    learner = {key: chosen[key] for key in ("learning_rate", "l1_per_example", "l1")}
    own = settings.model_copy(update={"learner": settings.learner.model_copy(update=learner)})
    kept = {
        field_and_token(name) for name in read_snapshot(replay(own, folder / "state").snapshot).weights.names
    }
    truth = json.loads((folder / "log.jsonl.truth.json").read_text())
    planted = {(w["field"], w["token"]) for w in truth["weights"]}
    single = {pair for pair in kept if "&" not in pair[0]}
    found = document["truth"]
    crosses = len(truth["crosses"])
    assert found["planted"] == len(planted) + crosses
    assert len(single & planted) <= found["found"] <= len(single & planted) + crosses
    assert found["recall"] == found["found"] / found["planted"] > 0.5
    assert found["precision"] == pytest.approx(found["found"] / len(kept), abs=0.02)
