"""The document of a tune: its figures against exact ones, the planted truth, and a whole small tune."""

import json
import math
import re
from dataclasses import replace
from pathlib import Path

import mmh3
import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as options
from hypothesis import strategies as st

from simulator import CourierFeed, write_log
from stream.errors import BadData, InputMissing
from stream.metrics.lane_tally import LANE_BINS, tally_lanes
from stream.metrics.lanes import LaneProgress
from stream.rejects import RejectLog
from stream.reports import page
from stream.runs.lane_model import LaneModel, LaneWeights
from stream.runs.replay import replay
from stream.runs.steps import Steps
from stream.runs.tuning import histograms
from stream.runs.tuning.choosing import Rule
from stream.runs.tuning.document import Tuned, _per_day, _time, document
from stream.runs.tuning.excess import expected_excess
from stream.runs.tuning.first_pass import LogFacts, digest_of_log, find_strongest
from stream.runs.tuning.grid import Grid, blocks_of, candidates
from stream.runs.tuning.merging import merge, part_of
from stream.runs.tuning.strongest import NamedWeights
from stream.runs.tuning.trial import run_trial
from stream.runs.tuning.truth import Planted, TrueRates, planted_at, read_truth
from stream.settings.models import Settings
from stream.snapshots import read_snapshot
from stream.sources import LogSource

MESSAGES = 4_000
GRID = Grid(strengths=7, rates=(0.05, 0.3), span=300.0)
NUMBER, TEXT, WHOLE = (float, int), str, int
TOKEN = {"field": TEXT, "token": TEXT, "share": NUMBER, "weight": NUMBER, "kept": NUMBER}
BOTH = {"towards_yes": [TOKEN], "towards_no": [TOKEN]}


class Or:
    """Something of a kind, or null."""

    def __init__(self, kind):
        self.kind = kind


MAYBE = Or(NUMBER)
SCHEMA = {
    "format": TEXT,
    "format_version": WHOLE,
    "program": TEXT,
    "command": TEXT,
    "settings": dict,
    "log": {
        "files": [TEXT],
        "digest": TEXT,
        "messages": WHOLE,
        "labelled": WHOLE,
        "rejected": WHOLE,
        "base_rate": MAYBE,
        "first_time": Or(TEXT),
        "last_time": Or(TEXT),
    },
    "grid": {
        "unit": TEXT,
        "strongest": MAYBE,
        "searched": bool,
        "strengths": [NUMBER],
        "learning_rates": [NUMBER],
    },
    "blocks": {"messages": [WHOLE], "last_part_from": WHOLE},
    "candidates": [
        {
            "index": WHOLE,
            "learning_rate": NUMBER,
            "l1_per_example": NUMBER,
            "l1": NUMBER,
            "log_loss": MAYBE,
            "log_loss_whole": MAYBE,
            "difference": MAYBE,
            "log_loss_se": MAYBE,
            "nnz": WHOLE,
            "bytes": WHOLE,
            "auc": MAYBE,
            "calibration_ratio": MAYBE,
            "normalised_entropy": MAYBE,
            "forward_log_loss": MAYBE,
            "block_log_loss": [MAYBE],
            "block_nnz": [Or(WHOLE)],
        }
    ],
    "choice": {
        "rule": TEXT,
        "index": WHOLE,
        "best": WHOLE,
        "runner_up": Or(WHOLE),
        "said": [TEXT],
        "halved": Or({"index": WHOLE, "nnz": WHOLE, "log_loss_more": NUMBER, "log_loss_se": MAYBE}),
    },
    "paths": {
        "learning_rate": NUMBER,
        "strengths": [NUMBER],
        "tokens": [{"field": TEXT, "token": TEXT, "share": NUMBER, "weights": [NUMBER]}],
    },
    "models": [{"index": WHOLE, "strength": NUMBER, "nnz": WHOLE, "log_loss": MAYBE, **BOTH}],
    "reliability": {
        "bins": [{"from": NUMBER, "to": NUMBER, "predicted": NUMBER, "observed": NUMBER, "weight": NUMBER}],
        "calibration_ratio": MAYBE,
        "expected_calibration_error": MAYBE,
    },
    "thresholds": {
        "messages_per_day": MAYBE,
        "rows": [{"threshold": NUMBER, "flagged": NUMBER, "precision": NUMBER, "recall": MAYBE}],
    },
    "slices": {
        "by": Or(TEXT),
        "rows": [
            {
                "slice": TEXT,
                "messages": WHOLE,
                "log_loss": MAYBE,
                "base_rate": MAYBE,
                "normalised_entropy": MAYBE,
            }
        ],
    },
    "strongest": BOTH,
    "truth": Or(
        {
            "planted": WHOLE,
            "found": WHOLE,
            "precision": MAYBE,
            "recall": MAYBE,
            "excess_log_loss": MAYBE,
            "best_excess_log_loss": MAYBE,
        }
    ),
    "warnings": [TEXT],
    "passes": [TEXT],
    "seconds": NUMBER,
}


def assert_shaped(value, shape, place="document"):
    """Exactly these keys, and values of these kinds."""
    if isinstance(shape, Or):
        if value is not None:
            assert_shaped(value, shape.kind, place)
    elif isinstance(shape, dict):
        assert isinstance(value, dict) and list(value) == list(shape), place
        for key, inner in shape.items():
            assert_shaped(value[key], inner, f"{place}.{key}")
    elif isinstance(shape, list):
        assert isinstance(value, list), place
        for i, item in enumerate(value):
            assert_shaped(item, shape[0], f"{place}[{i}]")
    else:
        assert isinstance(value, shape) and (shape is bool or not isinstance(value, bool)), (place, value)


# ---- a whole small tune ------------------------------------------------------------------------------------


def settings_in(folder, **sections):
    data = {
        "feed": {"paths": ["log.jsonl"]},
        "message": {"id": "id", "time": "at", "label": "redelivered"},
        "fields": [
            {"path": "note", "kind": "words"},
            *({"path": p, "kind": "category"} for p in ("route", "stop", "hour", "sender")),
            {"path": "weight_kg", "kind": "quantity"},
        ],
        "crosses": [{"paths": ["hour", "route"]}],
        "metrics": {"window": 700, "slice_by": "route"},
        **sections,
    }
    return Settings.model_validate(data).placed_in(folder)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("tuning")
    feed = CourierFeed(seed=11, messages=MESSAGES, effect=1.2)
    write_log(feed, folder / "log.jsonl", probability_path=folder / "p.jsonl")
    return folder


@pytest.fixture(scope="module")
def tuned(folder):
    settings = settings_in(folder)
    facts = find_strongest(settings, lambda *_: None)
    plan, frozen_plan = blocks_of(facts.messages), blocks_of(facts.messages, 0.75)
    lanes = candidates(GRID, settings.learner, facts)
    truth = read_truth(folder / "log.jsonl.truth.json")
    return Tuned(
        settings,
        "bedload tune --config bedload.toml --out report",
        *digest_of_log(settings),
        facts,
        GRID,
        plan,
        run_trial(settings, lanes, plan, 1 << 32),
        Rule(),
        run_trial(settings, lanes, frozen_plan, 1 << 32),
        frozen_plan,
        (truth, expected_excess(settings, lanes, plan, truth, 1 << 32)),
        passes=["first pass"],
        seconds=1.5,
    )


@pytest.fixture(scope="module")
def found(tuned):
    return document(tuned)


def test_the_document_has_the_agreed_shape_and_is_json_that_reads_back_the_same(tuned, found):
    assert_shaped(found, SCHEMA)
    text = json.dumps(found, allow_nan=False)
    assert json.loads(text) == found
    assert text == json.dumps(document(tuned), allow_nan=False), "the same tune gives the same document"


def test_a_page_can_be_drawn_from_it(found):
    assert page(found).startswith("<!doctype html>")


def test_the_log_and_the_grid_are_told_as_they_were(found):
    log, grid = found["log"], found["grid"]
    assert (log["files"], log["messages"], log["labelled"], log["rejected"]) == (
        ["log.jsonl"],
        MESSAGES,
        MESSAGES,
        0,
    )
    assert log["first_time"].startswith("2031-03-03T06:0") and log["last_time"].endswith("Z")
    assert 0.1 < log["base_rate"] < 0.35
    assert grid["strongest"] == grid["strengths"][0] and grid["searched"]
    assert grid["strengths"] == sorted(grid["strengths"], reverse=True) and len(grid["strengths"]) == 7
    assert grid["learning_rates"] == [0.05, 0.3]
    assert found["blocks"]["messages"][-1] == MESSAGES
    assert found["thresholds"]["messages_per_day"] == pytest.approx(2_000, rel=0.3)


def test_the_figures_of_the_choice_are_those_of_a_replay_with_its_settings(tuned, found, tmp_path):
    chosen = found["candidates"][found["choice"]["index"]]
    lane = tuned.trial.lanes[chosen["index"]]
    settings = tuned.settings.model_copy(update={"learner": lane.over(tuned.settings.learner)})
    result = replay(settings, tmp_path / "state")
    snapshot = read_snapshot(result.snapshot)
    assert chosen["nnz"] == len(snapshot.weights) > 0
    assert chosen["log_loss_whole"] == result.summary.log_loss
    slices = {name: summary.log_loss for name, summary in result.slices}
    assert {row["slice"]: row["log_loss"] for row in found["slices"]["rows"]} == pytest.approx(slices)
    on_disk = sum(file.stat().st_size for file in snapshot.path.iterdir())
    assert chosen["bytes"] == pytest.approx(on_disk, abs=300)  # digits of some twenty numbers
    expected = sorted(snapshot.weights.values.tolist(), reverse=True)
    shown = found["strongest"]["towards_yes"]
    assert [token["weight"] for token in shown] == [w for w in expected[:25] if w > 0]
    by_name = dict(zip(snapshot.weights.names, snapshot.weights.messages, strict=True))
    for token in shown:
        name = f"{token['field']}\x1f{token['token'].replace('&', chr(31))}".encode()
        assert token["share"] == by_name[name] / MESSAGES and 0 <= token["kept"] <= 1


def test_candidates_are_compared_with_the_best_over_the_last_part(tuned, found):
    rows, best = found["candidates"], found["choice"]["best"]
    assert [row["index"] for row in rows] == list(range(14))
    assert rows[best]["difference"] == rows[best]["log_loss_se"] == 0.0
    assert min(row["log_loss"] for row in rows) == rows[best]["log_loss"]
    for row in rows:
        assert row["difference"] == pytest.approx(row["log_loss"] - rows[best]["log_loss"], abs=1e-12)
        assert np.mean(row["block_log_loss"][56:]) == pytest.approx(row["log_loss"], rel=1e-9)
        assert row["log_loss_se"] > 0 or row["index"] == best
        counted = [n for n in row["block_nnz"] if n is not None]
        assert len(row["block_nnz"]) == 80 and len(counted) == 20 and counted[-1] == row["nnz"]
    strong = rows[0]
    assert strong["normalised_entropy"] == pytest.approx(1.0, abs=0.02), "as good as a constant"


def test_the_forward_test_tells_the_loss_after_learning_ended(tuned, found):
    blocks = tuned.frozen.block_loss[60:].sum(axis=0) / tuned.frozen.block_totals[60:, 2].sum()
    assert [row["forward_log_loss"] for row in found["candidates"]] == pytest.approx(blocks.tolist())
    without = document(replace(tuned, frozen=None, frozen_plan=None))
    assert {row["forward_log_loss"] for row in without["candidates"]} == {None}
    (said,) = [line for line in found["choice"]["said"] if line.startswith("Forward test")]
    before, after = tuned.frozen.block_totals[:60].sum(axis=0), tuned.frozen.block_totals[60:].sum(axis=0)
    learned, met = before[3] / before[2], after[3] / after[2]
    constant = -met * np.log(learned) - (1 - met) * np.log(1 - learned)
    numbers = [float(number) for number in re.findall(r"[0-9]\.[0-9]+", said)]
    assert numbers == pytest.approx([blocks[found["choice"]["index"]], min(blocks), constant], abs=6e-5)
    assert not any("Forward test" in line for line in without["choice"]["said"])


def test_few_of_one_outcome_are_told(tuned, found):
    assert not any("messages of the last part have" in line for line in found["warnings"])
    totals = tuned.trial.block_totals.copy()
    totals[:, 3] = totals[:, 2] * 0.01
    rare = replace(tuned, trial=replace(tuned.trial, block_totals=totals), frozen=None)
    yes = round(0.01 * totals[tuned.plan.last_from :, 1].sum())
    expected = f"Only {yes} messages of the last part have the outcome yes"
    assert any(line.startswith(expected) for line in document(rare)["warnings"])


def test_paths_and_models_go_along_the_strengths_at_the_chosen_rate(found):
    chosen, paths = found["candidates"][found["choice"]["index"]], found["paths"]
    assert paths["learning_rate"] == chosen["learning_rate"]
    assert (
        paths["strengths"] == found["grid"]["strengths"] == [model["strength"] for model in found["models"]]
    )
    assert 0 < len(paths["tokens"]) <= 40
    for token in paths["tokens"]:
        assert len(token["weights"]) == 7 and any(token["weights"])
    at = [model["index"] for model in found["models"]].index(chosen["index"])
    known = {(t["field"], t["token"]): t["weights"] for t in paths["tokens"]}
    for token in found["models"][at]["towards_yes"]:
        if (token["field"], token["token"]) in known:
            assert known[token["field"], token["token"]][at] == token["weight"]
    for model in found["models"]:
        assert len(model["towards_yes"]) + len(model["towards_no"]) <= min(20, model["nnz"])


def test_slices_add_up_to_the_whole_log(found):
    rows, chosen = found["slices"]["rows"], found["candidates"][found["choice"]["index"]]
    assert found["slices"]["by"] == "route" and len(rows) == 36
    assert sum(row["messages"] for row in rows) == MESSAGES
    sums = math.fsum(row["log_loss"] * row["messages"] for row in rows)
    assert sums / MESSAGES == pytest.approx(chosen["log_loss_whole"])
    assert [row["messages"] for row in rows] == sorted((row["messages"] for row in rows), reverse=True)


def test_a_rule_that_is_asked_for_is_followed_and_named(tuned):
    found = document(replace(tuned, rule=Rule("max_weights", 30)))
    chosen = found["candidates"][found["choice"]["index"]]
    assert found["choice"]["rule"] == "max_weights" and chosen["nnz"] <= 30
    assert "at most 30 non-zero weights" in found["choice"]["said"][0]


def test_a_log_without_times_slices_truth_or_search_is_told_as_such(tuned):
    plain = replace(
        tuned,
        settings=tuned.settings.model_copy(
            update={"metrics": tuned.settings.metrics.model_copy(update={"slice_by": None})}
        ),
        facts=LogFacts(MESSAGES, None, None),
        grid=Grid(strengths=(0.1, 0.01)),
        truth=None,
    )
    found = document(plain)
    assert_shaped(found, SCHEMA)
    assert found["truth"] is None and found["slices"] == {"by": None, "rows": []}
    assert found["thresholds"]["messages_per_day"] is None and found["log"]["first_time"] is None
    assert found["grid"]["strongest"] is None and not found["grid"]["searched"]


def test_messages_without_an_outcome_do_not_lower_the_share_of_a_token(tuned, found):
    totals = tuned.trial.block_totals.copy()
    totals[:, 0] += 10.0
    other = document(replace(tuned, trial=replace(tuned.trial, block_totals=totals)))
    assert other["strongest"] == found["strongest"]


def test_bounds_that_remove_coordinates_and_refused_updates_are_warned_of(tuned, found):
    assert not any("refused" in line or "remove" in line for line in found["warnings"])
    state = tuned.settings.state.model_copy(update={"max_live": 10_000})
    refused = tuned.trial.refused + 3
    bounded = replace(
        tuned,
        settings=tuned.settings.model_copy(update={"state": state}),
        trial=replace(tuned.trial, refused=refused),
        warnings=["of the log"],
    )
    warnings = document(bounded)["warnings"]
    assert warnings[0] == "of the log"
    assert any("state.max_live" in line for line in warnings)
    assert any("refused 3 updates" in line for line in warnings)


def test_a_last_part_without_labels_is_refused(tuned):
    totals = tuned.trial.block_totals.copy()
    totals[56:, 1:] = 0.0
    with pytest.raises(BadData, match="last part of the log has a label"):
        document(replace(tuned, trial=replace(tuned.trial, block_totals=totals)))


def test_labels_in_a_single_block_of_the_last_part_leave_errors_undefined_and_are_warned_of(tuned):
    totals = tuned.trial.block_totals.copy()
    totals[56:79, 1:] = 0.0
    found = document(replace(tuned, trial=replace(tuned.trial, block_totals=totals)))
    assert_shaped(found, SCHEMA)
    errors = {row["log_loss_se"] for row in found["candidates"] if row["index"] != found["choice"]["best"]}
    assert errors == {None}
    assert any("only 1 time block " in line for line in found["warnings"])
    assert page(found)


def test_a_merged_trial_gives_the_document_of_one_that_was_never_parted(tuned, found):
    parts = [part_of(tuned.trial, first, first + 7) for first in (0, 7)]
    assert document(replace(tuned, trial=merge(parts))) == found


# ---- histograms --------------------------------------------------------------------------------------------


@st.composite
def scored(draw):
    """Margins, labels and weights of some examples."""
    size, seed = draw(st.integers(1, 300)), draw(st.integers(0, 10**6))
    rng = np.random.default_rng(seed)
    margins = rng.normal(
        draw(st.sampled_from([-7.0, -1.5, 0.0])), draw(st.sampled_from([0.0, 0.05, 2.0, 30.0])), size
    )
    labels = (rng.random(size) < 1 / (1 + np.exp(-margins.clip(-30, 30)))).astype(np.int8)
    weights = rng.choice([0.5, 1.0, 3.0], size) if draw(st.booleans()) else np.ones(size)
    return margins, labels, weights


def bins_of(margins, labels, weights):
    bins = np.zeros((2, 1, LANE_BINS, 3))
    tally_lanes(
        margins[:, None], labels, weights, np.zeros(0, np.int64), 1,
        np.zeros(1), np.zeros(1), np.zeros(4), bins, np.zeros((1, 1)), np.zeros((1, 4)),
    )  # fmt: skip
    return bins[1, 0]


def exact_auc(margins, labels, weights):
    yes, no = labels == 1, labels == 0
    pairs = weights[yes][:, None] * weights[no]
    ahead = margins[yes][:, None] - margins[no]
    return (pairs * ((ahead > 0) + 0.5 * (ahead == 0))).sum() / pairs.sum()


@given(scored())
def test_the_auc_is_off_by_no_more_than_half_the_pairs_that_share_a_bin(data):
    labels, bins = data[1], bins_of(*data)
    found = histograms.auc(bins)
    if labels.min() == labels.max():
        assert found is None
        return
    yes, no = bins[:, 1], bins[:, 0] - bins[:, 1]
    shared = (yes * no).sum() / (yes.sum() * no.sum())
    assert abs(found - exact_auc(*data)) <= 0.5 * shared + 1e-12


def test_the_auc_of_usual_scores_is_right_to_a_few_parts_in_ten_thousand():
    rng = np.random.default_rng(2)
    margins = rng.normal(-1.5, 1.2, 4_000)
    labels = (rng.random(4_000) < 1 / (1 + np.exp(-margins))).astype(np.int8)
    data = margins, labels, np.ones(4_000)
    assert histograms.auc(bins_of(*data)) == pytest.approx(exact_auc(*data), abs=3e-4)


@given(scored())
def test_reliability_bins_hold_everything_once_and_predict_within_their_limits(data):
    margins, labels, weights = data
    rows = histograms.reliability(bins_of(*data))
    assert 1 <= len(rows) <= histograms.STEPS + 1
    assert math.fsum(row["weight"] for row in rows) == pytest.approx(weights.sum())
    assert math.fsum(row["weight"] * row["observed"] for row in rows) == pytest.approx(weights @ labels)
    predicted = math.fsum(row["weight"] * row["predicted"] for row in rows)
    assert predicted == pytest.approx(weights @ (1 / (1 + np.exp(-margins.clip(-700, 700)))), abs=1e-9)
    for row in rows:
        assert row["from"] - 1e-12 <= row["predicted"] <= row["to"] + 1e-12 and row["from"] < row["to"]
    limits = [limit for row in rows for limit in (row["from"], row["to"])]
    assert limits == sorted(limits)


def test_a_rare_outcome_is_spread_over_the_reliability_bins():
    rng = np.random.default_rng(5)
    margins = np.append(rng.normal(-7, 0.7, 19_980), [3.0] * 20)  # a few far out
    labels = (rng.random(20_000) < 1 / (1 + np.exp(-margins))).astype(np.int8)
    assert len(histograms.reliability(bins_of(margins, labels, np.ones(20_000)))) >= 15


@given(scored())
def test_what_a_threshold_gives_is_what_flagging_from_it_on_gives(data):
    margins, labels, weights = data
    rows = histograms.thresholds(bins_of(*data))
    assert 1 <= len(rows) <= histograms.MOST_THRESHOLDS
    assert rows[-1]["flagged"] == 1.0
    assert [r["threshold"] for r in rows] == sorted({r["threshold"] for r in rows}, reverse=True)
    for row in rows:
        edge = (
            -math.inf
            if row["threshold"] == 0
            else round(32 * math.log(row["threshold"] / (1 - row["threshold"]))) / 32
        )
        flagged = margins >= edge
        assert row["flagged"] == pytest.approx(weights[flagged].sum() / weights.sum())
        right = weights[flagged] @ labels[flagged]
        assert row["precision"] == pytest.approx(right / weights[flagged].sum())
        if labels.any():
            assert row["recall"] == pytest.approx(right / (weights @ labels))
        else:
            assert row["recall"] is None


def test_many_different_scores_give_two_hundred_thresholds_out_to_both_ends():
    margins = np.linspace(-12, 12, 5_000)
    labels = (margins > 0).astype(np.int8)
    rows = histograms.thresholds(bins_of(margins, labels, np.ones(5_000)))
    assert len(rows) == 200
    assert rows[0]["threshold"] > 0.99999 and rows[-1]["threshold"] < 0.00001


@given(scored())
def test_calibration_is_what_docs_metrics_says(data):
    margins, labels, weights = data
    bins = bins_of(*data)
    p = 1 / (1 + np.exp(-margins.clip(-700, 700)))
    if (labels * weights).sum() > 0:
        assert histograms.calibration_ratio(bins) == pytest.approx((weights @ p) / (weights @ labels))
    else:
        assert histograms.calibration_ratio(bins) is None
    cells = np.clip(np.floor(margins * 2), -32, 31)
    gaps = [abs(weights[cells == c] @ (labels[cells == c] - p[cells == c])) for c in np.unique(cells)]
    assert histograms.calibration_error(bins) == pytest.approx(sum(gaps) / weights.sum(), abs=1e-12)


def test_without_any_label_every_figure_is_undefined():
    bins = np.zeros((LANE_BINS, 3))
    assert (
        histograms.auc(bins)
        is histograms.calibration_ratio(bins)
        is histograms.calibration_error(bins)
        is None
    )
    assert histograms.reliability(bins) == histograms.thresholds(bins) == []
    assert histograms.entropy_of(0.0, 0.0) is None


# ---- tokens ------------------------------------------------------------------------------------------------


def named_weights(values, messages, names=None, learned=100.0):
    values = np.array(values, np.float32)
    names = names or tuple(f"note\x1ft{i}".encode() for i in range(len(values)))
    kept = (values != 0).astype(np.float32)
    n, lanes = values.shape
    weights = LaneWeights(
        np.arange(n, dtype=np.uint64), values, kept, names, np.array(messages, float), np.zeros(lanes)
    )
    return NamedWeights(weights, learned)


def test_paths_put_what_tells_most_down_to_the_choice_before_the_noise_of_weaker_penalties():
    named = named_weights(
        [[0, 0.1, 0.2, 0.2], [0, 0, 0, 9.0], [0, 0.5, 0.0, 0.0], [0, 0, 0, 0], [0, 0, 1.0, 1.0]],
        [100, 100, 25, 100, 1],
    )
    found = named.paths([0, 1, 2, 3], 2, 40)
    assert [path["token"] for path in found] == ["t2", "t0", "t4", "t1"], "0.25, 0.2, 0.1; then only later"
    assert found[0] == {"field": "note", "token": "t2", "share": 0.25, "weights": [0, 0.5, 0, 0]}
    assert [path["token"] for path in named.paths([0, 1, 2, 3], 2, 2)] == ["t2", "t0"]
    assert [path["token"] for path in named.paths([0, 1, 2, 3], 0, 1)] == ["t1"], "a choice without weights"


def test_names_that_are_broken_or_unknown_still_make_a_document():
    names = (b"", b"note\x1f\xff\xfe", b"route&hour\x1fR1\x1f7", b"\xff")
    named = named_weights([[4.0], [3.0], [2.0], [np.inf]], [1, 1, 1, 200], names)
    found = named.towards(True, 0, 9)
    assert [(t["field"], t["token"]) for t in found] == [
        ("�", ""),
        ("", ""),
        ("note", "��"),
        ("route&hour", "R1&7"),
    ]
    assert found[0]["share"] == 1.0
    json.dumps(found, allow_nan=False)
    assert named.towards(False, 0, 9) == []


# ---- the planted truth -------------------------------------------------------------------------------------


def address(name, token):
    return mmh3.hash64(f"{name}\x1f{token}".encode(), 0, x64arch=True, signed=False)[0] >> 24


def test_planted_tokens_are_found_by_the_addresses_of_the_settings(folder):
    truth = read_truth(folder / "log.jsonl.truth.json")
    settings = settings_in(
        folder,
        fields=[
            {"path": "note", "name": "text", "kind": "words", "pairs": True},
            {"path": "route", "kind": "category"},
            {"path": "hour", "name": "h", "kind": "category"},
            {"path": "sender", "kind": "quantity"},
        ],
        crosses=[{"paths": ["h", "route"]}],
        metrics={},
    )
    seen = set()
    for planted, found in zip(truth.planted, planted_at(settings, truth), strict=True):
        seen.add(planted.fields)
        match planted.fields:
            case ("note",):
                assert found == {address("text", planted.tokens[0])}
            case ("route",):
                assert found == {address("route", planted.tokens[0])}
            case ("hour",):
                assert found == {address("h", planted.tokens[0])}
            case ("route", "hour"):
                assert found == {address("h&route", "\x1f".join(reversed(planted.tokens)))}
            case _:
                assert found == set(), "no field of the settings makes this token"
    assert {("note",), ("route",), ("hour",), ("sender",), ("stop",), ("route", "hour")} <= seen


def test_true_probabilities_are_those_that_the_simulator_drew_from(folder):
    settings = settings_in(folder, fields=[{"path": "weight_kg", "kind": "quantity"}], crosses=[], metrics={})
    truth = read_truth(folder / "log.jsonl.truth.json")
    assert truth.label_noise == 0.02
    expected = [json.loads(line)["p_true"] for line in (folder / "p.jsonl").read_bytes().splitlines()]
    for noise in (0.0, truth.label_noise):
        rates, found = TrueRates(settings, replace(truth, label_noise=noise)), []
        source = LogSource(settings.feed.paths, folder, 1 << 20)
        while len(block := source.read(1000)):
            rows, batch, shares = rates.of(block)
            assert len(rows) == len(batch) == len(shares) == len(block)
            found += shares.tolist()
        source.close()
        assert found == pytest.approx([noise + (1 - 2 * noise) * p for p in expected], abs=1e-9)


def test_a_message_that_cannot_be_read_has_no_true_probability(folder, tmp_path):
    lines = (folder / "log.jsonl").read_bytes().splitlines()[:5]
    lines[1:1] = [b'{"note": 7}', b"{"]
    (tmp_path / "log.jsonl").write_bytes(b"\n".join(lines) + b"\n")
    rates = TrueRates(settings_in(tmp_path), read_truth(folder / "log.jsonl.truth.json"))
    source = LogSource(["log.jsonl"], tmp_path, 1 << 20)
    rows, _, shares = rates.of(source.read(100))
    source.close()
    assert rows.tolist() == [0, 3, 4, 5, 6] and len(shares) == 5


def test_the_excess_is_the_mean_divergence_from_the_true_shares(folder, tuned):
    """Against scores that a replay hands out one by one, put together in plain Python."""
    lanes, last_from = tuned.trial.lanes[:3], tuned.plan.ends[tuned.plan.last_from - 1]
    margins = []
    model = LaneModel(tuned.settings, [lane.over(tuned.settings.learner) for lane in lanes])
    progress = LaneProgress(3, tuned.plan.ends, tuned.plan.last_from, 700, True)
    rejects = RejectLog(Path(), tuned.settings.message, action="skip")
    run = Steps(
        tuned.settings, model, progress, rejects, lambda block, rows, found: margins.extend(found.tolist())
    )
    source = LogSource(tuned.settings.feed.paths, folder, 1 << 20)
    while run.step(source, 1024):
        pass
    source.close()
    true = [json.loads(line)["p_true"] for line in (folder / "p.jsonl").read_bytes().splitlines()]
    for lane in range(3):
        total = 0.0
        for i in range(last_from, MESSAGES):
            share = 0.02 + 0.96 * true[i]
            p = 1 / (1 + math.exp(-margins[i][lane]))
            total += share * math.log(share / p) + (1 - share) * math.log((1 - share) / (1 - p))
        assert tuned.truth[1][lane] == pytest.approx(total / (MESSAGES - last_from), rel=1e-6)


def test_lanes_that_do_not_fit_together_give_the_same_excess_in_parts(tuned):
    lanes, truth = tuned.trial.lanes[3:6], tuned.truth[0]
    whole = expected_excess(tuned.settings, lanes, tuned.plan, truth, 1 << 32)
    assert expected_excess(tuned.settings, lanes, tuned.plan, truth, 1).tobytes() == whole.tobytes()


def test_precision_and_recall_count_planted_and_non_zero_tokens(tuned, found):
    told, index = found["truth"], found["choice"]["index"]
    weights = tuned.trial.weights
    kept = {name for name, w in zip(weights.names, weights.values[:, index], strict=True) if w}
    truth = tuned.truth[0]
    planted = set()
    for token in truth.planted:
        if token.fields == ("route", "hour"):
            planted.add("\x1f".join(["hour&route", token.tokens[1], token.tokens[0]]).encode())
        else:
            planted.add(f"{token.fields[0]}\x1f{token.tokens[0]}".encode())
    assert told["planted"] == len(truth.planted) == len(planted)
    assert told["found"] == len(kept & planted) > 0
    assert told["precision"] == told["found"] / len(kept)
    assert told["recall"] == told["found"] / told["planted"]
    excess = tuned.truth[1]
    assert told["excess_log_loss"] == excess[index] >= told["best_excess_log_loss"] == excess.min() > 0


def test_a_model_without_weights_finds_nothing_and_has_no_precision(tuned):
    told = document(
        replace(
            tuned, trial=part_of(tuned.trial, 0, 1), truth=(tuned.truth[0], tuned.truth[1][:1]), frozen=None
        )
    )
    nnz = told["candidates"][0]["nnz"]
    assert (told["truth"]["precision"] is None) == (nnz == 0)
    assert told["truth"]["found"] <= nnz


@pytest.mark.parametrize(
    "text", ["{", "[]", '{"weights": []}', '{"weights": [{"field": "note"}], "crosses": []}']
)
def test_what_is_no_truth_file_is_refused_by_name(tmp_path, text):
    path = tmp_path / "truth.json"
    with pytest.raises(InputMissing, match=r"truth\.json"):
        read_truth(path)
    path.write_text(text)
    with pytest.raises(BadData, match=r"truth\.json is no truth file"):
        read_truth(path)


def test_a_truth_that_plants_what_is_no_token_is_refused(folder):
    truth = replace(
        read_truth(folder / "log.jsonl.truth.json"), planted=(Planted(("note",), ("two words",), 1.0),)
    )
    with pytest.raises(BadData, match="which is no token"):
        TrueRates(settings_in(folder), truth)


@given(st.integers(-(10**18), 10**18) | st.sampled_from([0, -1, 10**15]))
@options(max_examples=40)
def test_any_time_makes_a_document(ms):
    text = _time(ms)
    assert text is None or (len(text) == 20 and text.endswith("Z"))
    assert _per_day(LogFacts(1000, ms, ms + 2 * 86_400_000)) == 500.0
    assert _per_day(LogFacts(1000, ms, ms + 3_600_000)) is None
