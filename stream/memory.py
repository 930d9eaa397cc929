"""Memory that grows where it is: a reserved range of addresses in, an array over its first part out.

Pages are taken when they are first touched, so a reservation costs nothing and growing copies nothing. Huge
pages are asked for where rows are long and given out one after the other; elsewhere, with memory in
fragments, waiting for them cost more than they saved (measured).
"""

from __future__ import annotations

import mmap
from contextlib import suppress

import numpy as np
import numpy.typing as npt

from stream.errors import CannotCreate

__all__ = ["reserve"]

NO_RESERVE = getattr(mmap, "MAP_NORESERVE", 0x4000)  # Python names it from 3.12 on
LEAST = 1 << 30


def reserve(size: int, *, huge: bool = False) -> npt.NDArray[np.uint64]:
    """Zeros, uint64[size], of which only what is touched takes memory; fewer where the system allows no more.

    Raises CannotCreate where not even 1 GiB of addresses is to be had.
    """
    wanted = 8 * size
    while wanted >= LEAST:
        try:
            memory = mmap.mmap(-1, wanted, flags=mmap.MAP_PRIVATE | mmap.MAP_ANONYMOUS | NO_RESERVE)
        except OSError:
            wanted //= 2
            continue
        if huge:
            with suppress(OSError):  # a system without them
                memory.madvise(mmap.MADV_HUGEPAGE)
        return np.frombuffer(memory, np.uint64)
    raise CannotCreate(
        "the table cannot reserve 1 GiB of addresses; raise the limit on virtual memory (ulimit -v)"
    )
