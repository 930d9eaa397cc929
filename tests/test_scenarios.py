"""Scenarios of the simulated feed: the published truth, moving or not, gives every probability exactly."""

from __future__ import annotations

import hashlib
import json
import math
import re
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from simulator import CourierFeed, Faults, FeedBlock, blocks, write_log
from simulator.courier import Courier
from simulator.crafted import CRAFTED
from simulator.feed import BLOCK
from simulator.scenarios import SCENARIOS
from stream.errors import BadData
from stream.runs.tuning.truth import Planted, Truth, planted_at, read_truth
from stream.settings import Settings

Message = dict[str, Any]
WORDS = re.compile(r"[^\W_]+")
MESSAGES = 5_000
SUDDEN = ["sudden-change", "base-rate-shift", "new-vocabulary"]
MOVING = [*SUDDEN, "slow-drift", "seasonal"]


def feed_of(scenario: str, **changes: Any) -> CourierFeed:
    plain = {"seed": 3, "messages": MESSAGES, "messages_per_day": 500, "scenario": scenario}
    return CourierFeed(**{**plain, **changes})


@cache
def courier_of(feed: CourierFeed) -> Courier:
    return Courier(feed)


@cache
def blocks_of(feed: CourierFeed) -> list[FeedBlock]:
    return [courier_of(feed).block(number) for number in range(feed.block_count)]


@cache
def messages_of(feed: CourierFeed) -> list[Message]:
    return [json.loads(line) for block in blocks_of(feed) for line in block.lines.splitlines()]


def probabilities_of(feed: CourierFeed) -> npt.NDArray[np.float64]:
    return np.concatenate([block.probability for block in blocks_of(feed)])


def words_in(message: Message) -> set[str]:
    return {word.casefold() for word in WORDS.findall(message["note"])}


class Published:
    """Margins from a truth file and JSON messages alone."""

    def __init__(self, truth: dict[str, Any]) -> None:
        self._course = truth["course"]
        self._weights = _by_tokens(truth["weights"] + truth["crosses"])
        self._later = self._weights | _by_tokens(truth["later_weights"] + truth["later_crosses"])

    def margin(self, number: int, message: Message) -> float:
        step = [step for step in self._course if step["message"] <= number][-1]
        tokens: set[Any] = {(("note",), (word,)) for word in words_in(message)}
        tokens |= {((f,), (str(message[f]),)) for f in ("route", "stop", "hour", "sender", "locker")}
        tokens.add((("route", "hour"), (message["route"], str(message["hour"]))))
        margin: float = step["intercept"]
        for token in tokens & self._later.keys():
            before = self._weights.get(token, 0.0)
            margin += before + step["share"] * (self._later[token] - before)
        return margin


def _by_tokens(weights: list[dict[str, Any]]) -> dict[Any, float]:
    return {
        (tuple(w.get("fields", [w.get("field")])), tuple(w.get("tokens", [w.get("token")]))): w["weight"]
        for w in weights
    }


def sigmoid(margin: float) -> float:
    return 1 / (1 + math.exp(-margin))


# Truth


@pytest.mark.parametrize("scenario", SCENARIOS)
def test_the_truth_file_gives_every_probability_from_the_json_alone_and_names_every_change(
    scenario: str, tmp_path: Path
) -> None:
    write_log(feed_of(scenario), tmp_path / "log", probability_path=tmp_path / "p")
    truth = json.loads((tmp_path / "log.truth.json").read_text("utf-8"))
    messages = [json.loads(line) for line in (tmp_path / "log").read_text("utf-8").splitlines()]
    told = [json.loads(line) for line in (tmp_path / "p").read_text("utf-8").splitlines()]
    assert len(messages) == len(told) == MESSAGES
    published = Published(truth)
    for number in range(0, MESSAGES, 17):
        assert told[number]["id"] == messages[number]["id"]
        p = sigmoid(published.margin(number, messages[number]))
        assert told[number]["p_true"] == pytest.approx(p, abs=1e-9)
    assert (len(truth["course"]) > 1) == (scenario in MOVING)
    assert all(messages[step["message"]]["at"] == step["at"] for step in truth["course"])


@pytest.mark.parametrize("scenario", SCENARIOS)
def test_the_truth_at_a_message_is_exactly_the_one_its_probability_was_drawn_from(scenario: str) -> None:
    courier = courier_of(feed_of(scenario))
    for number in range(courier.feed.block_count):
        block = blocks_of(courier.feed)[number]
        lines = block.lines.splitlines()
        for row in range(0, len(block), 311):
            truth = courier.truth_at(block.first + row)
            course = [{"message": 0, "share": 0.0, "intercept": truth.intercept}]
            now = {"weights": truth.tokens(), "crosses": truth.crosses(), "course": course}
            published = Published({**now, "later_weights": [], "later_crosses": []})
            margin = published.margin(block.first + row, json.loads(lines[row]))
            assert block.probability[row] == pytest.approx(sigmoid(margin), rel=1e-13)


@pytest.mark.parametrize("scenario", MOVING)
def test_the_truth_changes_where_the_course_says_and_nowhere_else(scenario: str) -> None:
    courier = courier_of(feed_of(scenario))
    changes = set(courier.course.first.tolist())
    assert 0 in changes
    for number in changes - {0}:
        before, now, after = (courier.truth_at(n) for n in (number - 1, number, number + 1))
        assert (before.tokens(), before.intercept) != (now.tokens(), now.intercept)
        if number + 1 not in changes:
            assert (now.tokens(), now.intercept) == (after.tokens(), after.intercept)


@pytest.mark.parametrize("scenario", [name for name in SCENARIOS if name not in MOVING])
def test_where_nothing_moves_the_course_has_one_step(scenario: str, tmp_path: Path) -> None:
    truth = write_log(feed_of(scenario, messages=300), tmp_path / "log")
    assert [step["message"] for step in truth.course] == [0]
    assert truth.later_weights == truth.later_crosses == []


def test_a_message_outside_the_log_has_no_truth() -> None:
    courier = courier_of(feed_of("steady", messages=10))
    with pytest.raises(ValueError, match="message is 10; the log has 0 to 9"):
        courier.truth_at(10)


# Bytes


def test_same_settings_give_the_same_bytes_on_every_machine(tmp_path: Path) -> None:
    digest = hashlib.sha256()
    faults = Faults(0.1, 0.1, 0.1, 0.1, lost_outcomes=0.1, repeated_outcomes=0.1)
    for scenario in SCENARIOS:
        feed = feed_of(scenario, messages=600, messages_per_day=200)
        write_log(feed, tmp_path / "log", outcome_path=tmp_path / "late", faults=faults)
        for name in ("log", "late", "log.truth.json"):
            digest.update((tmp_path / name).read_bytes())
    assert digest.hexdigest() == "44d08db93d0c79d14aea063e7bcc2398aeda1350ee15e349f78202835afded3f"


@pytest.mark.parametrize("scenario", SCENARIOS)
def test_same_settings_same_bytes_and_blocks_come_in_any_order(scenario: str) -> None:
    feed = feed_of(scenario)
    courier = Courier(feed)
    backwards = [courier.block(i).lines for i in reversed(range(feed.block_count))]
    assert list(reversed(backwards)) == [block.lines for block in blocks_of(feed)]


@pytest.mark.parametrize("scenario", ["sudden-change", "base-rate-shift", "slow-drift", "seasonal"])
def test_what_moves_only_the_truth_leaves_every_message_but_its_outcome(scenario: str) -> None:
    def without_outcome(feed: CourierFeed) -> list[Message]:
        return [{k: v for k, v in m.items() if k != "redelivered"} for m in messages_of(feed)]

    assert without_outcome(feed_of(scenario)) == without_outcome(feed_of("steady"))


@pytest.mark.parametrize("scenario", ["new-vocabulary", "collisions"])
def test_before_newcomers_break_in_messages_are_the_steady_ones(scenario: str) -> None:
    steady, moving = messages_of(feed_of("steady")), messages_of(feed_of(scenario))
    assert [m["note"] for m in steady[: MESSAGES // 2]] == [m["note"] for m in moving[: MESSAGES // 2]]
    assert [m["note"] for m in steady[MESSAGES // 2 :]] != [m["note"] for m in moving[MESSAGES // 2 :]]


# What each scenario is


def steps_of(courier: Courier) -> Iterator[tuple[int, float]]:
    yield from zip(courier.course.first.tolist(), courier.course.share.tolist(), strict=True)


@pytest.mark.parametrize("moving", [0.0, 0.3, 1.0])
def test_a_sudden_change_flips_half_of_its_share_of_weights_and_sends_the_others_elsewhere(
    moving: float,
) -> None:
    courier = courier_of(feed_of("sudden-change", moving=moving, change_at=0.25))
    assert list(steps_of(courier)) == [(0, 0.0), (MESSAGES // 4, 1.0)]
    before, after = (
        {(w["field"], w["token"]): w["weight"] for w in courier.truth_at(number).tokens()}
        for number in (0, MESSAGES // 4)
    )
    flipped = {token for token in before.keys() & after.keys() if after[token] == -before[token]}
    gone, come = before.keys() - after.keys(), after.keys() - before.keys()
    assert len(before) == len(after) and len(gone) == len(come)
    assert abs(len(flipped) + len(gone) - moving * len(before)) <= 3
    assert abs(len(flipped) - len(gone)) <= 6
    assert all(before[t] == after[t] for t in before.keys() & after.keys() - flipped)
    assert sorted(before[t] for t in gone) == sorted(after[t] for t in come)


def test_a_slow_drift_goes_there_in_equal_steps() -> None:
    courier = courier_of(feed_of("slow-drift"))
    assert [share for _, share in steps_of(courier)] == [step / 32 for step in range(33)]
    firsts = [first for first, _ in steps_of(courier)]
    assert max(np.diff(firsts)) - min(np.diff(firsts)) <= 1


def test_a_season_comes_back_to_where_it_began() -> None:
    courier = courier_of(feed_of("seasonal", season_days=1.0, messages_per_day=2_000))
    at = [courier.truth_at(day * 2_000 + 125 * 3) for day in range(2)]
    assert at[0].tokens() == at[1].tokens()
    assert courier.truth_at(1_000).tokens() == courier.later.tokens() != courier.truth_at(0).tokens()


def test_the_base_rate_shifts_and_no_weight_with_it() -> None:
    courier = courier_of(feed_of("base-rate-shift", base_rate=0.1, later_rate=0.3))
    assert courier.truth_at(0).tokens() == courier.truth_at(MESSAGES - 1).tokens()
    p = probabilities_of(courier.feed)
    assert p[: MESSAGES // 2].mean() == pytest.approx(0.1, abs=1e-6)
    assert p[MESSAGES // 2 :].mean() == pytest.approx(0.3, abs=1e-6)


@pytest.mark.parametrize("scenario", [name for name in SCENARIOS if name != "base-rate-shift"])
def test_the_base_rate_stays_where_the_weights_move(scenario: str) -> None:
    p = probabilities_of(feed_of(scenario))
    assert p[: MESSAGES // 2].mean() == pytest.approx(0.2, abs=0.005)
    assert p[MESSAGES // 2 :].mean() == pytest.approx(0.2, abs=0.005)


def test_new_words_have_weights_and_were_never_seen_before() -> None:
    feed = feed_of("new-vocabulary", messages=12_000)
    courier, messages = courier_of(feed), messages_of(feed)
    fresh = {word.casefold() for word in courier.planting.newcomers}
    seen = [words_in(m) & fresh for m in messages]
    assert not any(seen[:6_000])
    assert 0.15 < sum(map(bool, seen[6_000:])) / 6_000 < 0.5
    planted = {w["token"] for w in courier.truth_at(6_000).tokens()} & fresh
    assert planted == {w["token"] for w in courier.planting.other_tokens(courier.later)}
    assert len(planted) == feed.planted_words // 2 and len(planted & set().union(*seen)) > 30


def test_rare_tokens_are_rare_and_nothing_else_has_a_weight() -> None:
    feed = feed_of("rare-tokens", messages=20_000)
    truth, messages = courier_of(feed).truth_at(0), messages_of(feed)
    assert {w["field"] for w in truth.tokens()} == {"note", "sender"} and truth.crosses() == []
    planted = {w["token"] for w in truth.tokens()}
    counts: dict[str, int] = {}
    for m in messages:
        for token in (words_in(m) | {m["sender"]}) & planted:
            counts[token] = counts.get(token, 0) + 1
    assert len(planted) == 1_260 and max(counts.values()) < len(messages) / 200
    assert len(counts) > 700


def test_label_noise_is_heavy_and_other_settings_keep_their_defaults() -> None:
    feed = feed_of("label-noise", messages=20_000)
    assert (feed.label_noise, feed.effect) == (0.25, 0.8)
    flipped = np.concatenate([block.flipped for block in blocks(feed)])
    assert flipped.mean() == pytest.approx(0.25, abs=0.01)
    assert feed_of("label-noise", label_noise=0.02).label_noise == 0.02


def test_a_companion_stands_wherever_its_word_does(tmp_path: Path) -> None:
    truth = write_log(feed_of("duplicated-tokens"), tmp_path / "log")
    companions = {pair["token"]: pair["companion"] for pair in truth.companions}
    planted = {w["token"] for w in truth.weights if w["field"] == "note"}
    assert {word for word in planted if word[0].isascii()} <= companions.keys()
    assert not planted & set(companions.values())
    alone = together = 0
    text = (tmp_path / "log").read_text("utf-8")
    for line in text.splitlines():
        words = words_in(json.loads(line))
        for word, other in companions.items():
            assert word not in words or other in words
            together += word in words
            alone += other in words and word not in words
    assert together > 2_000 and 0 < alone < together / 50  # alone beside a slip of the pen
    assert truth.words == sum(len(WORDS.findall(json.loads(line)["note"])) for line in text.splitlines())


@pytest.mark.parametrize(
    ("space", "shared"), [({"address_bits": 40}, True), ({"seed": 1}, False), ({"address_bits": 48}, False)]
)
def test_crafted_words_share_the_addresses_of_the_words_they_attack(
    space: dict[str, int], shared: bool
) -> None:
    pairs = [(word, other) for word, crafted in CRAFTED.items() for other in crafted]
    planted = tuple(Planted(("note",), (word,), 1.0) for pair in pairs for word in pair)
    words = {"path": "note", "kind": "words"}
    chosen = Settings.model_validate(
        {"feed": {"paths": ["x"]}, "message": {"label": "y"}, "fields": [words], "space": space}
    )
    places = planted_at(chosen, Truth(0.0, planted, 0.0))
    assert len(pairs) > 10
    for word, other in zip(places[::2], places[1::2], strict=True):
        assert (word == other) == shared


def test_an_attack_brings_crafted_words_without_weights_of_their_own() -> None:
    feed = feed_of("collisions")
    truth = {w["token"]: w["weight"] for w in courier_of(feed).truth_at(0).tokens() if w["field"] == "note"}
    crafted = {word for words in CRAFTED.values() for word in words}
    assert truth.keys() >= CRAFTED.keys() and not truth.keys() & crafted
    seen = [words_in(m) & crafted for m in messages_of(feed)]
    assert not any(seen[: MESSAGES // 2])
    assert sum(map(bool, seen[MESSAGES // 2 :])) / (MESSAGES // 2) > 0.15


# Settings


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"scenario": "stedy"}, "scenario is 'stedy'; there are steady, sudden-change"),
        ({"season_days": 3.0}, "season_days is 3.0, but nothing comes of it in scenario steady"),
        ({"scenario": "seasonal", "season_days": 0.001}, "a season needs 16"),
        ({"scenario": "seasonal", "messages": 10**7, "messages_per_day": 1_000, "season_days": 1.0}, "raise"),
        ({"scenario": "slow-drift", "change_at": 0.2}, "it counts in sudden-change"),
        ({"scenario": "sudden-change", "moving": 1.5}, "moving is 1.5; allowed is 0 to 1"),
        ({"scenario": "rare-tokens", "planted_words": 2_401}, "allowed is 0 to 2400"),
        ({"planted_words": 601}, "allowed is 0 to 600"),
    ],
)
def test_a_setting_that_does_not_fit_is_named(changes: dict[str, Any], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        CourierFeed(**changes)


@settings(max_examples=10, deadline=None)
@given(
    scenario=st.sampled_from(list(SCENARIOS)),
    seed=st.integers(0, 2**63 - 1),
    messages=st.integers(1, 100),
    base_rate=st.floats(0.001, 0.999),
    effect=st.floats(0, 8),
    planted_words=st.integers(0, 600),
)
def test_any_allowed_settings_give_lines_that_parse(**chosen: Any) -> None:
    feed = CourierFeed(**chosen)
    assert len(messages_of(feed)) == feed.messages


@pytest.mark.parametrize("change_at", [0.0, 1.0])
def test_a_change_at_the_very_start_or_end_is_no_change(change_at: float) -> None:
    courier = courier_of(feed_of("sudden-change", messages=BLOCK, change_at=change_at))
    assert list(steps_of(courier)) == [(0, 1.0 - change_at)]


def test_a_truth_that_moves_is_not_compared_as_if_it_stood(tmp_path: Path) -> None:
    write_log(feed_of("slow-drift", messages=100), tmp_path / "log")
    with pytest.raises(BadData, match=r"tells a truth of 33 steps \(scenario slow-drift\)"):
        read_truth(tmp_path / "log.truth.json")
    write_log(feed_of("collisions", messages=100), tmp_path / "log")
    assert read_truth(tmp_path / "log.truth.json").planted
