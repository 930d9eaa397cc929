"""The address of a Dask scheduler in, a pool that runs passes on its workers out. The one home of dask."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from stream.errors import BadSettings, Unavailable
from stream.runs.tuning.passes import Pool

__all__ = ["workers_of_cluster"]


@contextmanager
def workers_of_cluster(address: str) -> Iterator[tuple[Pool, int]]:
    """A pool and how many threads its workers have. They must see the log under the same paths.

    Raises BadSettings where dask.distributed is not installed, Unavailable where no scheduler answers.
    """
    try:
        import distributed
    except ImportError as error:
        raise BadSettings("--cluster needs dask.distributed: pip install 'bedload[cluster]'") from error
    connect: Any = distributed.Client
    try:
        client = connect(address, timeout="10s", set_as_default=False)
    except (OSError, ValueError, TimeoutError) as error:
        raise Unavailable(f"--cluster {address}: no scheduler answers ({error}); is it running?") from error
    with client:
        threads = sum(client.nthreads().values())
        if not threads:
            raise Unavailable(f"--cluster {address}: the scheduler has no workers; start some")
        yield client.get_executor(pure=False), threads
