"""A real single-node broker for tests: `with Broker.start(folder) as broker: ...`."""

import os
from pathlib import Path

import pytest

from tests.broker.jars import Unavailable
from tests.broker.running import Broker

__all__ = ["Broker", "Unavailable", "start_or_skip"]


def start_or_skip(folder: Path) -> Broker:
    """A running broker. Without one the test is skipped, or fails under BEDLOAD_REQUIRE_BROKER=1 (CI's)."""
    try:
        return Broker.start(folder)
    except Unavailable as trouble:
        if os.environ.get("BEDLOAD_REQUIRE_BROKER") == "1":
            pytest.fail(f"BEDLOAD_REQUIRE_BROKER=1, but {trouble}")
        pytest.skip(f"NOT TESTED, for want of a broker: {trouble}")
