"""Settings in, made-up message logs with known truth out; shares no code with `stream`. See docs/simulator.md."""

from simulator.bench import bench_log
from simulator.courier import FeedBlock, blocks
from simulator.feed import CourierFeed
from simulator.log_file import Truth, write_log

__all__ = ["CourierFeed", "FeedBlock", "Truth", "bench_log", "blocks", "write_log"]
