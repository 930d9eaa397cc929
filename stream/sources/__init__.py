"""Where messages come from: a log of JSON Lines files."""

from stream.sources.log import LogSource, read_head

__all__ = ["LogSource", "read_head"]
