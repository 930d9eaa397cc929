"""From messages and outcomes that come apart to messages with their outcome."""

from stream.labels.example_codec import ExampleCodec
from stream.labels.joining import Join, Released
from stream.labels.store import WaitingStore
from stream.labels.watermark import Feed

__all__ = ["ExampleCodec", "Feed", "Join", "Released", "WaitingStore"]
