"""Where messages come from: a log of JSON Lines files."""

from stream.sources.journalled import FollowedSource, JournalledSource
from stream.sources.log import LogSource, read_head

__all__ = ["FollowedSource", "JournalledSource", "LogSource", "read_head"]
