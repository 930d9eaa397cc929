"""From raw messages to examples: only the fields that are used, and why a message is rejected."""

from stream.decoding.decoder import Decoder
from stream.decoding.reasons import REASONS

__all__ = ["REASONS", "Decoder"]
