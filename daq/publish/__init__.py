"""From the outbox to the broker: topics, access, one connection, the publisher, a listener."""

from daq.publish.access import BrokerSettings, PublishError, check_access, is_loopback, parse_url
from daq.publish.listen import listen
from daq.publish.outage import Pace
from daq.publish.publisher import Publisher
from daq.publish.topics import rows_for

__all__ = [
    "BrokerSettings",
    "Pace",
    "PublishError",
    "Publisher",
    "check_access",
    "is_loopback",
    "listen",
    "parse_url",
    "rows_for",
]
