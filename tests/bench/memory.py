"""Memory of a live coordinate, growth of the table included."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np

from stream.batch import Batch
from stream.settings.models import State
from stream.tables import Table
from tests.bench.figures import Figure

__all__ = ["ODD", "WIDTH", "memory", "resident"]

ROW, ROWS = 64, 1024
ODD = 0x9E3779B97F4A7C15  # times this, modulo 2^40: as many distinct addresses as there are numbers
WIDTH = (1 << 40) - 1


def memory(live: int) -> list[Figure]:
    """Most resident memory while `live` coordinates came in one by one, over what was resident before.

    Meant for a process of its own. Names and the admission filter are not in it: the table has neither.
    """
    _fill(Table(State()), 1 << 16)  # kernels compiled, allocator warm
    before = resident("VmRSS")
    Path("/proc/self/clear_refs").write_text("5")  # the peak starts again from here
    table = Table(State())
    _fill(table, live)
    grown = resident("VmHWM") - before
    details = {"table alone": table.table_bytes / live, "live": float(table.live)}
    return [Figure("bytes a live coordinate, at most", grown / live, "bytes", at_most=36, details=details)]


def _fill(table: Table, live: int) -> None:
    size = ROW * ROWS
    row_ptr = np.arange(0, size + 1, ROW)
    labels, weights = np.ones(ROWS, np.int8), np.ones(ROWS)
    values, none = np.ones(size, np.float32), np.zeros(0, np.uint8)
    places, lengths = np.zeros(size, np.int64), np.zeros(size, np.int32)
    for start in range(0, live, size):
        rows = min(ROWS, (live - start) // ROW)
        addresses = np.arange(start, start + size, dtype=np.uint64) * np.uint64(ODD) & np.uint64(WIDTH)
        batch = Batch(row_ptr, addresses, values, labels, weights, none, places, lengths)
        first = 0
        while first < rows:
            _, first = table.admit(batch, first, rows)


def resident(name: str) -> int:
    """Bytes, from the kernel's own account."""
    found = re.search(rf"{name}:\s+(\d+) kB", Path("/proc/self/status").read_text())
    assert found is not None
    return 1024 * int(found[1])
