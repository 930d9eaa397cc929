"""Settings in, invented message logs with known truth out; see docs/simulator.md.

Shares no code with `stream`, so that a bug in one cannot hide itself in the other.
"""

from simulator.bench import bench_log
from simulator.courier import FeedBlock, blocks
from simulator.faults import Faults
from simulator.feed import CourierFeed
from simulator.log_file import write_log
from simulator.pacing import Pace
from simulator.truth import Truth

__all__ = ["CourierFeed", "Faults", "FeedBlock", "Pace", "Truth", "bench_log", "blocks", "write_log"]
