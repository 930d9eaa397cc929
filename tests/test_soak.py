"""A short soak with a worker that leaks in, and the verdicts on it and on others that were made up, out."""

import sys
from dataclasses import replace

import pytest

from tests.soak.judging import Outcome, complaints, growth_bytes
from tests.soak.running import soak
from tests.soak.sampling import Sample

MESSAGES = 40_000
LEAKS = (sys.executable, "-m", "tests.soak.leaking", "work")
STEADY = [
    Sample(
        seconds=float(n),
        messages=100 * n,
        lag=7 if n < 200 else 0,
        live=1_000,
        nonzeros=50,
        resident_bytes=300_000_000 + 1_000_000 * (n % 9),
        open_files=18 + (n % 4 == 0),
        threads=9 + (n % 4 == 0),
        cpu_s=n / 2,
        state_bytes=10_000 * n,
    )
    for n in range(201)
]
WELL = Outcome(
    samples=STEADY,
    sent=20_000,
    bad=200,
    learned=20_000,
    rejected=200,
    dead_letters=200,
    scores=19_800,
    exit_code=0,
    stop_s=2.0,
    checkpoints=9,
    refused_coordinates=0,
    broker_bytes=0,
)


def test_a_short_soak_counts_every_message_and_catches_what_leaks(broker, topic, tmp_path):
    found = soak(
        broker,
        topic,
        tmp_path / "worker",
        MESSAGES,
        every_s=0.1,
        most_per_s=12_000,
        scores=True,
        worker=LEAKS,
    )
    assert (found.sent, found.learned, found.exit_code) == (MESSAGES, MESSAGES, 0)
    assert found.bad == found.rejected == found.dead_letters == MESSAGES // 100
    assert found.scores == MESSAGES - found.bad
    assert found.samples[-1].lag == 0
    assert max(sample.live for sample in found.samples) <= 2_000
    told = " ".join(complaints(found))
    for leak in ("memory grew from", "open files went from", "threads went from"):
        assert leak in told


def test_a_steady_worker_gets_no_complaint():
    assert complaints(WELL) == []
    assert growth_bytes(STEADY) == pytest.approx(0, abs=20)


@pytest.mark.parametrize(
    ("change", "why"),
    [
        ({"learned": 19_999}, "messages learned: 19999, not 20000"),
        ({"rejected": 201}, "messages rejected: 201, not 200"),
        ({"dead_letters": 199}, "dead letters: 199, not 200"),
        ({"scores": 19_799}, "scores: 19799, not 19800"),
        ({"exit_code": -9}, "exit code: -9, not 0"),
        ({"stop_s": 10.5}, "SIGTERM to the end took 10.5 s, more than 10"),
        ({"samples": STEADY[:-1]}, "lag at the end: 7, not 0"),
        ({"samples": STEADY[::50]}, "too few samples to say whether anything grew"),
    ],
)
def test_each_wrong_count_is_told(change, why):
    assert complaints(replace(WELL, **change)) == [why]


@pytest.mark.parametrize(
    ("name", "by_sample", "why"),
    [
        ("resident_bytes", 200_000, "memory grew from"),
        ("open_files", 0.01, "open files went from 18 to 19"),
        ("threads", 0.01, "threads went from 9 to 10"),
    ],
)
def test_what_grows_slowly_is_told(name, by_sample, why):
    grown = [replace(s, **{name: getattr(s, name) + int(by_sample * n)}) for n, s in enumerate(STEADY)]
    (told,) = complaints(replace(WELL, samples=grown))
    assert told.startswith(why)
