"""Which candidate is taken, and what is said of it: against plain arithmetic and the rules themselves."""

import math
from itertools import count

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import settings as options
from hypothesis import strategies as st

from stream.errors import BadData, BadSettings
from stream.runs.tuning.choosing import Candidates, Rule, choose
from stream.runs.tuning.saying import cautions, said
from stream.runs.tuning.trial import Lane

WITHIN = Rule("sparsest_within_one_se")


def candidates_of(losses, nnz, weight=None, sizes=None, lanes=None):
    """`losses`: a row of mean losses a block for each candidate, strongest first."""
    losses = np.array(losses, float).T
    weight = np.full(len(losses), 10.0) if weight is None else np.array(weight, float)
    nnz = np.array(nnz, np.int64)
    sizes = 1000 + 30 * nnz if sizes is None else np.array(sizes, np.int64)
    lanes = lanes or [Lane(0.1, 0.1 * 0.5**i) for i in range(len(nnz))]
    return Candidates(tuple(lanes), losses * weight[:, None], weight, nnz, sizes)


@st.composite
def any_candidates(draw, most_blocks=30):
    """Candidates with a shared hardness of each block, some equal, of any size."""
    blocks, lanes = draw(st.integers(1, most_blocks)), draw(st.integers(1, 9))
    seed = draw(st.integers(0, 10**6))
    rng = np.random.default_rng(seed)
    hard = rng.normal(0.5, 0.1, blocks)
    losses = [
        hard + rng.choice([0.0, 0.001, 0.01]) + rng.normal(0, rng.choice([0, 1e-3]), blocks)
        for _ in range(lanes)
    ]
    nnz = rng.integers(0, draw(st.sampled_from([2, 50, 10**6])), lanes)
    grid = [Lane(rate, 0.1 * 0.5**i) for i in range(lanes) for rate in (0.05, 0.1)]
    return candidates_of(losses, nnz, rng.integers(1, 50, blocks), lanes=grid[:lanes])


@given(any_candidates(), st.data())
def test_the_standard_error_is_that_of_a_ratio_of_sums(candidates, data):
    index = data.draw(st.integers(0, len(candidates.lanes) - 1))
    other = data.draw(st.integers(0, len(candidates.lanes) - 1))
    found = candidates.difference(index, other)
    weights = candidates.weight.tolist()
    d = [row[index] - row[other] for row in candidates.loss.tolist()]
    mean, m = math.fsum(d) / math.fsum(weights), len(d)
    assert found.nats == pytest.approx(mean, abs=1e-12)
    if index == other:
        assert (found.nats, found.error) == (0.0, 0.0)
    elif m == 1:
        assert found.error is None
    else:
        squares = math.fsum((x - mean * w) ** 2 for x, w in zip(d, weights, strict=True))
        expected = math.sqrt(m / (m - 1) * squares) / math.fsum(weights)
        assert found.error == pytest.approx(expected, rel=1e-6, abs=1e-12)


def test_the_standard_error_covers_the_true_difference_about_as_often_as_it_should():
    """Blocks of changing weight and hardness, a true difference of 0.002: some 68 % of intervals hold it."""
    rng = np.random.default_rng(7)
    covered = 0
    for _ in range(2000):
        weight = rng.integers(50, 150, 24)
        hard = rng.normal(0.5, 0.1, 24)
        other = hard + 0.002 + rng.normal(0, 0.01, 24)
        candidates = candidates_of([hard, other], [5, 9], weight)
        found = candidates.difference(1, 0)
        covered += abs(found.nats - 0.002) <= found.error
    assert 0.63 < covered / 2000 < 0.71


def test_pairing_tells_apart_what_blocks_of_changing_hardness_hide():
    hard = np.linspace(0.2, 0.9, 24)
    candidates = candidates_of([hard, hard + 0.003 + 0.0001 * np.sin(np.arange(24))], [50, 9])
    found = candidates.difference(1, 0)
    assert found.error < 0.0001 < np.std(hard) / np.sqrt(24)


@given(any_candidates())
def test_the_lowest_loss_is_chosen_and_its_runner_up_is_next(candidates):
    choice = choose(candidates, Rule())
    log_loss = candidates.log_loss
    assert log_loss[choice.index] == log_loss.min() and choice.index == choice.best
    assert (choice.given_up.nats, choice.given_up.error) == (0.0, 0.0)
    others = np.delete(log_loss, choice.index)
    if choice.runner_up is None:
        assert len(others) == 0
    else:
        assert choice.runner_up != choice.index and log_loss[choice.runner_up] == others.min()


@given(any_candidates())
def test_within_one_standard_error_nothing_denser_than_the_best_is_taken(candidates):
    choice = choose(candidates, WITHIN)
    nnz, log_loss = candidates.nnz, candidates.log_loss
    assert nnz[choice.index] <= nnz[choice.best]
    assert log_loss[choice.best] == log_loss.min()
    for i in range(len(nnz)):
        gap = candidates.difference(i, choice.best)
        if gap.error is not None and gap.nats <= gap.error:
            assert nnz[i] >= nnz[choice.index], "a sparser one qualifies"
    if choice.index != choice.best:
        assert choice.given_up.nats <= choice.given_up.error
    nothing = "No sparser candidate qualifies" in said(candidates, choice)[0]
    assert nothing == (choice.index == choice.best)


@given(any_candidates(), st.sampled_from(["max_weights", "max_bytes"]), st.integers(0, 3000))
def test_budgets_are_kept_by_the_best_that_keeps_them_or_the_smallest_is_named(candidates, pick, limit):
    sizes = candidates.nnz if pick == "max_weights" else candidates.size
    fits = sizes <= limit
    if not fits.any():
        with pytest.raises(BadSettings, match=f"the smallest has {sizes.min():,} "):
            choose(candidates, Rule(pick, limit))
        return
    choice = choose(candidates, Rule(pick, limit))
    assert sizes[choice.index] <= limit
    assert candidates.log_loss[choice.index] == candidates.log_loss[fits].min()
    assert choice.runner_up is None or sizes[choice.runner_up] <= limit
    assert choice.qualified == fits.sum()


@given(any_candidates(), st.sampled_from([Rule(), WITHIN, Rule("max_weights", 10**7)]))
def test_halving_names_the_best_with_half_the_weights(candidates, rule):
    choice = choose(candidates, rule)
    half = candidates.nnz[choice.index] / 2
    small = [i for i in range(len(candidates.nnz)) if candidates.nnz[i] <= half and i != choice.index]
    if half and small:
        assert candidates.nnz[choice.halved] <= half
        assert candidates.log_loss[choice.halved] == candidates.log_loss[small].min()
        expected = candidates.log_loss[choice.halved] - candidates.log_loss[choice.index]
        assert choice.halved_costs.nats == pytest.approx(expected, abs=1e-12)
    elif half:
        assert choice.halved is None
        assert "No candidate has half as many weights or fewer." in said(candidates, choice)


@given(any_candidates(), st.sampled_from([Rule(), WITHIN]), st.randoms(use_true_random=False))
@options(max_examples=50)
def test_the_order_in_which_candidates_stand_changes_nothing(candidates, rule, random):
    order = list(range(len(candidates.lanes)))
    random.shuffle(order)
    shuffled = Candidates(
        tuple(candidates.lanes[i] for i in order),
        candidates.loss[:, order],
        candidates.weight,
        candidates.nnz[order],
        candidates.size[order],
    )
    one, other = choose(candidates, rule), choose(shuffled, rule)
    assert candidates.lanes[one.index] == shuffled.lanes[other.index]
    assert said(candidates, one) == said(shuffled, other)


def test_ties_go_to_fewer_weights_then_to_the_stronger_penalty_then_to_smaller_steps():
    same = [0.5] * 24
    lanes = [Lane(0.1, 0.1), Lane(0.1, 0.2), Lane(0.1, 0.3), Lane(0.05, 0.3)]
    fewer = candidates_of([same] * 4, [9, 8, 9, 9], lanes=lanes)
    assert choose(fewer, Rule()).index == 1
    stronger = candidates_of([same] * 4, [8, 8, 9, 9], lanes=lanes)
    assert choose(stronger, Rule()).index == 1
    slower = candidates_of([same] * 4, [8, 8, 8, 8], lanes=lanes)
    assert choose(slower, Rule()).index == 3


def test_a_loss_that_is_no_number_is_never_chosen():
    good, bad = [0.5] * 24, [math.inf] * 24
    candidates = candidates_of([bad, good, [0.6] * 24], [1, 50, 20])
    assert choose(candidates, Rule()).index == 1
    assert choose(candidates, WITHIN).index == 1
    assert choose(candidates, Rule("max_weights", 30)).index == 2
    assert choose(candidates, Rule()).halved == 2
    with pytest.raises(BadSettings, match="limit of 1 on non-zero weights: the smallest has 20 "):
        choose(candidates, Rule("max_weights", 1))
    with pytest.raises(BadData, match="no candidate has a log loss that is a number"):
        choose(candidates_of([bad, bad], [1, 2]), Rule())


def test_a_single_block_gives_no_error_and_so_nothing_sparser():
    candidates = candidates_of([[0.5001], [0.5]], [1, 9])
    assert choose(candidates, WITHIN).index == 1
    assert "+0.00010 nats" in " ".join(said(candidates, choose(candidates, Rule())))
    assert "only 1 time block " in cautions(candidates, choose(candidates, Rule()))[0]


def test_what_is_said_names_rule_choice_price_and_runner_up():
    wave = np.tile([1.0, -1.0], 12)  # an error of its height / sqrt(23)
    best = np.full(24, 0.4)
    losses = [best + 0.1, best + 0.0002 + 0.002 * wave, best + 0.0001 - 0.001 * wave, best]
    candidates = candidates_of(losses, [2, 400, 700, 1000])
    choice = choose(candidates, WITHIN)
    assert (choice.index, choice.best, choice.runner_up) == (1, 3, 2)
    assert said(candidates, choice) == [
        "Rule: the fewest weights within one standard error of the lowest log loss of 4 candidates.",
        "Chosen: l1_per_example 0.05 at learning rate 0.1, with 400 non-zero weights and a log loss of "
        "0.4002 over the last part of the log.",
        "Against the lowest log loss (l1_per_example 0.0125 at learning rate 0.1, 1,000 non-zero weights) it "
        "has 600 fewer weights and loses +0.00020 ± 0.00042 nats a message.",
        "Runner-up: l1_per_example 0.025 at learning rate 0.1, with 300 more weights; it would change the "
        "log loss by −0.00010 ± 0.00063 nats a message.",
        "± is one standard error of the difference, from 24 time blocks in which both met the same messages.",
    ]


def test_a_best_at_an_end_of_the_grid_is_pointed_out():
    lanes = [Lane(rate, strength) for rate in (0.1, 0.3) for strength in (0.1, 0.01, 0.001)]

    def at(index, nnz=9):
        losses = [[0.5 + 0.1 * (i != index)] * 24 for i in range(6)]
        candidates = candidates_of(losses, [nnz] * 6, lanes=lanes)
        return " ".join(cautions(candidates, choose(candidates, Rule())))

    assert "weakest strength that was tried (0.001): weaker" in at(2)
    assert "strongest strength that was tried (0.1): stronger" in at(0)
    assert "smallest learning rate that was tried (0.1): smaller" in at(1)
    assert "largest learning rate that was tried (0.3): larger" in at(4)
    assert "a model without any weight" in at(3, nnz=0)


@given(st.integers(2, 40))
def test_few_blocks_are_pointed_out(blocks):
    counter = count()
    candidates = candidates_of([[0.5 + 1e-4 * next(counter) for _ in range(blocks)]], [3])
    assume(candidates.log_loss[0] > 0)
    lines = cautions(candidates, choose(candidates, Rule()))
    assert bool(lines) == (blocks < 20)
