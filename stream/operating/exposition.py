"""Figures of a worker in, a page of metrics for Prometheus out; the home of its client library."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator

from prometheus_client import CollectorRegistry, Histogram, ProcessCollector
from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, Metric
from prometheus_client.exposition import choose_encoder
from prometheus_client.registry import Collector

from stream.operating.figures import FeedHealth, Figures

__all__ = ["Exposition"]

CHECKPOINT_BUCKETS_S = (0.1, 0.25, 0.5, 1, 2.5, 5, 10, 30, 60, 120, 300)
PAUSE_BUCKETS_S = (0.01, 0.025, 0.05, 0.1, 0.15, 0.25, 0.5, 1, 2.5, 5, 10)


class Exposition(Collector):
    """The metrics page. Ages are made when it is asked for, by the monotonic clock: no set clock bends them.

    No label holds a token or anything else from a message: reasons of rejects are fixed words.
    `ready` says whether the worker is.
    """

    def __init__(
        self,
        figures: Figures,
        feed: Callable[[], FeedHealth | None],
        ready: Callable[[], bool],
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._figures, self._feed, self._ready, self._clock = figures, feed, ready, clock
        self._registry = CollectorRegistry(auto_describe=False)
        self._checkpoints = Histogram(
            "bedload_checkpoint_seconds",
            "From the beginning of a checkpoint until it was durable.",
            buckets=CHECKPOINT_BUCKETS_S,
            registry=self._registry,
        )
        self._pauses = Histogram(
            "bedload_pause_seconds",
            "How long learning stood still for a checkpoint or a snapshot.",
            buckets=PAUSE_BUCKETS_S,
            registry=self._registry,
        )
        ProcessCollector(registry=self._registry)
        self._registry.register(self)

    def checkpoint(self, seconds: float) -> None:
        """A checkpoint took `seconds` until it was durable."""
        self._checkpoints.observe(seconds)

    def pause(self, seconds: float) -> None:
        """Learning stood still for `seconds`."""
        self._pauses.observe(seconds)

    def page(self, accept: str = "") -> tuple[bytes, str]:
        """The page and its content type, in the format that the header `accept` asks for."""
        encode, content_type = choose_encoder(accept)
        return encode(self._registry), content_type

    def collect(self) -> Iterator[Metric]:
        """The metrics that are read off the figures."""
        figures, feed = self._figures, self._feed()
        yield _counter("messages", "Messages read by this process, rejected ones too.", figures.messages)
        rejects = CounterMetricFamily(
            "bedload_rejects", "Messages rejected by this process.", labels=["reason"]
        )
        for reason, count in sorted(figures.rejects.items()):
            rejects.add_metric([reason], count)
        yield rejects
        yield _counter("checkpoint_failures", "Checkpoints that failed.", figures.checkpoint_failures)
        yield _gauge(
            "learned_messages", "Messages that the state holds, over all processes.", figures.learned
        )
        yield _gauge("live", "Coordinates that have state.", figures.live)
        yield _gauge("ready", "1 where /readyz says yes.", float(self._ready()))
        for name, text, value in (
            ("nonzeros", "Weights that are not zero, at the end of the last window.", figures.nonzeros),
            ("window_log_loss", "Log loss of the last window, in nats.", figures.log_loss),
            (
                "window_calibration_ratio",
                "Predicted over observed outcomes in the last window.",
                figures.calibration_ratio,
            ),
            (
                "last_message_age_seconds",
                "Since the last message, or since this process began.",
                self._age(figures.message_s),
            ),
            (
                "last_checkpoint_age_seconds",
                "Since the last checkpoint of this process became durable, or since it began to learn.",
                self._age(figures.checkpoint_s),
            ),
        ):
            if value is not None:
                yield _gauge(name, text, value)
        yield from self._of_feed(feed)

    def _of_feed(self, feed: FeedHealth | None) -> Iterator[Metric]:
        since_s = self._age(self._figures.turned_s) if feed is None else feed.since_contact_s
        if since_s is not None:
            yield _gauge("last_fetch_age_seconds", "Since the feed answered last.", since_s)
        if feed is None:
            return
        lags = GaugeMetricFamily(
            "bedload_lag_messages",
            "End of the partition minus the next offset to read.",
            labels=["partition"],
        )
        for partition, lag in sorted(feed.lags.items()):
            if lag is not None:
                lags.add_metric([str(partition)], lag)
        yield lags
        yield _gauge("stalled_partitions", "Those that stand still though they grow.", len(feed.stalled))

    def _age(self, at_s: float | None) -> float | None:
        return None if at_s is None else max(self._clock() - at_s, 0.0)


def _gauge(name: str, text: str, value: float) -> Metric:
    return GaugeMetricFamily(f"bedload_{name}", text, value=value)


def _counter(name: str, text: str, value: float) -> Metric:
    return CounterMetricFamily(f"bedload_{name}", text, value=value)
