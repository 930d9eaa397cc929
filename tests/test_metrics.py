"""Progressive metrics: against scikit-learn, by hand, whatever the batch cuts, within the AUC's own bound."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Iterator
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.metrics import log_loss, roc_auc_score

from stream.errors import BadSettings, BedloadError
from stream.metrics import auc_kernel
from stream.metrics.progress import Progress
from stream.metrics.slices import MAX_SLICES, Slices

Floats = npt.NDArray[np.float64]
Stream = tuple[npt.NDArray[Any], ...]
ROUNDING = 1e-12


def scored(n: int, seed: int, *, rate: float = 0.3, unlabelled: float = 0.1, decimals: int = 9) -> Stream:
    """Margins that know something about the label, labels with gaps, and weights of which some are 0."""
    rng = np.random.default_rng(seed)
    labels = (rng.random(n) < rate).astype(np.int8)
    margins = np.round(rng.normal(1.5 * labels - 2.0, 1.2), decimals)
    labels[rng.random(n) < unlabelled] = -1
    return margins, labels, rng.choice([0.0, 0.5, 1.0, 3.25], n)


def feed(
    progress: Progress, stream: Stream, cuts: list[int], codes: npt.NDArray[np.int64] | None = None
) -> None:
    """The stream in batches that end at `cuts` and at window ends."""
    margins, labels, weights = stream
    start = 0
    for cut in [*sorted(cuts), len(margins)]:
        while start < cut:
            end = min(cut, start + progress.window_left)
            part = slice(start, end)
            progress.observe(
                margins[part], labels[part], weights[part], None if codes is None else codes[part]
            )
            if progress.window_left == 0:
                progress.close_window(int, 0)
            start = end


def same_bytes(a: dict[str, Any], b: dict[str, Any]) -> bool:
    return list(a) == list(b) and all(
        a[name].dtype == b[name].dtype
        and a[name].shape == b[name].shape
        and a[name].tobytes() == b[name].tobytes()
        for name in a
    )


# ---- values -------------------------------------------------------------------------------------


@pytest.mark.parametrize("decimals", [9, 1])
def test_log_loss_and_auc_agree_with_scikit_learn_under_example_weights(decimals: int) -> None:
    stream = scored(20_000, 1, decimals=decimals)
    progress = Progress(7_000)
    feed(progress, stream, [])
    summary = progress.summary()
    margins, labels, weights = (part[stream[1] >= 0] for part in stream)
    assert summary.log_loss == pytest.approx(
        log_loss(labels, 1 / (1 + np.exp(-margins)), sample_weight=weights), rel=1e-12
    )
    truth = roc_auc_score(labels, margins, sample_weight=weights)
    assert summary.auc == pytest.approx(truth, abs=ROUNDING)  # below the buffer's size nothing is merged
    assert summary.auc_error_untied == pytest.approx(0, abs=ROUNDING)
    base_rate = np.average(labels, weights=weights)
    assert summary.base_rate == pytest.approx(base_rate, rel=1e-12)
    entropy = log_loss(labels, np.full(len(labels), base_rate), sample_weight=weights)
    assert summary.normalised_entropy == pytest.approx(summary.log_loss / entropy, rel=1e-12)


def test_calibration_figures_match_a_count_by_hand() -> None:
    """Four messages at p = 1/2 of which three are yes, four at p = 1/5 (margin -ln 4) of which none is."""
    progress = Progress(100)
    margins = np.array([0.0] * 4 + [-math.log(4)] * 4)
    progress.observe(margins, np.array([1, 1, 1, 0, 0, 0, 0, 0], np.int8), np.ones(8))
    summary = progress.summary()
    assert summary.calibration_ratio == pytest.approx((4 * 0.5 + 4 * 0.2) / 3)
    assert summary.expected_calibration_error == pytest.approx(0.5 * 0.25 + 0.5 * 0.2)
    assert summary.base_rate == 3 / 8
    assert summary.auc == pytest.approx((3 * 4 + 3 * 0.5) / 15)  # 12 pairs won, 3 tied
    assert summary.auc_error == pytest.approx(0.5 * 3 / 15)
    assert summary.auc_error_untied == 0


def test_a_constant_right_guess_has_normalised_entropy_one_and_no_calibration_error() -> None:
    progress = Progress(1_000)
    labels = np.array([1, 0, 0, 0] * 250, np.int8)
    progress.observe(np.full(1_000, -math.log(3)), labels, np.ones(1_000))
    summary = progress.summary()
    assert summary.normalised_entropy == pytest.approx(1, rel=1e-12)
    assert summary.expected_calibration_error == pytest.approx(0, abs=1e-12)
    assert (summary.auc, summary.auc_error, summary.auc_error_untied) == (0.5, 0.5, 0)


def test_certain_and_wrong_costs_what_it_costs() -> None:
    """No probability is clipped: the loss of a yes at margin -800 is 800."""
    progress = Progress(10)
    progress.observe(np.array([-800.0, 1e300, -0.0]), np.array([1, 1, 0], np.int8), np.ones(3))
    assert progress.summary().log_loss == pytest.approx((800 + math.log(2)) / 3)


def test_every_sum_matches_a_plain_loop() -> None:
    stream = scored(3_000, 2)
    progress = Progress(5_000, sliced=True)
    margins, labels, weights = stream
    progress.observe(margins, labels, weights, np.arange(3_000) % 3)
    slices = dict(progress.slice_summaries())
    assert list(slices) == ["(other)"]  # codes 1 and 2 were never named
    for summary, rows in ((progress.summary(), range(3_000)), (slices["(other)"], range(0, 3_000, 3))):
        loss = weight = positive = predicted = 0.0
        bins: dict[int, list[float]] = {}
        for margin, label, w in ((float(s[i]) for s in stream) for i in rows):
            if label < 0:
                continue
            p = 1 / (1 + math.exp(-margin))
            loss += w * (-math.log(p) if label == 1 else -math.log1p(-p))
            weight, positive, predicted = weight + w, positive + w * label, predicted + w * p
            cell = bins.setdefault(math.floor(margin * 2), [0.0, 0.0])
            cell[0] += w * label
            cell[1] += w * p
        assert summary.log_loss == pytest.approx(loss / weight, rel=1e-12)
        assert summary.calibration_ratio == pytest.approx(predicted / positive, rel=1e-12)
        gaps = sum(abs(y - p) for y, p in bins.values())
        assert summary.expected_calibration_error == pytest.approx(gaps / weight, rel=1e-9)
        assert summary.messages == len(rows)
        assert summary.labelled == sum(stream[1][i] >= 0 for i in rows)
        assert summary.positives == sum(stream[1][i] == 1 for i in rows)


# ---- undefined ----------------------------------------------------------------------------------


def test_metrics_without_ground_are_none_and_null() -> None:
    progress = Progress(100)
    nothing = progress.summary()
    assert {name for name, value in nothing.to_json().items() if value is None} == {
        "log_loss", "normalised_entropy", "auc", "auc_error", "auc_error_untied", "calibration_ratio",
        "expected_calibration_error", "base_rate",
    }  # fmt: skip
    progress.observe(np.zeros(2), np.array([-1, -1], np.int8), np.ones(2), rejected=3)
    assert (progress.summary().messages, progress.summary().rejected, progress.summary().labelled) == (
        5,
        3,
        0,
    )
    assert progress.summary().log_loss is None
    progress.observe(np.zeros(2), np.zeros(2, np.int8), np.ones(2))  # only noes
    only_no = progress.summary()
    assert (only_no.base_rate, only_no.auc, only_no.normalised_entropy, only_no.calibration_ratio) == (
        0,
        None,
        None,
        None,
    )
    assert only_no.expected_calibration_error == 0.5
    progress.observe(np.ones(1), np.ones(1, np.int8), np.zeros(1))  # a yes of weight 0 changes counts only
    assert progress.summary().positives == 1
    assert progress.summary().auc is None
    assert json.loads(json.dumps(progress.close_window(lambda: 7, 9).to_json()))["auc"] is None


def test_only_yes_leaves_auc_and_entropy_undefined_but_calibration_known() -> None:
    progress = Progress(100)
    progress.observe(np.zeros(2), np.ones(2, np.int8), np.ones(2))
    summary = progress.summary()
    assert (summary.auc, summary.normalised_entropy, summary.calibration_ratio) == (None, None, 0.5)


def test_a_message_of_weight_zero_is_counted_and_takes_no_room() -> None:
    states = []
    for weight in ([1.0, 2.0], [1.0, 0.0, 2.0, 0.0]):
        progress = Progress(100, sliced=True)
        m, named = len(weight), progress.slices.codes(["a"] * len(weight))
        progress.observe(np.ones(m), np.ones(m, np.int8), np.array(weight), named)
        states.append(progress.state())
    assert states[1]["counts"].sum() > states[0]["counts"].sum()
    for state in states:
        del state["counts"]
    assert same_bytes(*states)


# ---- windows, slices, cuts, restoring -----------------------------------------------------------


def test_a_window_holds_its_own_messages_only_and_the_run_all_of_them() -> None:
    margins, labels, weights = scored(1_000, 3)
    progress = Progress(600)
    rows = []
    for part in (slice(0, 600), slice(600, 1_000)):
        progress.observe(margins[part], labels[part], weights[part])
        rows.append(progress.close_window(lambda part=part: part.stop, part.stop + 1))
    assert [row.through for row in rows] == [600, 1_000]
    assert (rows[1].to_json()["nnz"], rows[1].to_json()["live"]) == (1_000, 1_001)
    known = labels[600:] >= 0
    truth = roc_auc_score(labels[600:][known], margins[600:][known], sample_weight=weights[600:][known])
    assert rows[1].summary.auc == pytest.approx(truth, abs=ROUNDING)
    assert sum(row.summary.labelled for row in rows) == progress.summary().labelled
    assert progress.window_summary().messages == 0


def test_a_batch_across_a_window_end_is_refused() -> None:
    progress = Progress(10)
    progress.observe(np.zeros(4), np.zeros(4, np.int8), np.ones(4), rejected=3)
    with pytest.raises(BedloadError, match=r"3 of 10 left"):
        progress.observe(np.zeros(3), np.zeros(3, np.int8), np.ones(3), rejected=1)
    assert (progress.messages, progress.window_left) == (7, 3)


def test_slice_codes_must_come_exactly_when_slices_were_asked_for() -> None:
    with pytest.raises(BedloadError, match="slice codes"):
        Progress(10, sliced=True).observe(np.zeros(1), np.zeros(1, np.int8), np.ones(1))
    with pytest.raises(BedloadError, match="slice codes"):
        Progress(10).observe(np.zeros(1), np.zeros(1, np.int8), np.ones(1), np.zeros(1, np.int64))


def test_slices_are_named_first_come_first_served_and_the_rest_is_other() -> None:
    slices = Slices()
    assert slices.codes(["north", None, True, 1, "north", "1"]).tolist() == [1, 2, 3, 4, 1, 4]
    assert slices.names == ["north", "(none)", "true", "1"]
    codes = slices.codes([f"stop {i}" for i in range(100)])
    assert codes.tolist() == [*range(5, MAX_SLICES + 1)] + [0] * 40
    assert slices.codes(["north", "stop 99"]).tolist() == [1, 0]
    assert Slices().codes(["x" * 100 + "a", "x" * 100 + "b"]).tolist() == [1, 1]  # bounded names


def test_a_slice_has_the_metrics_of_its_messages() -> None:
    stream = scored(30_000, 4)
    progress = Progress(10_000, sliced=True)
    values = [f"r{i % 70}" for i in range(30_000)]
    feed(progress, stream, [], progress.slices.codes(values))
    rows = progress.slice_summaries()
    assert len(rows) == MAX_SLICES + 1
    assert rows[-1][0] == "(other)"
    assert sum(summary.messages for _, summary in rows) == 30_000
    for name, summary in rows:
        mine = np.array([v == name if name != "(other)" else int(v[1:]) >= 64 for v in values]) & (
            stream[1] >= 0
        )
        margins, labels, weights = (part[mine] for part in stream)
        truth = roc_auc_score(labels, margins, sample_weight=weights)
        assert summary.auc is not None and summary.auc_error is not None
        assert abs(summary.auc - truth) <= summary.auc_error + ROUNDING
        assert summary.log_loss == pytest.approx(
            log_loss(labels, 1 / (1 + np.exp(-margins)), sample_weight=weights), rel=1e-12
        )


@settings(max_examples=40, deadline=None)
@given(st.lists(st.integers(0, 6_000), max_size=12), st.integers(0, 6_000), st.integers(700, 9_000))
def test_batch_cuts_and_a_restart_change_no_byte(cuts: list[int], restart: int, window: int) -> None:
    stream = scored(6_000, 5, decimals=2)
    routes = [f"route {i * i % 80}" for i in range(6_000)]
    straight = Progress(window, sliced=True)
    feed(straight, stream, [], straight.slices.codes(routes))
    first = Progress(window, sliced=True)
    codes = first.slices.codes(routes[:restart])
    feed(first, tuple(s[:restart] for s in stream), [c for c in cuts if c < restart], codes)
    second = Progress(window, sliced=True)
    second.restore(first.state())
    assert same_bytes(second.state(), first.state())
    codes = second.slices.codes(routes[restart:])
    feed(second, tuple(s[restart:] for s in stream), [c - restart for c in cuts if c > restart], codes)
    assert same_bytes(second.state(), straight.state())
    assert second.summary() == straight.summary()
    assert second.slice_summaries() == straight.slice_summaries()


def test_batch_cuts_and_a_restart_change_no_byte_once_scores_are_merged() -> None:
    stream = scored(300_000, 6)
    straight, first, second = (Progress(140_000) for _ in range(3))
    feed(straight, stream, [])
    feed(first, tuple(s[:137_777] for s in stream), [*range(0, 137_777, 1_009)])
    second.restore(first.state())
    feed(second, tuple(s[137_777:] for s in stream), [5, 131_072])
    assert len(straight.state()["auc_items"]) > 0
    assert same_bytes(second.state(), straight.state())


def test_the_state_of_a_known_stream_has_known_bytes() -> None:
    """A change here changes the checkpoint format. Margins are exact: no generator of floats is involved."""
    k = np.arange(200_000, dtype=np.int64)
    mixed = (k * 2_654_435_761) % 1_048_573
    margins = mixed / 131_072.0 - 6.0
    labels = ((mixed * 31) % 97 < 20).astype(np.int8)
    progress = Progress(60_000, sliced=True)
    feed(
        progress,
        (margins, labels, 1.0 + (k % 3)),
        [],
        progress.slices.codes([f"é{i % 5}" for i in range(200_000)]),
    )
    digest = hashlib.sha256()
    for name, array in progress.state().items():
        digest.update(f"{name} {array.dtype} {array.shape}".encode() + array.tobytes())
    assert digest.hexdigest()[:16] == "bc9316d1ef71d1e3"


def test_a_checkpoint_of_other_windows_or_slices_is_refused_with_the_difference() -> None:
    state = Progress(10).state()
    with pytest.raises(BadSettings, match=r"window is 20 .* window 10"):
        Progress(20).restore(state)
    with pytest.raises(BadSettings, match=r"slice_by is set.* slice_by not set"):
        Progress(10, sliced=True).restore(state)


def test_a_small_run_leaves_a_small_state() -> None:
    progress = Progress(100, sliced=True)
    progress.observe(np.zeros(10), np.zeros(10, np.int8), np.ones(10), progress.slices.codes(["a"] * 10))
    assert sum(array.nbytes for array in progress.state().values()) < 10_000


# ---- the AUC summary ----------------------------------------------------------------------------


def summarised(margins: Floats, signed: Floats, points: int, items: int) -> tuple[Floats, Floats]:
    """Points and items in use after one summary of that size took everything."""
    arrays = np.zeros((1, points, 2)), np.zeros(1, np.int64), np.zeros((1, items, 4)), np.zeros(1, np.int64)
    auc_kernel.append_all(*arrays, 0, np.stack([margins, signed], axis=1))
    return arrays[0][0, : arrays[1][0]], arrays[2][0, : arrays[3][0]]


scores = st.one_of(
    st.integers(-5, 5).map(float),
    st.floats(-3, 3),
    st.floats(-1e300, 1e300),
    st.sampled_from([0.0, -0.0, 5e-324, -5e-324]),
)


@settings(max_examples=300, deadline=None)
@given(
    st.lists(st.tuples(scores, st.booleans(), st.integers(1, 4)), min_size=1, max_size=120),
    st.sampled_from([12, 30]),
)
def test_even_a_tiny_summary_bounds_the_true_auc_and_loses_no_weight(
    examples: list[tuple[float, bool, int]], capacity: int
) -> None:
    margins = np.array([margin for margin, _, _ in examples])
    signed = np.array([float(w) if yes else -float(w) for _, yes, w in examples])
    points, items = summarised(margins, signed, 8, capacity)
    assert len(items) <= capacity
    assert np.all(items[:, 0] <= items[:, 1])
    entries = auc_kernel.joined(auc_kernel.sorted_points(points), items)
    assert entries[:, 2].sum() == signed[signed > 0].sum()
    assert entries[:, 3].sum() == -signed[signed < 0].sum()
    won, undecided, tied, pairs = auc_kernel.compare_pairs(entries)
    above = margins[signed > 0][:, None] - margins[signed < 0][None, :]
    product = np.abs(signed[signed > 0][:, None] * signed[signed < 0][None, :])
    assert pairs == product.sum()
    truth = (product * (above > 0)).sum() + 0.5 * (product * (above == 0)).sum()
    assert won + 0.5 * tied <= truth <= won + undecided - 0.5 * tied


@settings(max_examples=100, deadline=None)
@given(
    st.lists(
        st.tuples(st.integers(-8, 8), st.integers(0, 5), st.integers(0, 3), st.integers(0, 3)), max_size=25
    )
)
def test_pairs_of_intervals_are_compared_as_by_a_double_loop(rows: list[tuple[int, int, int, int]]) -> None:
    items = np.array([[lo, lo + width, yes, no] for lo, width, yes, no in rows], float).reshape(-1, 4)
    entries = auc_kernel.joined(np.empty((0, 4)), items)
    won = undecided = tied = 0.0
    for lo, hi, yes, _ in items.tolist():
        for other_lo, other_hi, _, no in items.tolist():
            won += yes * no * (lo > other_hi)
            undecided += yes * no * (lo <= other_hi and other_lo <= hi)
            tied += yes * no * (lo == hi == other_lo == other_hi)
    assert auc_kernel.compare_pairs(entries) == (won, undecided, tied, items[:, 2].sum() * items[:, 3].sum())


@settings(max_examples=100, deadline=None)
@given(st.lists(st.floats(allow_nan=False, allow_infinity=False).map(lambda x: x + 0.0), max_size=300))
def test_scores_are_sorted_as_by_numpy(values: list[float]) -> None:
    array = np.array(values, float)
    assert auc_kernel.ascending(array).tolist() == np.argsort(array, kind="stable").tolist()


def nasty_streams(n: int) -> Iterator[tuple[str, Floats, npt.NDArray[np.int8]]]:
    """Scores whose place, width or density moves while they come."""
    rng = np.random.default_rng(7)
    through = np.arange(n) / n
    common = (rng.random(n) < 0.3).astype(np.int8)
    rare = (rng.random(n) < 0.001).astype(np.int8)
    yield "drifting", rng.normal(common + 10 * through, 1), common
    yield "shrinking", rng.laplace(size=n) * np.exp(-12 * through) + 1e-4 * common, common
    yield "growing", rng.laplace(size=n) * np.exp(12 * through - 12) + 1e-4 * common, common
    intercept = -7 + np.cumsum(rng.normal(size=n)) * 1e-4
    near = intercept + 0.01 * rng.random(n) * (1 + 0.2 * rare)
    yield (
        "near a wandering intercept, base rate 0.1 %",
        np.where(rng.random(n) < 0.9, near, intercept + rng.normal(2.0 * rare, 2)),
        rare,
    )
    rising = -7 + 0.05 * through
    near = rising + 0.01 * rng.standard_exponential(n) * (1 + 0.2 * rare)
    yield (
        "near a rising intercept, base rate 0.1 %",
        np.where(rng.random(n) < 0.99, near, rising + rng.normal(2.0 * rare, 2)),
        rare,
    )


def test_auc_of_two_million_nasty_scores_is_within_its_bound_and_the_bound_within_1e_4() -> None:
    n = 2_000_000
    for name, margins, labels in nasty_streams(n):
        progress = Progress(n // 2 + 1)
        feed(progress, (margins, labels, np.ones(n)), [])
        summary = progress.summary()
        assert summary.auc is not None and summary.auc_error is not None, name
        assert summary.auc_error <= 1e-4, name
        assert abs(summary.auc - roc_auc_score(labels, margins)) <= summary.auc_error + ROUNDING, name


@pytest.mark.parametrize("window", [500, 100_000])
def test_closing_windows_keeps_the_auc_of_the_run_within_its_bound(window: int) -> None:
    _, margins, labels = next(nasty_streams(500_000))
    progress = Progress(window)
    feed(progress, (margins, labels, np.ones(500_000)), [])
    summary = progress.summary()
    assert summary.auc is not None and summary.auc_error is not None
    assert 0 < summary.auc_error <= 1e-4
    assert abs(summary.auc - roc_auc_score(labels, margins)) <= summary.auc_error + ROUNDING


def test_tied_scores_are_told_apart_from_what_merging_costs() -> None:
    rng = np.random.default_rng(8)
    n = 400_000
    labels = (rng.random(n) < 0.2).astype(np.int8)
    margins = np.where(rng.random(n) < 0.5, -1.5, rng.normal(labels - 2.0, 1))
    progress = Progress(n)
    feed(progress, (margins, labels, np.ones(n)), [])
    summary = progress.summary()
    assert summary.auc is not None and summary.auc_error is not None and summary.auc_error_untied is not None
    assert summary.auc_error > 0.1
    assert summary.auc_error_untied <= 1e-4
    assert abs(summary.auc - roc_auc_score(labels, margins)) <= summary.auc_error_untied + ROUNDING


def test_scores_on_every_scale_at_once_still_fit_the_summary() -> None:
    """Densities on hundreds of scales ask for too many graded cells: that rule gives way, not the bound."""
    rng = np.random.default_rng(9)
    n = 60_000
    margins = rng.choice([-1.0, 1.0], n) * np.exp(rng.uniform(-600, 600, n))
    signed = rng.choice([-1.0, 1.0], n)
    points, items = summarised(margins, signed, 4_096, 300)
    assert len(items) <= 300
    won, undecided, _, pairs = auc_kernel.compare_pairs(
        auc_kernel.joined(auc_kernel.sorted_points(points), items)
    )
    truth = roc_auc_score(signed > 0, margins)
    assert won / pairs <= truth <= (won + undecided) / pairs
