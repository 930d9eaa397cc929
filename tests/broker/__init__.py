"""A real single-node broker for tests: `with Broker.start(folder) as broker: ...`."""

from tests.broker.jars import Unavailable
from tests.broker.running import Broker

__all__ = ["Broker", "Unavailable"]
