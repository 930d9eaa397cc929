"""Topics of a Kafka cluster: messages read from one, dead letters and scores written to others."""

from stream.topics.access import Secrets
from stream.topics.publisher import Publisher
from stream.topics.source import Health, TopicSource

__all__ = ["Health", "Publisher", "Secrets", "TopicSource"]
