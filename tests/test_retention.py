"""Checkpoints and snapshots with the times of their writing in; which of them stay out."""

import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.checkpoints import Checkpoints
from stream.retention import Retention

DAY = 1_900_000_000 // 86_400 * 86_400
"""Midnight of some day, in epoch seconds."""


@pytest.fixture
def folders(tmp_path):
    def make(times):
        """Folders as if written at `times`, newest first."""
        made = []
        for number, time in enumerate(times):
            path = tmp_path / f"{len(times) - number:015d}"
            path.mkdir(exist_ok=True)
            os.utime(path, (time, time))
            made.append(path)
        return made

    return make


def hours_left(paths, retention):
    staying = retention.staying(paths)
    return [round((path.stat().st_mtime - DAY) / 3600, 2) for path in paths if path in staying]


def test_the_last_of_each_hour_and_of_each_day_stay_beside_the_newest(folders):
    hours = [30.9, 30.8, 30.2, 29.9, 29.1, 27.5, 27.4, 23.9, 20.0, -0.5, -3.0]
    paths = folders([DAY + hour * 3600 for hour in hours])
    assert hours_left(paths, Retention(2)) == [30.9, 30.8]
    assert hours_left(paths, Retention(2, hourly=3)) == [30.9, 30.8, 29.9, 27.5]
    assert hours_left(paths, Retention(1, daily=3)) == [30.9, 23.9, -0.5]
    assert hours_left(paths, Retention(2, hourly=3, daily=2)) == [30.9, 30.8, 29.9, 27.5, 23.9]


def test_in_the_long_run_few_are_kept_and_none_too_young_is_missing(folders):
    """A checkpoint a minute for ten days, judged after each: a day of hours and a week of days are there."""
    retention = Retention(5, hourly=24, daily=7)
    staying = []
    for minute in range(0, 10 * 24 * 60, 7):
        staying.insert(0, minute)
        paths = [FakeFolder(DAY + 60 * at) for at in staying]
        kept = retention.staying(paths)
        staying = [at for at, path in zip(staying, paths, strict=True) if path in kept]
    ages_h = [(staying[0] - at) / 60 for at in staying]
    assert len(staying) <= 5 + 24 + 7
    for hour in range(1, 24):
        assert any(hour - 1 <= age <= hour + 1 for age in ages_h)
    for day in range(1, 7):
        assert any(24 * (day - 1) <= age <= 24 * (day + 1) for age in ages_h)


class FakeFolder:
    """A folder that was written at a time."""

    def __init__(self, time):
        self.st_mtime = time

    def stat(self):
        return self


@given(st.lists(st.floats(0, 4e9), max_size=30), st.integers(1, 5), st.integers(0, 30), st.integers(0, 9))
def test_the_newest_stay_whatever_the_clock_did(times, newest, hourly, daily):
    paths = [FakeFolder(time) for time in times]
    kept = Retention(newest, hourly, daily).staying(paths)
    assert set(paths[:newest]) <= kept
    assert len(kept) <= newest + hourly + daily


def test_pinned_checkpoints_and_those_of_the_hour_survive_new_ones(tmp_path):
    checkpoints = Checkpoints(tmp_path, Retention(1, hourly=2), lambda: {f"{2:015d}"})
    arrays = {"weights": np.zeros(3)}
    for messages in range(1, 6):
        path = checkpoints.write(messages, arrays, {})
        hours = {1: 1.1, 2: 1.2, 3: 1.3, 4: 2.0}.get(messages, 3.0)
        os.utime(path, (DAY + hours * 3600,) * 2)
    checkpoints.write(6, arrays, {})
    assert [entry.messages for entry in checkpoints.list()] == [6, 5, 4, 2]
    assert checkpoints.write(7, arrays, {}) == Path(tmp_path / f"{7:015d}")
