"""A folder in, a real single-node broker on free loopback ports out, that can be stopped, killed and paused.

No broker outlives its test run: each is the leader of a process group that is killed when the `with` block
ends and at interpreter exit, and the kernel kills it when the thread that started it dies.
"""

import atexit
import os
import random
import shutil
import signal
import socket
import subprocess
import time
import uuid
import weakref
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from types import TracebackType
from typing import Self

from kafka import KafkaAdminClient, TopicPartition

from tests.broker.credentials import Credentials
from tests.broker.jars import JAVA_PACKAGE, Unavailable, class_path, java
from tests.broker.properties import LISTENERS, MECHANISMS, server_properties

__all__ = ["Broker"]

FIRST_PORT, PORTS = 10_000, 10
START_S = 120
STOP_S = 20
JVM = ("-Xmx512m", "-XX:+UseSerialGC", "-XX:TieredStopAtLevel=1")


class Broker:
    """One broker in one folder, whose log survives `stop`, `kill` and `start_again`."""

    def __init__(self, folder: Path) -> None:
        """Use `Broker.start`; this makes no process."""
        self.folder = folder
        self.cluster_id = uuid.uuid4().hex[:22]
        self.ports, claim = claim_ports([*LISTENERS, "controller"])
        weakref.finalize(self, claim.close)
        self.credentials = Credentials.make(folder / "credentials")
        self._process: subprocess.Popen[bytes] | None = None

    @classmethod
    def start(cls, folder: Path) -> Self:
        """A broker that answers, with its data, properties and log below `folder`. Raises Unavailable."""
        broker = cls(folder)
        broker._format()
        broker.start_again()
        return broker

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.kill()

    @property
    def servers(self) -> list[str]:
        """`bootstrap_servers` without encryption; the same before and after a restart."""
        return self.servers_of("clear")

    def servers_of(self, listener: str) -> list[str]:
        """The same for another door: `tls`, `mutual` (wants the client's certificate), `sasl`, `sasl_tls`."""
        return [f"127.0.0.1:{self.ports[listener]}"]

    @property
    def log(self) -> Path:
        """What the broker wrote: warnings and errors."""
        return self.folder / "broker.log"

    @property
    def pid(self) -> int:
        assert self._process is not None, "the broker is not running"
        return self._process.pid

    def start_again(self) -> None:
        """Starts it on the same ports and data, and returns when it answers."""
        assert self._process is None, "the broker is running already"
        command = [*dying_with_parent(), java(), *JVM, "-Dorg.slf4j.simpleLogger.defaultLogLevel=warn"]
        command += ["-cp", class_path(), "kafka.Kafka", str(self._properties)]
        with self.log.open("ab") as log:
            self._process = subprocess.Popen(
                command, stdin=subprocess.DEVNULL, stdout=log, stderr=log, start_new_session=True
            )
        atexit.register(self.kill)
        try:
            wait_for(self._answers, f"the broker to answer (its threads are in {self.log})")
        except BaseException:
            self._signal(signal.SIGQUIT)  # has a running one write what each thread does
            time.sleep(1)
            self.kill()
            raise

    def stop(self) -> None:
        """In good order (SIGTERM), by force when that takes longer than 20 seconds."""
        if self._process is None:
            return
        self.resume()
        self._signal(signal.SIGTERM)
        with suppress(subprocess.TimeoutExpired):
            self._process.wait(STOP_S)
        self.kill()

    def kill(self) -> None:
        """SIGKILL, paused or not; nothing happens when it is not running."""
        if self._process is None:
            return
        self._signal(signal.SIGKILL)
        self._process.wait()
        self._process = None
        atexit.unregister(self.kill)

    def pause(self) -> None:
        """SIGSTOP: connections stay open and nobody answers."""
        self._signal(signal.SIGSTOP)

    def resume(self) -> None:
        """SIGCONT."""
        self._signal(signal.SIGCONT)

    def make_topic(
        self, name: str, partitions: int = 1, configs: Mapping[str, str] | None = None
    ) -> uuid.UUID:
        """Returns its id when every partition has a leader."""
        wanted = {"num_partitions": partitions, "replication_factor": 1, "configs": dict(configs or {})}
        with self.admin() as admin:
            admin.create_topics({name: wanted}, wait_for_metadata=True)
        return self.topic_id(name)

    def topic_id(self, name: str) -> uuid.UUID:
        with self.admin() as admin:
            (topic,) = admin.describe_topics([name])
        return uuid.UUID(str(topic["topic_id"]))

    def delete_topic(self, name: str) -> None:
        """Returns when the name is free again."""
        with self.admin() as admin:
            admin.delete_topics([name])
            wait_for(lambda: name not in admin.list_topics(), f"topic {name} to go")

    def delete_records(self, name: str, before: Mapping[int, int]) -> None:
        """Moves the log start of each partition to an offset (-1: its end), as retention would."""
        with self.admin() as admin:
            admin.delete_records({TopicPartition(name, number): offset for number, offset in before.items()})

    def admin(self) -> KafkaAdminClient:
        """A new administration client, without encryption; to be closed."""
        return KafkaAdminClient(bootstrap_servers=self.servers, bootstrap_timeout_ms=10_000)

    @property
    def _properties(self) -> Path:
        return self.folder / "server.properties"

    def _format(self) -> None:
        self._properties.write_text(server_properties(self.folder / "data", self.ports, self.credentials))
        command = [java(), *JVM, "-cp", class_path(), "kafka.tools.StorageTool", "format"]
        command += ["--cluster-id", self.cluster_id, "--config", str(self._properties)]
        user = f"[name={self.credentials.username},password={self.credentials.password}]"
        for mechanism in MECHANISMS[1:]:
            command += ["--add-scram", f"{mechanism}={user}"]
        done = subprocess.run(command, capture_output=True, text=True, timeout=START_S)
        if "UnsupportedClassVersionError" in done.stderr:
            raise Unavailable(
                f"{java()} is too old: the broker needs Java 17; Debian has it in {JAVA_PACKAGE}"
            )
        assert done.returncode == 0, f"the broker's folder could not be formatted: {done.stdout}{done.stderr}"

    def _answers(self) -> bool:
        """A bare connection first: a client that finds nobody leaves its thread and sockets behind."""
        assert self._process is not None
        if self._process.poll() is not None:
            wrote = self.log.read_text(errors="replace")
            raise AssertionError(f"the broker gave up with {self._process.returncode}: {wrote[-2000:]}")
        with suppress(OSError), socket.create_connection(("127.0.0.1", self.ports["clear"]), timeout=1):
            with self.admin() as admin:
                cluster = admin.describe_cluster()
            return cluster["cluster_id"] == self.cluster_id and bool(cluster["brokers"])
        return False

    def _signal(self, number: signal.Signals) -> None:
        with suppress(ProcessLookupError):
            os.killpg(self.pid, number)


def claim_ports(names: Sequence[str]) -> tuple[dict[str, int], socket.socket]:
    """Ports that no other broker of any test run on this machine is given until the socket is closed.

    They lie below those that the kernel gives to outgoing connections: while a broker is down, a client that
    tries again and again could otherwise be given the broker's own port, and connect to itself.
    """
    lowest = int(Path("/proc/sys/net/ipv4/ip_local_port_range").read_text().split()[0])
    while True:
        first = random.SystemRandom().randrange(FIRST_PORT, lowest - PORTS, PORTS)
        ports = dict(zip(names, range(first, first + PORTS), strict=False))
        claim = socket.socket(socket.AF_UNIX)
        with suppress(OSError):
            claim.bind(f"\0bedload-broker-{first}")
            if all(map(is_free, ports.values())):
                return ports, claim
        claim.close()


def is_free(port: int) -> bool:
    with socket.socket() as trial, suppress(OSError):
        trial.bind(("127.0.0.1", port))
        return True
    return False


def dying_with_parent() -> list[str]:
    """A prefix that has the kernel kill the command with the thread that started it, where it can be had."""
    setpriv = shutil.which("setpriv")
    return [setpriv, "--pdeathsig", "KILL"] if setpriv else []


def wait_for(holds: Callable[[], object], what: str, seconds: float = START_S) -> None:
    deadline = time.monotonic() + seconds
    while not holds():
        assert time.monotonic() < deadline, f"waited {seconds} s for {what} in vain"
        time.sleep(0.05)
