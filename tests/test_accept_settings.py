"""Settings changed on a live model: every weight as before, then learning under the new; or a refusal."""

import json
import shutil

import hypothesis
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.arrays_file import read_array_folder
from stream.cli.main import main
from stream.coordinate import FIRST, SECOND
from stream.errors import BadSettings
from stream.learners import Rows, rebuild
from stream.runs.learning import pinned
from stream.runs.replay import replay
from stream.runs.retracing import retrace
from stream.runs.work import work
from stream.settings import Settings
from stream.snapshots import read_snapshot
from tests.learner_rig import SLOTS, Bench, assert_same_weights, random_stream, settings_of, twin_of
from tests.memory_topic import MemoryTopic
from tests.replays import (
    BASIC,
    BOUNDED,
    GRAVITY,
    config_for,
    courier_lines,
    last_checkpoint,
    newest,
    settings_for,
    tree,
    write,
)

HALF, ALL = 6_000, 12_000
STRONGER = {"learner": {"learning_rate": 0.1, "l1_per_example": 2e-4, "l1": 0.5, "l2": 1.0, "damping": 2.0}}

# ---- rows --------------------------------------------------------------------------------------------------


def change(bench, new):
    """The bench as it goes on under other settings."""
    old, state = bench.settings, bench.learner.state()
    rows = Rows(bench.column(FIRST).copy(), bench.column(SECOND).copy(), state["sums"])
    rebuilt = rebuild(rows, old, new)
    changed = bench_of(new)
    changed.cells[:] = bench.cells
    changed.column(FIRST)[:], changed.column(SECOND)[:] = rebuilt.first, rebuilt.second
    changed.learner.restore({**state, "sums": rebuilt.sums})
    return changed


def bench_of(settings):
    bench = Bench(settings)
    bench.settings = settings
    return bench


seeds = st.integers(0, 10**6)
sizes = st.sampled_from([0.0, 1e-9, 0.003, 0.5, 1.0, 40.0, 1e4])
rates = st.sampled_from([1e-3, 0.05, 0.3, 1.0, 20.0])
ftrl_settings = st.builds(
    lambda **keys: settings_of("ftrl", **keys),
    learning_rate=rates,
    damping=rates,
    l1=sizes,
    l2=sizes,
    l1_per_example=sizes,
    horizon=st.sampled_from([None, 1, 10**6]),
)
gravity_settings = st.builds(
    lambda **keys: settings_of("truncated-gradient", **keys), learning_rate=rates, l1_per_example=sizes
)


def bench_in_some_state(seed, settings):
    """Rows of all sizes, zeros, and some just at the strength in force or around it."""
    draw = np.random.default_rng(seed)
    bench = bench_of(settings)
    strength = draw.choice([0.0, 1e-3, 7.0, 1e5]) * draw.random()
    force = settings.l1 + strength
    near = [0.0, force, force and np.nextafter(force, np.inf), 0.3 * force, 1.0001 * force, 2 * force]
    wild = draw.normal(size=SLOTS) * 10.0 ** draw.integers(-6, 7, SLOTS)
    first = np.where(draw.random(SLOTS) < 0.5, wild, draw.choice(near, SLOTS) * draw.choice([-1, 1], SLOTS))
    bench.column(FIRST)[:] = first
    most = 1e6 if settings.method == "ftrl" else strength
    bench.column(SECOND)[:] = draw.random(SLOTS) * draw.choice([0, 1e-6, 1], SLOTS) * most
    sums = np.array([strength, draw.normal() * 1e3, draw.random() * 1e6])
    bench.learner.restore({"sums": sums, "counts": np.array([1000, 0])})
    return bench


@hypothesis.settings(max_examples=60)
@given(seeds, ftrl_settings, ftrl_settings)
def test_ftrl_weights_stay_as_they_are_whatever_changes(seed, old, new):
    bench = bench_in_some_state(seed, old)
    changed = change(bench, new)
    before, after = bench.weights(), changed.weights()
    steps = (new.damping + np.sqrt(changed.column(SECOND))) / new.learning_rate + new.l2
    rounding = 2 * np.spacing(np.abs(changed.column(FIRST)) + new.l1 + changed.learner.strength) / steps
    assert np.all(np.abs(after - before) <= 1e-12 * np.abs(before) + rounding)
    assert np.array_equal(np.sign(after), np.sign(before)), "zeros stay zero, others stay so too"
    assert changed.learner.intercept == pytest.approx(bench.learner.intercept, rel=1e-12)
    assert changed.learner.strength == bench.learner.strength
    assert np.array_equal(changed.column(SECOND), bench.column(SECOND))


@hypothesis.settings(max_examples=60)
@given(seeds, ftrl_settings, ftrl_settings)
def test_zeros_keep_their_share_of_what_a_weight_needs(seed, old, new):
    bench = bench_in_some_state(seed, old)
    changed = change(bench, new)
    zero = bench.weights() == 0
    force = [bench.learner.strength + settings.l1 for settings in (old, new)]
    now = changed.column(FIRST)[zero]
    assert np.all(np.abs(now) <= force[1])
    shares = bench.column(FIRST)[zero] / force[0] if force[0] else np.zeros(zero.sum())
    assert now == pytest.approx(shares * force[1], rel=1e-12)


@hypothesis.settings(max_examples=60)
@given(seeds, gravity_settings, gravity_settings)
def test_truncated_gradient_is_caught_up_at_the_old_rate(seed, old, new):
    bench = bench_in_some_state(seed, old)
    changed = change(bench, new)
    assert np.array_equal(changed.weights(), bench.weights())
    assert changed.learner.intercept == bench.learner.intercept
    assert np.all(changed.column(SECOND) == bench.learner.strength)


def test_what_only_acts_from_now_on_leaves_every_bit():
    old = settings_of("ftrl")
    bench = bench_of(old)
    bench.learn(random_stream(1, 300))
    changed = change(bench, settings_of("ftrl", l1_per_example=0.1, horizon=400))
    assert changed.bits() == bench.bits()


@pytest.mark.parametrize("seed", range(3))
def test_then_ftrl_goes_on_as_the_papers_say_with_the_new_settings(seed):
    """The twin is told the state once and computes the rest by itself, one example at a time."""
    old = settings_of("ftrl", l1=4.0)
    new = settings_of(
        "ftrl", learning_rate=0.8, l1=0.4, l2=0.0, l1_per_example=0.001, horizon=900, damping=2.0
    )
    bench = bench_of(old)
    stream = random_stream(seed, 1500)
    bench.learn(stream[:700])
    changed = change(bench, new)
    assert 0 < np.count_nonzero(changed.weights()) < np.count_nonzero(changed.column(FIRST))
    twin = twin_of(new)
    twin.z, twin.n = dict(enumerate(changed.column(FIRST))), dict(enumerate(changed.column(SECOND)))
    twin.accumulated, twin.constant_z, twin.constant_n = changed.learner.state()["sums"].tolist()
    twin.learned = changed.learner.learned
    expected = [twin.predict_then_update(*example[:3]) for example in stream[700:]]
    assert changed.learn(stream[700:]).tolist() == pytest.approx(expected, rel=1e-9, abs=1e-11)
    assert_same_weights(changed, twin)


def test_another_method_is_refused():
    rows = Rows(np.ones(1), np.ones(1), np.zeros(3))
    with pytest.raises(BadSettings, match=r"learner\.method"):
        rebuild(rows, settings_of("ftrl"), settings_of("truncated-gradient"))


def test_a_sum_beyond_what_is_learned_is_refused():
    rows = Rows(np.array([1e290]), np.ones(1), np.zeros(3))
    with pytest.raises(BadSettings, match=r"raise learner\.learning_rate"):
        rebuild(rows, settings_of("ftrl", l2=0.0), settings_of("ftrl", learning_rate=1e-9, damping=1e9))


# ---- runs --------------------------------------------------------------------------------------------------

VARIANTS = {"plain": {}, "bounded": BOUNDED, "gravity": GRAVITY}
CHANGES = {
    "plain": STRONGER,
    "bounded": {**STRONGER, "state": {"admit_after": 1, "idle_after": None, "max_live": 2_000}},
    "gravity": {"learner": {"learning_rate": 0.01, "l1_per_example": 1e-3}},
}
SENDER_WORDS = {"path": "sender", "kind": "words", "name": "sender words"}


@pytest.fixture(scope="module")
def lines(tmp_path_factory):
    return courier_lines(tmp_path_factory.mktemp("feed") / "log.jsonl")[:ALL]


@pytest.fixture
def feed(lines, tmp_path):
    """A log that grows: `feed(messages, settings, state, **options)` learns the first of them."""

    def learn(messages, settings, state="state", **options):
        write(tmp_path / "log.jsonl", lines[:messages])
        return replay(settings, tmp_path / state, **options)

    return learn


def settings_of_run(tmp_path, name="plain", **sections):
    return settings_for([tmp_path / "log.jsonl"], VARIANTS[name], **sections)


def about_of(folder):
    return json.loads((newest(folder) / "manifest.json").read_text())["about"]


@pytest.mark.parametrize("name", VARIANTS)
def test_where_nothing_new_came_only_the_settings_changed(feed, tmp_path, name):
    old, new = settings_of_run(tmp_path, name), settings_of_run(tmp_path, name, **CHANGES[name])
    before = read_snapshot(feed(HALF, old).snapshot).weights
    with pytest.raises(
        BadSettings, match=r"take them with --accept-settings, or begin again in another state\.folder"
    ):
        feed(HALF, new, resume=True)
    result = feed(HALF, new, resume=True, accept_settings=True)
    after = read_snapshot(result.snapshot).weights
    assert len(after) > 50
    assert after.addresses.tolist() == before.addresses.tolist()
    assert after.names == before.names
    assert after.values == pytest.approx(before.values, rel=1e-6)
    assert any("settings accepted after 6,000 messages" in line for line in result.warnings)
    assert any("learner.learning_rate: " in line for line in result.warnings)
    accepted = about_of(tmp_path / "state")["accepted"]
    assert [entry["messages"] for entry in accepted] == [HALF]
    assert accepted[0]["before"]["pinned"] == pinned(old)
    feed(HALF, new, resume=True)
    again = feed(HALF, new, resume=True, accept_settings=True)
    assert not any("accepted" in line for line in again.warnings)
    assert about_of(tmp_path / "state")["accepted"] == accepted


@pytest.mark.parametrize("name", VARIANTS)
def test_after_a_change_a_run_that_is_stopped_leaves_the_bytes_of_one_that_is_not(feed, tmp_path, name):
    old, new = settings_of_run(tmp_path, name), settings_of_run(tmp_path, name, **CHANGES[name])
    feed(HALF, old)
    shutil.copytree(tmp_path / "state", tmp_path / "parts")
    feed(ALL, new, resume=True, accept_settings=True)
    feed(HALF, new, "parts", resume=True, accept_settings=True)
    feed(7_777, new, "parts", resume=True)
    feed(ALL, new, "parts", resume=True)
    assert last_checkpoint(tmp_path / "parts") == last_checkpoint(tmp_path / "state")
    feed(ALL, old, "other")
    assert last_checkpoint(tmp_path / "other") != last_checkpoint(tmp_path / "state")


def test_several_changes_are_all_told_in_the_checkpoint(feed, tmp_path):
    rates = [0.2, 0.1, 0.05]
    for step, rate in enumerate(rates):
        settings = settings_of_run(tmp_path, learner={"learning_rate": rate})
        feed(2_000 * (step + 1), settings, resume=True, accept_settings=True)
    accepted = about_of(tmp_path / "state")["accepted"]
    assert [entry["messages"] for entry in accepted] == [2_000, 4_000]
    assert [entry["before"]["pinned"]["learner"]["learning_rate"] for entry in accepted] == rates[:2]


def test_an_added_field_and_cross_are_learned_beside_the_old_weights(feed, tmp_path):
    old, new = (
        settings_of_run(tmp_path),
        with_fields(tmp_path, [SENDER_WORDS, *BASIC["fields"]], [["route", "stop"]]),
    )
    before = read_snapshot(feed(HALF, old).snapshot).weights
    assert not any(name.startswith((b"sender words", b"route&stop")) for name in before.names)
    with pytest.raises(BadSettings, match="sender words"):
        feed(ALL, new, resume=True)
    result = feed(HALF, new, resume=True, accept_settings=True)
    assert read_snapshot(result.snapshot).weights.values.tolist() == before.values.tolist()
    after = read_snapshot(feed(ALL, new, resume=True).snapshot).weights
    assert any(name.startswith(b"sender words") for name in after.names)
    assert after.fingerprint == new.fingerprint()


def with_fields(tmp_path, fields, crosses=(), **sections):
    data = settings_of_run(tmp_path, **sections).model_dump(mode="json")
    data["fields"] = fields
    data["crosses"] += [{"paths": paths} for paths in crosses]
    return Settings.model_validate(data)


def other_fields(change):
    fields = [dict(field) for field in BASIC["fields"]]
    return lambda tmp_path: with_fields(tmp_path, change(fields))


REFUSALS = {
    "fields.weight_kg": other_fields(lambda fields: [*fields[:-1], SENDER_WORDS]),
    "fields.note.pairs": other_fields(lambda fields: [{**fields[0], "pairs": True}, *fields[1:]]),
    "fields: order": other_fields(lambda fields: fields[::-1]),
    "crosses": lambda tmp_path: settings_of_run(tmp_path).model_copy(update={"crosses": ()}),
    "space.address_bits": lambda tmp_path: settings_of_run(tmp_path, space={"address_bits": 41}),
    "space.seed": lambda tmp_path: settings_of_run(tmp_path, space={"seed": 1}),
    "space.unit_length": lambda tmp_path: settings_of_run(tmp_path, space={"unit_length": True}),
    "learner.method": lambda tmp_path: settings_of_run(tmp_path, "gravity"),
    "metrics.window": lambda tmp_path: settings_of_run(tmp_path, metrics={"window": 1_000}),
    "metrics.slice_by": lambda tmp_path: settings_of_run(tmp_path, metrics={"slice_by": "stop"}),
}


def test_what_a_model_cannot_live_through_is_refused_with_the_difference(feed, tmp_path):
    feed(2_000, settings_of_run(tmp_path))
    before = tree(tmp_path / "state")
    for key, settings in REFUSALS.items():
        with pytest.raises(BadSettings) as caught:
            feed(2_000, settings(tmp_path), resume=True, accept_settings=True)
        lines = str(caught.value).splitlines()
        assert "cannot be accepted" in lines[0]
        assert [line for line in lines[1:-1] if not line.startswith(f"  {key}")] == []
        assert len(lines) > 2
        assert caught.value.exit_code == 78
    assert tree(tmp_path / "state") == before


def test_the_option_is_named_as_a_cure_only_where_it_is_one(feed, tmp_path):
    feed(2_000, settings_of_run(tmp_path))
    window, both = {"metrics": {"window": 1_000}}, {"metrics": {"window": 1_000}, "learner": {"l2": 0.5}}
    with pytest.raises(BadSettings, match=r"cannot take another metrics\.window, or") as caught:
        feed(2_000, settings_of_run(tmp_path, **window), resume=True)
    assert "--accept-settings" not in str(caught.value)
    with pytest.raises(BadSettings, match=r"set metrics\.window back.* the rest with --accept-settings, or"):
        feed(2_000, settings_of_run(tmp_path, **both), resume=True)


def test_the_admission_filter_is_kept_where_it_fits_and_else_starts_empty(feed, tmp_path):
    feed(2_000, settings_of_run(tmp_path, "bounded"))
    filled = arrays_of(tmp_path)["table.admission"]
    assert filled.any()
    keep = settings_of_run(tmp_path, "bounded", state={"admit_after": 3, "idle_after": 500})
    result = feed(2_000, keep, resume=True, accept_settings=True)
    assert not any("filter" in line for line in result.warnings)
    assert np.array_equal(arrays_of(tmp_path)["table.admission"], filled)
    larger = settings_of_run(tmp_path, "bounded", state={"admission_bytes": 1 << 13})
    result = feed(2_000, larger, resume=True, accept_settings=True)
    assert any("the admission filter starts empty" in line for line in result.warnings)
    assert arrays_of(tmp_path)["table.admission"].tolist() == [0] * (1 << 13)
    off = settings_of_run(tmp_path, "bounded", state={"admit_after": 1})
    feed(2_000, off, resume=True, accept_settings=True)
    assert "table.admission" not in arrays_of(tmp_path)


def test_a_lower_bound_on_memory_is_kept_from_then_on(feed, tmp_path):
    before = feed(HALF, settings_of_run(tmp_path))
    assert before.live > 1_000
    bounded = settings_of_run(tmp_path, state={"max_live": 1_000})
    assert feed(ALL, bounded, resume=True, accept_settings=True).live <= 1_000


def arrays_of(tmp_path):
    return read_array_folder(newest(tmp_path / "state"))[1]


# ---- the worker, and the command ---------------------------------------------------------------------------


def test_a_worker_goes_on_with_other_settings_and_its_journal_proves_what_came_since(lines, tmp_path):
    partitions = [lines[:HALF:2], lines[1:HALF:2]]
    first, second = (settings_for([], **sections) for sections in ({}, STRONGER))
    state = tmp_path / "state"
    work(first, state, source=MemoryTopic(partitions, 1), until_end=True)
    grown = [
        part + more for part, more in zip(partitions, (lines[HALF::2], lines[HALF + 1 :: 2]), strict=True)
    ]
    with pytest.raises(BadSettings, match=r"learner\.l1"):
        work(second, state, source=MemoryTopic(grown, 2), until_end=True)
    warnings = []
    again = {"until_end": True, "accept_settings": True, "warn": warnings.append}
    work(second, state, source=MemoryTopic(partitions, 2), **again)
    assert any("settings accepted after 6,000 messages" in line for line in warnings)
    (tmp_path / "proof").mkdir(mode=0o700)
    shutil.copytree(newest(state), tmp_path / "proof/checkpoints" / newest(state).name)
    shutil.copytree(state / "rejects", tmp_path / "proof/rejects")
    work(second, state, source=MemoryTopic(grown, 3), **again)
    assert about_of(state)["messages"] == ALL
    with pytest.raises(BadSettings, match="changed last after 6,000 messages"):
        retrace(second, tmp_path / "anew", state, source=MemoryTopic(grown, 4))
    found = retrace(second, tmp_path / "proof", state, source=MemoryTopic(grown, 5), resume=True)
    assert found.run.resumed_from == HALF
    assert found.differences == []


def test_the_command_takes_the_settings_and_wants_a_state_to_go_on_from(lines, tmp_path, capsys):
    settings = settings_of_run(tmp_path)
    write(tmp_path / "log.jsonl", lines[:2_000])
    call = ["replay", "--config", config_for(settings, tmp_path), "--json"]
    assert main(call) == 0
    call += ["--set", "learner.l1=0.25"]
    assert main([*call, "--resume"]) == 78
    assert "learner.l1: 0.25 here, 0.0 there" in capsys.readouterr().err
    assert main([*call, "--accept-settings"]) == 64
    assert "give --resume" in capsys.readouterr().err
    assert main([*call, "--resume", "--accept-settings", "--journal", str(tmp_path)]) == 64
    assert "leave --accept-settings out" in capsys.readouterr().err
    assert main([*call, "--resume", "--accept-settings"]) == 0
    assert "settings accepted after 2,000 messages" in capsys.readouterr().err
    assert main([*call, "--resume", "--set", "space.seed=4", "--accept-settings"]) == 78
    assert "space.seed: 4 here, 0 there" in capsys.readouterr().err
