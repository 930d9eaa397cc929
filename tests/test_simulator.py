"""The simulated courier feed: promised bytes, known truth, and notes whose vocabulary keeps growing."""

from __future__ import annotations

import ast
import gzip
import hashlib
import io
import itertools
import json
import math
import re
import sys
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zstandard
from hypothesis import given, settings
from hypothesis import strategies as st

import simulator
from simulator import CourierFeed, Truth, bench_log, blocks, write_log
from simulator.arithmetic import exp, log, power, sigmoid
from simulator.courier import Courier
from simulator.feed import BLOCK
from simulator.lexicon import lexicon
from simulator.phrases import CLASSES, ENDS, JOINS, OPEN_CLASSES, PHRASES, TOWARDS_NO, TOWARDS_YES
from simulator.words import codes, shops, streets
from simulator.zipf import ZipfLaw

Message = dict[str, Any]
WORDS = re.compile(r"[^\W_]+")
KEYS = ["id", "at", "note", "route", "stop", "hour", "sender", "locker", "weight_kg", "redelivered"]
FEED = CourierFeed(seed=11, messages=30_000)


def text_of(feed: CourierFeed) -> bytes:
    return b"".join(block.lines for block in blocks(feed))


def messages_of(text: bytes) -> list[Message]:
    return [json.loads(line) for line in text.splitlines()]


def tokens_in(note: str) -> set[str]:
    return {word.casefold() for word in WORDS.findall(note)}


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> tuple[list[Message], Truth, list[float]]:
    """Messages, truth and true probabilities of FEED, read back from its files."""
    folder = tmp_path_factory.mktemp("feed")
    truth = write_log(FEED, folder / "log.jsonl", probability_path=folder / "p.jsonl")
    rows = messages_of((folder / "p.jsonl").read_bytes())
    messages = messages_of((folder / "log.jsonl").read_bytes())
    assert [row["id"] for row in rows] == [m["id"] for m in messages]
    return messages, truth, [row["p_true"] for row in rows]


# Bytes


def test_same_settings_give_the_same_bytes_on_every_machine() -> None:
    text = text_of(CourierFeed(seed=7, messages=5_000))
    assert text == text_of(CourierFeed(seed=7, messages=5_000))
    digest = hashlib.sha256(text).hexdigest()
    assert digest == "dd4ee99d1dfde10cb2270f7f0956ee5c3871b312faf652ac989039fe22bf9ebe"


def test_bench_log_keeps_its_bytes(tmp_path: Path) -> None:
    bench_log(tmp_path / "bench.jsonl", 1_000, distinct=50_000, seed=3)
    digest = hashlib.sha256((tmp_path / "bench.jsonl").read_bytes()).hexdigest()
    assert digest == "4cc8d7f691ca768fb122886309e0e37cb01e4ead993851e7666488fb4de7ae8a"


def test_another_seed_gives_other_messages_and_another_truth() -> None:
    one, two = (Courier(CourierFeed(seed=seed, messages=100)) for seed in (1, 2))
    assert one.block(0).lines != two.block(0).lines
    assert one.planting.tokens() != two.planting.tokens()


def test_blocks_can_be_made_in_any_order() -> None:
    feed = CourierFeed(seed=5, messages=3 * BLOCK + 17)
    backwards = Courier(feed)
    made = [backwards.block(i).lines for i in reversed(range(feed.block_count))]
    assert b"".join(reversed(made)) == text_of(feed)


def test_a_log_that_ends_inside_a_block_ends_with_a_whole_line() -> None:
    text = text_of(CourierFeed(seed=5, messages=BLOCK + 3))
    assert text.endswith(b"}\n")
    assert [m["id"] for m in messages_of(text)] == [f"h{i:09d}" for i in range(BLOCK + 3)]


def test_compressed_logs_hold_the_same_lines_and_no_clock(tmp_path: Path) -> None:
    feed = CourierFeed(messages=300)
    for name in ("a.jsonl", "a.jsonl.gz", "b.jsonl.gz", "a.jsonl.zst"):
        write_log(feed, tmp_path / name)
    plain = (tmp_path / "a.jsonl").read_bytes()
    assert gzip.decompress((tmp_path / "a.jsonl.gz").read_bytes()) == plain
    assert (tmp_path / "a.jsonl.gz").read_bytes() == (tmp_path / "b.jsonl.gz").read_bytes()
    packed = (tmp_path / "a.jsonl.zst").read_bytes()
    assert zstandard.ZstdDecompressor().stream_reader(packed).read() == plain


def test_a_log_can_go_to_standard_output(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.chdir(tmp_path)
    out = io.TextIOWrapper(io.BytesIO())
    monkeypatch.setattr(sys, "stdout", out)
    write_log(CourierFeed(messages=50), "-")
    assert out.buffer.seek(0) == 0 and out.buffer.read() == text_of(CourierFeed(messages=50))
    assert list(tmp_path.iterdir()) == []


def test_an_interrupted_log_leaves_no_file_and_keeps_the_old_one(tmp_path: Path) -> None:
    def interrupt(done: int, total: int) -> None:
        raise KeyboardInterrupt

    log = tmp_path / "log.jsonl"
    log.write_text("older\n")
    with pytest.raises(KeyboardInterrupt):
        write_log(CourierFeed(messages=50), log, probability_path=tmp_path / "p", progress=interrupt)
    assert [path.name for path in tmp_path.iterdir()] == ["log.jsonl"]
    assert log.read_text() == "older\n"


def test_progress_counts_up_to_all_messages(tmp_path: Path) -> None:
    seen: list[tuple[int, int]] = []
    write_log(CourierFeed(messages=BLOCK + 5), tmp_path / "log", progress=lambda *at: seen.append(at))
    assert seen == [(BLOCK, BLOCK + 5), (BLOCK + 5, BLOCK + 5)]


# Messages


def test_every_message_has_every_field_in_its_form(
    written: tuple[list[Message], Truth, list[float]],
) -> None:
    messages, _, _ = written
    assert len(messages) == FEED.messages
    for m in messages:
        assert list(m) == KEYS
        assert re.fullmatch(r"2031-\d\d-\d\dT\d\d:\d\d:\d\dZ", m["at"])
        assert int(m["at"][11:13]) == m["hour"] and 6 <= m["hour"] <= 21
        assert re.fullmatch(r"R\d\d", m["route"]) and re.fullmatch(r"S\d{6}", m["sender"])
        assert (m["locker"] is not None) == (m["stop"] == "locker")
        assert 0.1 <= m["weight_kg"] <= 30.1 and type(m["redelivered"]) is bool
        assert m["note"] == m["note"].lstrip(" ") and "  " not in m["note"]
    assert all(a["at"] <= b["at"] for a, b in itertools.pairwise(messages))


@pytest.mark.parametrize("words", [6, 12, 60])
def test_notes_have_as_many_words_as_asked(words: int) -> None:
    messages = messages_of(text_of(CourierFeed(messages=8_000, words_per_note=words)))
    mean = sum(len(WORDS.findall(m["note"])) for m in messages) / len(messages)
    assert mean == pytest.approx(words, rel=0.04)


def test_notes_exercise_a_tokenizer(written: tuple[list[Message], Truth, list[float]]) -> None:
    notes = "\n".join(m["note"] for m in written[0])
    for sign in ("é", "ö", "玄関", "留守", "!", ";", "...", "\n"):
        assert sign in notes
    assert re.search(r"\b[A-Z]{4,} [A-Z]{4,}\b", notes)
    assert any(slip in notes for slip in ("nieghbour", "neihgbour", "neghbour"))


def test_words_counted_are_words_written(written: tuple[list[Message], Truth, list[float]]) -> None:
    messages, truth, _ = written
    assert truth.words == sum(len(WORDS.findall(m["note"])) for m in messages)


def test_the_clock_spans_leap_days_and_years() -> None:
    messages = messages_of(text_of(CourierFeed(messages=800, messages_per_day=1)))
    days = [m["at"][:10] for m in messages]
    assert days[0] == "2031-03-03" and "2032-02-29" in days and days[-1] == "2033-05-10"


# Truth


def margin_of(message: Message, truth: Truth) -> float:
    """The margin from the published truth and the JSON message alone."""
    have = {("note", token) for token in tokens_in(message["note"])}
    have |= {(field, str(message[field])) for field in ("route", "stop", "hour", "sender", "locker")}
    margin = truth.intercept + sum(w["weight"] for w in truth.weights if (w["field"], w["token"]) in have)
    for cross in truth.crosses:
        if [str(message[field]) for field in cross["fields"]] == cross["tokens"]:
            margin += cross["weight"]
    return margin


def test_the_truth_gives_every_probability_from_the_json_alone(
    written: tuple[list[Message], Truth, list[float]],
) -> None:
    messages, truth, probabilities = written
    for message, p in zip(messages[::15], probabilities[::15], strict=True):
        assert 1 / (1 + math.exp(-margin_of(message, truth))) == pytest.approx(p, abs=1e-9)


def test_the_truth_stands_beside_the_log(tmp_path: Path) -> None:
    truth = write_log(CourierFeed(messages=200), tmp_path / "log.jsonl")
    stored = json.loads((tmp_path / "log.jsonl.truth.json").read_text(encoding="utf-8"))
    assert stored["weights"] == truth.weights and stored["settings"]["messages"] == 200
    assert stored["intercept"] == truth.intercept


def test_mean_probability_is_the_base_rate_and_outcomes_follow_it() -> None:
    for rate in (0.02, 0.2, 0.7):
        made = list(blocks(CourierFeed(seed=3, messages=40_000, base_rate=rate, label_noise=0)))
        p = np.concatenate([block.probability for block in made])
        outcome = np.concatenate([block.outcome for block in made])
        assert p.mean() == pytest.approx(rate, abs=1e-6)
        assert abs(outcome.mean() - rate) < 3 * math.sqrt((p * (1 - p)).sum()) / len(p)


def test_a_log_longer_than_the_pilot_keeps_near_the_base_rate() -> None:
    feed = CourierFeed(seed=3, messages=60 * BLOCK, words_per_note=6)
    p = np.concatenate([block.probability for block in blocks(feed)])
    assert p.mean() == pytest.approx(feed.base_rate, abs=0.002)


def test_outcomes_are_calibrated_to_their_true_probabilities() -> None:
    made = list(blocks(CourierFeed(seed=9, messages=60_000, label_noise=0)))
    p = np.concatenate([block.probability for block in made])
    outcome = np.concatenate([block.outcome for block in made])
    for low, high in ((0, 0.1), (0.1, 0.3), (0.3, 0.6), (0.6, 1)):
        part = (p >= low) & (p < high)
        sigma = math.sqrt((p[part] * (1 - p[part])).sum())
        assert part.sum() > 500 and abs(outcome[part].sum() - p[part].sum()) < 4 * sigma


def test_label_noise_flips_its_share_and_nothing_else() -> None:
    clean = list(blocks(CourierFeed(seed=4, messages=40_000, label_noise=0)))
    noisy = list(blocks(CourierFeed(seed=4, messages=40_000, label_noise=0.1)))
    for a, b in zip(clean, noisy, strict=True):
        assert not a.flipped.any() and (a.outcome ^ b.outcome == b.flipped).all()
        assert (a.probability == b.probability).all()
    flipped = np.concatenate([block.flipped for block in noisy])
    assert abs(flipped.mean() - 0.1) < 4 * math.sqrt(0.09 / len(flipped))


def test_nearly_every_token_has_weight_zero(written: tuple[list[Message], Truth, list[float]]) -> None:
    messages, truth, _ = written
    distinct = len(set().union(*(tokens_in(m["note"]) for m in messages)))
    planted = [w for w in truth.weights if w["field"] == "note"]
    assert len(planted) == FEED.planted_words and distinct > 50 * len(planted)
    assert {w["field"] for w in truth.weights} == {"note", "route", "stop", "hour", "sender", "locker"}
    assert len(truth.crosses) == 30 and all(w["weight"] != 0 for w in truth.weights + truth.crosses)
    assert len({(w["field"], w["token"]) for w in truth.weights}) == len(truth.weights)


def test_leaning_words_lean_as_they_read(written: tuple[list[Message], Truth, list[float]]) -> None:
    weight = {w["token"]: w["weight"] for w in written[1].weights if w["field"] == "note"}
    assert all(weight[word] > 0 for word in TOWARDS_YES if word in weight)
    assert all(weight[word] < 0 for word in TOWARDS_NO if word in weight)


def test_without_effect_there_is_nothing_to_learn() -> None:
    courier = Courier(CourierFeed(messages=500, effect=0.0))
    assert courier.planting.tokens() == [] and courier.planting.crosses() == []
    assert courier.block(0).probability == pytest.approx(np.full(500, 0.2), abs=1e-6)


def test_a_feed_without_planted_words_still_has_other_weights() -> None:
    courier = Courier(CourierFeed(messages=500, planted_words=0))
    assert {w["field"] for w in courier.planting.tokens()} == {"route", "stop", "hour", "sender", "locker"}
    assert len(courier.block(0)) == 500


# Vocabulary


def open_words(messages: list[Message]) -> Iterator[str]:
    """Street names, which are the words in mixed case that are no word of the lexicon."""
    listed = {word.casefold() for unit in lexicon().units for word in unit.split()}
    for m in messages:
        for word in WORDS.findall(m["note"]):
            if word.istitle() and word.isalpha() and word.casefold() not in listed:
                yield word


@pytest.mark.parametrize("exponent", [0.8, 1.05, 1.4])
def test_streets_follow_the_zipf_exponent(exponent: float) -> None:
    feed = CourierFeed(messages=60_000, zipf_exponent=exponent, growth=0)
    counts = sorted(Counter(open_words(messages_of(text_of(feed)))).values(), reverse=True)
    ranks = np.arange(2, 100)
    slope = np.polyfit(np.log(ranks), np.log(np.array(counts)[ranks - 1]), 1)[0]
    assert -slope == pytest.approx(exponent, abs=0.08)


def test_the_vocabulary_keeps_growing_and_stops_when_told_to() -> None:
    def new_words(growth: float) -> list[int]:
        feed = CourierFeed(messages=100_000, growth=growth, first_words=400, zipf_exponent=0.7)
        words = list(open_words(messages_of(text_of(feed))))
        known: set[str] = set()
        sizes = []
        for part in np.array_split(np.array(words), 4):
            before = len(known)
            known.update(part.tolist())
            sizes.append(len(known) - before)
        return sizes

    sizes = new_words(0.6)
    known = CourierFeed(messages=100_000, growth=0.6, first_words=400).words_known(99_999)
    assert min(sizes) > 500 and 0.6 * known < sum(sizes) <= known
    assert new_words(0)[1:] == [0, 0, 0]


def test_words_are_distinct_and_apart_from_the_lexicon() -> None:
    listed = [word for unit in lexicon().units for word in unit.split()]
    made = streets(0, 40_000) + codes(0, 40_000) + shops(0, 40_000)
    folded = {word.casefold() for word in made}
    assert len(folded) == len(made) and not folded & {word.casefold() for word in listed}
    assert all(WORDS.fullmatch(word) for word in made)
    assert streets(260_000, 270_000) == [streets(r, r + 1)[0] for r in range(260_000, 270_000)]


def test_invented_names_end_in_no_ending_of_real_ones() -> None:
    endings = ("ton", "ham", "wick", "ford", "burg", "ville", "stadt", "field", "mouth", "son", "ley")
    named = [name for name in streets(0, 30_000) if name.endswith(endings)]
    assert named == []


def test_the_language_keeps_the_rules_the_writer_relies_on() -> None:
    known = {*CLASSES, *OPEN_CLASSES}
    for line, _ in PHRASES:
        assert line.split()[0] not in OPEN_CLASSES
        assert all(word in known or not word.isupper() for word in line.split())
    assert sum(weight for _, weight in JOINS) == sum(weight for _, weight in ENDS) == 256
    leaning = {*TOWARDS_YES, *TOWARDS_NO}
    assert len(leaning) == len(TOWARDS_YES) + len(TOWARDS_NO)
    held = [len(leaning & set(unit.split())) for unit in lexicon().units]
    assert max(held) == 1
    assert leaning <= {word for unit in lexicon().units for word in unit.split()}


@settings(max_examples=15, deadline=None)
@given(
    seed=st.integers(0, 2**63 - 1),
    messages=st.integers(1, 300),
    words_per_note=st.floats(6, 80),
    base_rate=st.floats(0.001, 0.999),
    effect=st.floats(0, 8),
    planted_words=st.integers(0, 600),
    messages_per_day=st.integers(1, 10**9),
)
def test_any_allowed_settings_give_lines_that_parse(**chosen: Any) -> None:
    feed = CourierFeed(**chosen)
    messages = messages_of(text_of(feed))
    assert len(messages) == feed.messages and all(list(m) == KEYS for m in messages)


# Arithmetic and draws


@given(st.floats(-700, 700))
def test_exp_and_sigmoid_agree_with_the_mathematical_library(x: float) -> None:
    assert exp(np.array([x]))[0] == pytest.approx(math.exp(x), rel=1e-13)
    assert sigmoid(np.array([x]))[0] == pytest.approx(1 / (1 + math.exp(-x)), rel=1e-13)


@given(st.floats(1, 1e9), st.floats(-2, 1))
def test_log_and_power_agree_with_the_mathematical_library(x: float, exponent: float) -> None:
    assert log(np.array([x]))[0] == pytest.approx(math.log(x), rel=1e-14, abs=1e-15)
    assert power(np.array([x]), exponent)[0] == pytest.approx(x**exponent, rel=1e-12)


def test_zipf_ranks_have_their_probabilities() -> None:
    law = ZipfLaw(1.1, 5_000)
    ranks = law.ranks((np.arange(2_000_000) + 0.5) / 2_000_000, 1_000)
    expected = np.arange(1, 1_001) ** -1.1
    expected /= expected.sum()
    share = np.bincount(ranks, minlength=1_000) / len(ranks)
    assert len(share) == 1_000 and share[:50] == pytest.approx(expected[:50], rel=0.01)
    assert share == pytest.approx(expected, abs=2e-5)


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("messages", 0),
        ("base_rate", 0.0),
        ("base_rate", float("nan")),
        ("label_noise", 0.6),
        ("words_per_note", 1),
        ("zipf_exponent", 3.0),
        ("seed", -1),
        ("seed", 1.5),
        ("planted_words", True),
    ],
)
def test_a_setting_that_is_not_allowed_is_named(name: str, value: Any) -> None:
    with pytest.raises(ValueError, match=rf"^{name} is {value}"):
        CourierFeed(**{name: value})


def test_a_vocabulary_beyond_memory_is_refused() -> None:
    with pytest.raises(ValueError, match="lower growth, first_words or messages"):
        CourierFeed(messages=10**9, growth=1.0, messages_per_day=10**6)
    with pytest.raises(ValueError, match="raise messages_per_day"):
        CourierFeed(messages=10**6, messages_per_day=1)


# The bench log


def test_bench_lines_are_as_the_bench_needs_them(tmp_path: Path) -> None:
    path = tmp_path / "bench.jsonl"
    bench_log(path, 10_000)
    text = path.read_bytes()
    rows = messages_of(text)
    assert len(text) / len(rows) == pytest.approx(470, abs=12)
    assert all(list(row) == ["id", "note", "y"] and row["y"] in (0, 1) for row in rows)
    notes = [row["note"].split(" ") for row in rows]
    assert all(len(note) == 60 for note in notes)
    assert all(re.fullmatch("[a-z]{6,7}", word) for note in notes for word in note)
    counts = sorted(Counter(word for note in notes for word in note).values(), reverse=True)
    assert counts[0] / counts[9] == pytest.approx(10, rel=0.2)
    assert 0.1 < sum(row["y"] for row in rows) / len(rows) < 0.5
    assert len(counts) > 100_000


def test_bench_words_are_distinct() -> None:
    from simulator.bench import MOST_WORDS, _words

    assert len(np.unique(_words(MOST_WORDS).view(np.uint64))) == MOST_WORDS


# The house


def test_the_simulator_imports_numpy_and_itself_only() -> None:
    allowed = {*sys.stdlib_module_names, "numpy", "simulator", "zstandard"}
    for path in Path(simulator.__file__).parent.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            assert {name.split(".")[0] for name in names} <= allowed, path.name


def test_the_public_names_are_there() -> None:
    assert sorted(simulator.__all__) == simulator.__all__
    assert all(hasattr(simulator, name) for name in simulator.__all__)
