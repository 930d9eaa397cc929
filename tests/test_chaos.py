"""A worker on a real broker, killed at each named place in; the state of one that was let run, out.

`make chaos` kills 200 times.
"""

import random

import pytest

from tests.chaos.places import PLACES
from tests.chaos.series import ANY_TIME, TOGETHER
from tests.chaos.trial import killed_again_and_again
from tests.chaos.worker import DoomedWorkers

AGAIN = "read again from the journal"
OF_FILES = [place for place in PLACES["files"] if place not in PLACES["topics"]]


@pytest.fixture(scope="module")
def workers():
    children = DoomedWorkers()
    yield children
    children.close()


def kills_at(outward, places, seed):
    """Each in its first turns, three more at any time, one in what the last of them left to learn again."""
    draw = random.Random(seed)
    kills = [(place, draw.randint(1, min(2, PLACES[outward][place].turns))) for place in places]
    for _ in range(3):
        kills.insert(draw.randrange(len(kills)), (ANY_TIME, draw.uniform(0.0, 1.0)))
    return [*kills, (AGAIN, 1)]


@pytest.mark.slow
def test_killed_at_every_step_it_takes_a_worker_loses_and_doubles_nothing(own_broker, workers, tmp_path):
    places = [place for place in PLACES["topics"] if place != AGAIN]
    kills = [*kills_at("topics", places, seed=1), (TOGETHER, 0.5)]
    found = killed_again_and_again(own_broker, workers, tmp_path / "trial", "topics", kills)
    assert found.kills == {**dict.fromkeys([*PLACES["topics"], TOGETHER], 1), ANY_TIME: 3}
    assert found.again > 0
    assert found.scores_repeated > 0


@pytest.mark.slow
def test_killed_while_it_writes_rejects_a_worker_keeps_each_once(broker, workers, tmp_path):
    kills = kills_at("files", OF_FILES, seed=2)
    found = killed_again_and_again(broker, workers, tmp_path / "trial", "files", kills)
    assert found.kills == {**dict.fromkeys([*OF_FILES, AGAIN], 1), ANY_TIME: 3}
