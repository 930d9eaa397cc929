"""What a wide weight space costs: learning at 2^40 addresses against 2^22."""

from __future__ import annotations

from tests.bench.feed import learn_log, learning_settings, log_of, time_learning
from tests.bench.figures import Figure, alternating, best

__all__ = ["width"]


def width(messages: int, rounds: int, distinct: int = 1_000_000) -> list[Figure]:
    """Time of the loop at 2^40 over its time at 2^22."""
    with log_of(messages, distinct) as folder:
        wide, narrow = learning_settings(folder, 40), learning_settings(folder, 22)
        live = {"live at 2^40": learn_log(wide).model.live, "live at 2^22": learn_log(narrow).model.live}
        times = alternating(rounds, lambda: time_learning(wide), lambda: time_learning(narrow))
    ours, floor = map(best, times)
    details = {**live, "ratio by the clock": ours.wall / floor.wall}
    return [Figure("time at 2^40 against 2^22", ours.cpu / floor.cpu, "times", at_most=1.1, details=details)]
