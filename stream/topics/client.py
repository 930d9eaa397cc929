"""A topic of a cluster comes in; packed batches of its partitions go out. Only this file knows kafka-python.

Checked against kafka-python 3.0.12, whose ways the rest of the house need not know:

- `allow_auto_create_topics` does not reach the metadata requests of consumers and producers: set by hand.
- A client that fails to start leaves its thread and sockets behind: kept at hand and closed.
- Parsing records one by one in Python costs more than everything else together: whole batches are taken and
  unpacked by a kernel (`_WholeBatch`); CRC, transactions and offsets stay the library's business.
- What is left of a fetch when its partition is paused comes again, once that is resumed, only while nothing
  else was taken up: where the others go on, the partition stands still for ever. `poll` sees to it.
- Its debugging lines show requests and configuration, with passwords and records: they are off.
- A refusal of user or password mostly looks like a lost connection: see `translated` and `_started`.
"""

from __future__ import annotations

import logging
import re
import uuid
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from kafka import KafkaAdminClient, KafkaConsumer, KafkaProducer, TopicPartition, errors
from kafka.net.compat import KafkaNetClient
from kafka.record.default_records import DefaultRecordBatch
from kafka.structs import OffsetAndMetadata

from stream.errors import BadData, BadSettings, NoPermission
from stream.settings.models import Feed
from stream.topics.records import Batch, Single

__all__ = [
    "Away",
    "Client",
    "Fetched",
    "Identity",
    "OutOfRange",
    "close_producer",
    "open_producer",
    "translated",
]

NO_ID = uuid.UUID(int=0)
BATCHES_IN_POLL = 64
FETCH_BYTES = 16 << 20
BOOTSTRAP_MS = 3_000
CALL_MS = 2_000
METADATA_MS = 10_000


class Away(Exception):
    """The cluster does not answer now; the same may work later."""


class OutOfRange(Exception):
    """Offsets, by partition, that the log does not have."""

    def __init__(self, offsets: Mapping[int, int]) -> None:
        super().__init__(offsets)
        self.offsets = offsets


@dataclass(frozen=True, slots=True)
class Identity:
    """By what cluster and topic are known again, and the topic's partitions."""

    cluster: str
    topic_id: str
    partitions: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Fetched:
    """What came of one partition; `after`: the offset to ask for next, behind gaps and transaction marks."""

    partition: int
    records: Sequence[Batch | Single]
    after: int


class _Troubles(logging.Handler):
    """Keeps the last line of trouble of the library, which else tells nobody why it cannot connect."""

    def __init__(self) -> None:
        super().__init__(logging.WARNING)
        self.last = ""

    def emit(self, record: logging.LogRecord) -> None:
        text = record.getMessage()
        if " not ready" not in text and not text.startswith("Bootstrap failed"):  # say nothing of the cause
            self.last = text


TROUBLES = _Troubles()
logging.getLogger("kafka").addHandler(TROUBLES)
logging.getLogger("kafka").setLevel(logging.INFO)


@contextmanager
def translated(feed: Feed) -> Iterator[None]:
    """Errors of the library become ours, or Away."""
    try:
        yield
    except errors.OffsetOutOfRangeError as error:
        raise OutOfRange({tp.partition: offset for tp, offset in error.args[0].items()}) from None
    except errors.LogTruncationError as error:
        raise BadSettings(
            f"topic {feed.topic}: the log was cut back behind what was read already, or the topic was "
            f"deleted and made again ({error}): records that were learned are gone and others stand in their "
            "place. Begin again with a fresh state folder"
        ) from None
    except (errors.CorruptRecordError, errors.InvalidRecordError) as error:
        raise BadData(
            f"topic {feed.topic}: {error}. Let the broker fetch the partition from a good copy"
        ) from None
    except errors.UnsupportedCodecError as error:
        raise BadSettings(
            f"topic {feed.topic} is compressed in a way that is not installed here ({error}): "
            "`pip install lz4 python-snappy` in the environment of Bedload adds lz4 and snappy"
        ) from None
    except (errors.AuthorizationError, errors.SaslAuthenticationFailedError) as error:
        raise NoPermission(
            f"{', '.join(feed.servers)}: the cluster refused {feed.username or 'an unnamed user'} for topic "
            f"{feed.topic} ({type(error).__name__}); check user, password and the rights to read"
        ) from None
    except (errors.UnsupportedSaslMechanismError, errors.KafkaConfigurationError) as error:
        raise BadSettings(f"{', '.join(feed.servers)}: {error}; check [feed]") from None
    except (errors.KafkaError, OSError) as error:
        cause = TROUBLES.last
        # the answer is lost when a closed socket follows it, or when time runs out as it is tried again
        if feed.sasl and ("socket disconnected" in cause or "timed out" in cause):
            cause += " (a user or password that the broker refuses looks like this too)"
        raise Away("; ".join(filter(None, (_told(error), cause)))) from None


def _told(error: Exception) -> str:
    """Kind and text of an error; those of the library name their kind themselves, often more than once."""
    kind, text = type(error).__name__, str(error).strip()
    named = re.compile(rf"(?:\[Error \S+\] )?{kind}:?\s*")
    while match := named.match(text):
        text = text[match.end() :]
    return f"{kind}: {text}" if text else kind


class Client:
    """A connection that reads one topic. Not safe to share between threads.

    Raises Away where the cluster does not answer in a few seconds, NoPermission, BadSettings, and what
    `secrets` (options for the connection, read anew) raises.
    """

    def __init__(self, feed: Feed, options: Mapping[str, Any]) -> None:
        assert feed.topic is not None
        self._feed = feed
        self._topic = feed.topic
        self._options = dict(options)
        self._admin: Any = None
        with translated(feed):
            self._net, self._consumer = _started(
                KafkaConsumer,
                bootstrap_servers=list(feed.servers),
                bootstrap_timeout_ms=BOOTSTRAP_MS,
                enable_auto_commit=False,
                auto_offset_reset="none",
                allow_auto_create_topics=False,
                isolation_level="read_committed",
                check_crcs=True,
                fetch_max_bytes=FETCH_BYTES,
                metadata_max_age_ms=METADATA_MS,
                reconnect_backoff_max_ms=5_000,
                metrics_enabled=False,
                **self._options,
            )
            fetcher = self._consumer._fetcher
            fetcher.PartitionRecords = _with_whole_batches(fetcher.PartitionRecords)
            self._net.cluster.set_topics([self._topic])

    def identity(self) -> Identity | None:
        """What the cluster said last; None where it does not know the topic, or not yet."""
        cluster = self._net.cluster
        if self._topic in cluster.unauthorized_topics:
            with translated(self._feed):
                raise errors.TopicAuthorizationFailedError(self._topic)
        topic_id, partitions = cluster.topic_id(self._topic), cluster.partitions_for_topic(self._topic)
        if not partitions or topic_id in (None, NO_ID):
            return None
        return Identity(str(cluster.cluster_id), str(topic_id), tuple(sorted(partitions)))

    def ask_again(self) -> None:
        """Has the cluster asked for its topics at once; `identity` gives the answer when it is there."""
        self._net.cluster.request_update()

    def starts(self, partitions: Sequence[int]) -> dict[int, int]:
        """The first offset that each still has."""
        with translated(self._feed):
            return _plain(self._consumer.beginning_offsets(self._places(partitions), timeout_ms=CALL_MS))

    def ends(self, partitions: Sequence[int]) -> dict[int, int]:
        """The end offset of each, before the first open transaction."""
        with translated(self._feed):
            return _plain(self._consumer.end_offsets(self._places(partitions), timeout_ms=CALL_MS))

    def at_time(self, partitions: Sequence[int], time_ms: int) -> dict[int, int]:
        """The first offset of each at that time or later; none where there is no such record."""
        with translated(self._feed):
            found = self._consumer.offsets_for_times(
                dict.fromkeys(self._places(partitions), time_ms), timeout_ms=CALL_MS
            )
        return {place.partition: at.offset for place, at in found.items() if at is not None}

    def assign(self, offsets: Mapping[int, int]) -> None:
        """Reads these partitions and no others, each from its offset."""
        self._consumer.assign(self._places(list(offsets)))
        for partition, offset in offsets.items():
            self.seek(partition, offset)

    def seek(self, partition: int, offset: int) -> None:
        """Goes to an offset; what was fetched ahead is dropped."""
        self._consumer.seek(TopicPartition(self._topic, partition), offset)

    def pause(self, paused: Sequence[int], others: Sequence[int]) -> None:
        """Fetches nothing of `paused` for now, and goes on with `others`."""
        self._consumer.pause(*self._places(paused))
        self._consumer.resume(*self._places(others))

    def poll(self, wait_s: float) -> list[Fetched]:
        """What came, of each partition at most once; waits up to `wait_s` for it. Raises OutOfRange too."""
        fetcher = self._consumer._fetcher
        if not fetcher._next_partition_records:  # used up: it makes way for what was left of a paused one
            fetcher._next_partition_records = None
        with translated(self._feed):
            found = self._consumer.poll(timeout_ms=int(wait_s * 1000), max_records=BATCHES_IN_POLL)
            return [
                Fetched(place.partition, list(map(_taken, records)), self._offset(place))
                for place, records in found.items()
            ]

    def offset(self, partition: int) -> int:
        """The offset that is fetched next, behind transaction marks that gave no record."""
        with translated(self._feed):
            return self._offset(TopicPartition(self._topic, partition))

    def committed(self, group: str, partitions: Sequence[int]) -> dict[int, int]:
        """What was committed to `group`."""
        with translated(self._feed):
            found = self._administrator().list_group_offsets({group: self._places(partitions)})[group]
        return {place.partition: at.offset for place, at in found.items() if at.offset >= 0}

    def commit(self, group: str, offsets: Mapping[int, int]) -> None:
        """Commits offsets to `group`, of which nobody is a member."""
        wanted = {
            TopicPartition(self._topic, partition): OffsetAndMetadata(offset, "", -1)
            for partition, offset in offsets.items()
        }
        with translated(self._feed):
            for place, error in self._administrator().alter_group_offsets(group, wanted).items():
                if error is not errors.NoError:
                    raise error(place)

    def close(self) -> None:
        """Ends the connection."""
        for client in (self._admin, self._consumer):
            if client is not None:
                client.close()

    def _administrator(self) -> Any:
        if self._admin is None:
            _, self._admin = _started(
                KafkaAdminClient,
                bootstrap_servers=list(self._feed.servers),
                bootstrap_timeout_ms=BOOTSTRAP_MS,
                **self._options,
            )
        return self._admin

    def _offset(self, place: Any) -> int:
        offset = self._consumer.position(place, timeout_ms=CALL_MS)
        if offset is None:
            raise Away(f"partition {place.partition} has no place to read from")
        return int(offset)

    def _places(self, partitions: Sequence[int]) -> list[Any]:
        return [TopicPartition(self._topic, partition) for partition in partitions]


def open_producer(feed: Feed, options: Mapping[str, Any], largest_bytes: int) -> Any:
    """A KafkaProducer that waits for all replicas, sends each record once and never gives up by itself."""
    with translated(feed):
        return _started(
            KafkaProducer,
            bootstrap_servers=list(feed.servers),
            bootstrap_timeout_ms=BOOTSTRAP_MS,
            acks="all",
            enable_idempotence=True,
            allow_auto_create_topics=False,
            delivery_timeout_ms=(1 << 31) - 1,
            max_block_ms=CALL_MS,
            max_request_size=largest_bytes,
            linger_ms=5,
            reconnect_backoff_max_ms=5_000,
            metrics_enabled=False,
            **options,
        )[1]


def close_producer(producer: Any) -> None:
    """Ends it at once, with what is under way: its own `close` waits for that, and then does not end."""
    try:
        producer.close(timeout=0)
    except errors.KafkaTimeoutError:
        producer._sender.force_close()


def _started(kind: Callable[..., Any], **options: Any) -> tuple[Any, Any]:
    """A client of the library and its network part, which is closed where the client does not start.

    A refused user may come as time that ran out, since the library tries again; the line it logged tells."""
    made: list[Any] = []

    def make(**configs: Any) -> Any:
        net = KafkaNetClient(**configs)
        net.cluster.config["allow_auto_create_topics"] = False
        made.append(net)
        return net

    TROUBLES.last = ""
    try:
        client = kind(kafka_client=make, **options)
        return made[0], client
    except BaseException as error:
        for net in made:
            net.close()
        refused = errors.SaslAuthenticationFailedError
        if isinstance(error, errors.KafkaTimeoutError) and refused.__name__ in TROUBLES.last:
            raise refused(TROUBLES.last) from error
        raise


def _plain(offsets: Mapping[Any, int]) -> dict[int, int]:
    return {place.partition: offset for place, offset in offsets.items()}


class _WholeBatch(DefaultRecordBatch):  # type: ignore[misc]
    """A batch that gives itself, uncompressed, as its one record."""

    __slots__ = ()

    def __iter__(self) -> Iterator[_Whole]:
        self._maybe_uncompress()
        append_time_ms = self.max_timestamp if self.timestamp_type else -1
        data = bytes(memoryview(self._buffer)[self._pos :])
        batch = Batch(data, self.records_count, self.base_offset, self.first_timestamp, append_time_ms)
        yield _Whole(self.last_offset, batch)


@dataclass(frozen=True, slots=True)
class _Whole:
    """What the library wants of a record."""

    offset: int
    value: Batch
    key: None = None
    headers: tuple[()] = ()
    timestamp: int = -1
    timestamp_type: int = 0
    checksum: None = None
    size_in_bytes: int = 1

    def validate_crc(self) -> bool:
        """The batch's own was looked at."""
        return True


def _with_whole_batches(kind: Any) -> Any:
    """The library's walk over the batches of a partition, told to leave them whole."""

    class WholeBatches:
        def __init__(self, records: Any) -> None:
            self._records = records

        def next_batch(self) -> Any:
            batch = self._records.next_batch()
            if type(batch) is DefaultRecordBatch:
                batch.__class__ = _WholeBatch
            return batch

    def make(fetch_offset: int, place: Any, records: Any, **options: Any) -> Any:
        return kind(fetch_offset, place, WholeBatches(records), **options)

    return make


def _taken(record: Any) -> Batch | Single:
    if isinstance(record.value, Batch):
        return record.value
    return Single(record.offset, record.timestamp, record.key, record.value)
