"""The name of a bench in, its figures out, measured in a process of its own on one core."""

from __future__ import annotations

import multiprocessing
import os
from collections.abc import Callable, Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from importlib import import_module

from tests.bench.figures import Figure

__all__ = ["BENCHES", "Bench", "measure"]

ONE_THREAD = ("OMP_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS", "NUMBA_NUM_THREADS")


@dataclass(frozen=True)
class Bench:
    """Where a bench lives (`tests.bench.<module>`, the function of that name) and its sizes."""

    module: str
    full: Mapping[str, int]
    quick: Mapping[str, int]

    def __call__(self, *, quick: bool) -> list[Figure]:
        function: Callable[..., list[Figure]] = getattr(
            import_module(f"tests.bench.{self.module}"), self.module
        )
        return function(**(self.quick if quick else self.full))


BENCHES = {
    "learn": Bench("learn", {"messages": 400_000, "rounds": 3}, {"messages": 60_000, "rounds": 2}),
    "kernel": Bench("learn_kernel", {"messages": 300_000, "rounds": 15}, {"messages": 60_000, "rounds": 3}),
    "width": Bench("width", {"messages": 400_000, "rounds": 5}, {"messages": 60_000, "rounds": 3}),
    "score": Bench("score", {"messages": 400_000, "rounds": 3}, {"messages": 60_000, "rounds": 2}),
    "tune": Bench("tune", {"messages": 400_000, "rounds": 3}, {"messages": 60_000, "rounds": 2}),
    "certify": Bench("certify", {"messages": 1_000_000, "rounds": 3}, {"messages": 60_000, "rounds": 2}),
    "memory": Bench("memory", {"live": 20_000_000}, {"live": 20_000_000}),
    "checkpoint": Bench("checkpoint", {"live": 10_000_000, "rounds": 4}, {"live": 2_000_000, "rounds": 2}),
    "worker": Bench("worker", {"messages": 1_000_000, "rounds": 3}, {"messages": 100_000, "rounds": 2}),
    "sizing": Bench("sizing", {"live": 10_000_000}, {"live": 1_000_000}),
    "start": Bench("start", {"rounds": 11}, {"rounds": 3}),
    "entry": Bench("entry", {"learned_before": 10**8, "tokens": 15}, {"learned_before": 10**7, "tokens": 3}),
    "years": Bench("years", {"examples": 10**9}, {"examples": 10**8}),
}


def _prepare() -> None:
    """One core for everything in this process."""
    os.sched_setaffinity(0, {max(os.sched_getaffinity(0))})


def measure(name: str, quick: bool) -> list[Figure]:
    """Runs one bench in a fresh process, so that none finds the memory and caches of another."""
    os.environ.update(dict.fromkeys(ONE_THREAD, "1"))  # read when the libraries are imported there
    spawn = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(1, mp_context=spawn, initializer=_prepare) as pool:
        return pool.submit(BENCHES[name], quick=quick).result()
