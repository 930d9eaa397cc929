"""From messages and outcomes that come apart to messages with their outcome."""

from stream.labels.events import ARRIVED, RELEASED, Event
from stream.labels.example_codec import ExampleCodec
from stream.labels.joining import Join
from stream.labels.store import WaitingStore
from stream.labels.watermark import Feed

__all__ = ["ARRIVED", "RELEASED", "Event", "ExampleCodec", "Feed", "Join", "WaitingStore"]
