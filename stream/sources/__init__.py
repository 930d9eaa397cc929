"""Where messages come from: a log of JSON Lines files, whole or growing, or any feed by a journal of it."""

from stream.sources.following import FollowSource
from stream.sources.growing import Overwritten
from stream.sources.journalled import FollowedSource, JournalledSource
from stream.sources.log import LogSource, read_head

__all__ = ["FollowSource", "FollowedSource", "JournalledSource", "LogSource", "Overwritten", "read_head"]
