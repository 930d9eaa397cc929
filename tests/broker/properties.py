"""Ports and credentials in, the text of a broker's server.properties out."""

from collections.abc import Mapping
from pathlib import Path

from tests.broker.credentials import Credentials

__all__ = ["LISTENERS", "MECHANISMS", "server_properties"]

LISTENERS = {
    "clear": "PLAINTEXT",
    "tls": "SSL",
    "mutual": "SSL",
    "sasl": "SASL_PLAINTEXT",
    "sasl_tls": "SASL_SSL",
}
"""Each door for clients and its protocol: `mutual` wants a client's certificate, `tls` takes anybody."""
MECHANISMS = ("PLAIN", "SCRAM-SHA-256", "SCRAM-SHA-512")

FIXED = """\
process.roles=broker,controller
node.id=1
controller.listener.names=CONTROLLER
inter.broker.listener.name=CLEAR
offsets.topic.replication.factor=1
offsets.topic.num.partitions=1
transaction.state.log.replication.factor=1
transaction.state.log.min.isr=1
transaction.state.log.num.partitions=1
share.coordinator.state.topic.replication.factor=1
share.coordinator.state.topic.min.isr=1
share.coordinator.state.topic.num.partitions=1
group.initial.rebalance.delay.ms=0
auto.create.topics.enable=false
message.max.bytes=20971520
num.network.threads=1
num.io.threads=2
broker.session.timeout.ms=3000
broker.heartbeat.interval.ms=500
sasl.enabled.mechanisms={mechanisms}
ssl.keystore.type=PEM
ssl.keystore.location={credentials.broker_file}
ssl.truststore.type=PEM
ssl.truststore.location={credentials.ca_file}
listener.name.mutual.ssl.client.auth=required
"""

JAAS = """\
listener.name.{listener}.plain.sasl.jaas.config={package}.plain.PlainLoginModule required {user};
listener.name.{listener}.scram-sha-256.sasl.jaas.config={package}.scram.ScramLoginModule required;
listener.name.{listener}.scram-sha-512.sasl.jaas.config={package}.scram.ScramLoginModule required;
"""


def server_properties(data: Path, ports: Mapping[str, int], credentials: Credentials) -> str:
    """`ports` has one for each of LISTENERS, and `controller`."""
    doors = [f"{name.upper()}://127.0.0.1:{ports[name]}" for name in LISTENERS]
    controller = f"127.0.0.1:{ports['controller']}"
    protocols = [f"{name.upper()}:{protocol}" for name, protocol in LISTENERS.items()]
    user = f'user_{credentials.username}="{credentials.password}"'
    package = "org.apache.kafka.common.security"
    lines = [
        f"log.dirs={data}",
        f"controller.quorum.voters=1@{controller}",
        f"listeners={','.join(doors)},CONTROLLER://{controller}",
        f"advertised.listeners={','.join(doors)}",
        f"listener.security.protocol.map={','.join(protocols)},CONTROLLER:PLAINTEXT",
        FIXED.format(mechanisms=",".join(MECHANISMS), credentials=credentials),
    ]
    lines += [JAAS.format(listener=name, package=package, user=user) for name in ("sasl", "sasl_tls")]
    return "\n".join(lines)
