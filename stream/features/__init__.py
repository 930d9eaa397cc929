"""From examples to rows of hashed tokens."""

from stream.features.batcher import Batcher

__all__ = ["Batcher"]
