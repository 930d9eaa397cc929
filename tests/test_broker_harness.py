"""The broker that other tests rely on: it does what its methods say, and never outlives its test run."""

import os
import shutil
import signal
import socket
import ssl
import subprocess
import sys
import time
from contextlib import suppress
from pathlib import Path

import pytest
from kafka import KafkaConsumer, KafkaProducer, TopicPartition
from kafka.errors import KafkaError

from tests.broker import Broker, Unavailable, start_or_skip
from tests.broker.jars import class_path
from tests.broker.properties import LISTENERS, MECHANISMS
from tests.broker.running import claim_ports

ROOT = Path(__file__).parent.parent
PATIENCE_MS = 20_000


def send(broker, topic, values, **options):
    """Everything is acknowledged when it returns."""
    options = {"bootstrap_servers": broker.servers, "bootstrap_timeout_ms": PATIENCE_MS, **options}
    with KafkaProducer(acks="all", **options) as producer:
        sent = [producer.send(topic, value, partition=0) for value in values]
        producer.flush()
        return [future.get().offset for future in sent]


def read(broker, topic, first=0, patience_ms=PATIENCE_MS, **options):
    """Values of partition 0 from an offset, until its end is reached or patience is."""
    options = {"bootstrap_servers": broker.servers, "bootstrap_timeout_ms": PATIENCE_MS, **options}
    here = TopicPartition(topic, 0)
    with KafkaConsumer(auto_offset_reset="none", enable_auto_commit=False, **options) as consumer:
        consumer.assign([here])
        consumer.seek(here, first)
        end = consumer.end_offsets([here])[here]
        values, deadline = [], time.monotonic() + patience_ms / 1000
        while consumer.position(here) < end and time.monotonic() < deadline:
            values += [record.value for record in consumer.poll(200).get(here, [])]
        return values


def is_refused(**options):
    """A client that fails while it is built leaves a thread behind, unless somebody ends it."""
    consumer = KafkaConsumer.__new__(KafkaConsumer)
    try:
        consumer.__init__(bootstrap_timeout_ms=1000, **options)
    except KafkaError:
        consumer._client.close()
        consumer._net.stop()
        return True
    consumer.close()
    return False


def log_start(broker, topic):
    here = TopicPartition(topic, 0)
    with KafkaConsumer(bootstrap_servers=broker.servers) as consumer:
        return consumer.beginning_offsets([here])[here]


def runs(pid):
    with suppress(ProcessLookupError):
        os.kill(pid, 0)
        return Path(f"/proc/{pid}/stat").read_text().split()[2] != "Z"
    return False


def test_a_message_goes_round(broker, topic):
    broker.make_topic(topic, 3)
    assert send(broker, topic, [b"one", b"two"]) == [0, 1]
    assert read(broker, topic) == [b"one", b"two"]
    with KafkaConsumer(bootstrap_servers=broker.servers) as consumer:
        assert consumer.partitions_for_topic(topic) == {0, 1, 2}


def test_a_misspelt_topic_is_not_made(broker, topic):
    with KafkaConsumer(topic, bootstrap_servers=broker.servers) as consumer:
        consumer.poll(500)
    with broker.admin() as admin:
        assert topic not in admin.list_topics()


def test_a_record_of_ten_megabytes_goes_through(broker, topic):
    broker.make_topic(topic)
    send(broker, topic, [bytes(10_000_000)], max_request_size=20_000_000)
    (value,) = read(broker, topic, max_partition_fetch_bytes=20_000_000, fetch_max_bytes=20_000_000)
    assert len(value) == 10_000_000


def test_deleted_records_move_the_start_of_the_log(broker, topic):
    broker.make_topic(topic)
    send(broker, topic, [b"%d" % number for number in range(10)])
    broker.delete_records(topic, {0: 7})
    assert log_start(broker, topic) == 7
    assert read(broker, topic, 7) == [b"7", b"8", b"9"]


def test_a_topic_made_again_is_empty_and_has_another_id(broker, topic):
    first = broker.make_topic(topic)
    send(broker, topic, [b"old"])
    broker.delete_topic(topic)
    assert broker.make_topic(topic) != first
    assert read(broker, topic) == []
    assert broker.topic_id(topic) != first


def shake_hands(broker, listener, ca_file, *client):
    """What TLS itself says, without a client between."""
    context = ssl.create_default_context(cafile=ca_file)
    if client:
        context.load_cert_chain(*client)
    with (
        socket.create_connection(("127.0.0.1", broker.ports[listener]), timeout=10) as bare,
        context.wrap_socket(bare, server_hostname="127.0.0.1") as sealed,
    ):
        sealed.settimeout(0.5)
        with suppress(TimeoutError):
            sealed.recv(1)


def test_tls_takes_anybody_who_trusts_the_authority(broker, topic):
    given = broker.credentials
    broker.make_topic(topic)
    send(broker, topic, [b"sealed"])
    tls = {"bootstrap_servers": broker.servers_of("tls"), "security_protocol": "SSL"}
    assert read(broker, topic, ssl_cafile=str(given.ca_file), **tls) == [b"sealed"]
    shake_hands(broker, "tls", given.ca_file)
    with pytest.raises(ssl.SSLCertVerificationError):
        shake_hands(broker, "tls", given.stranger_file)


def test_mutual_tls_wants_a_certificate_too(broker, topic):
    given = broker.credentials
    broker.make_topic(topic)
    send(broker, topic, [b"sealed"])
    mutual = {"bootstrap_servers": broker.servers_of("mutual"), "security_protocol": "SSL"}
    known = {"ssl_certfile": str(given.cert_file), "ssl_keyfile": str(given.key_file)}
    assert read(broker, topic, ssl_cafile=str(given.ca_file), **mutual, **known) == [b"sealed"]
    shake_hands(broker, "mutual", given.ca_file, given.cert_file, given.key_file)
    with pytest.raises(ssl.SSLError, match=r"(?i)alert bad certificate|certificate required"):
        shake_hands(broker, "mutual", given.ca_file)


@pytest.mark.parametrize("mechanism", MECHANISMS)
@pytest.mark.parametrize("listener", ["sasl", "sasl_tls"])
def test_a_user_with_the_password_is_let_in_and_one_without_is_not(broker, topic, listener, mechanism):
    given = broker.credentials
    broker.make_topic(topic)
    send(broker, topic, [b"for members"])
    options = {
        "bootstrap_servers": broker.servers_of(listener),
        "security_protocol": LISTENERS[listener],
        "sasl_mechanism": mechanism,
        "sasl_plain_username": given.username,
        "ssl_cafile": str(given.ca_file),
    }
    assert read(broker, topic, sasl_plain_password=given.password, **options) == [b"for members"]
    assert is_refused(sasl_plain_password="guess", **options)


def test_what_was_acknowledged_outlives_a_stop_and_a_kill(own_broker, topic):
    broker = own_broker
    doors, first_id = broker.servers, broker.make_topic(topic)
    send(broker, topic, [b"before"])
    broker.stop()
    with (
        pytest.raises(ConnectionRefusedError),
        socket.create_connection(("127.0.0.1", broker.ports["clear"])),
    ):
        pass
    broker.start_again()
    assert read(broker, topic) == [b"before"]
    send(broker, topic, [b"between"])
    pid = broker.pid
    broker.kill()
    assert not runs(pid)
    broker.start_again()
    assert read(broker, topic) == [b"before", b"between"]
    assert (broker.servers, broker.topic_id(topic)) == (doors, first_id)


def test_a_paused_broker_is_silent_beside_one_that_is_not_and_goes_on_where_it_was(broker, own_broker, topic):
    beside, broker = broker, own_broker
    beside.make_topic(topic)
    broker.make_topic(topic)
    send(broker, topic, [b"before"])
    here = TopicPartition(topic, 0)
    with KafkaConsumer(bootstrap_servers=broker.servers, auto_offset_reset="none") as consumer:
        consumer.assign([here])
        consumer.seek(here, 0)
        assert [record.value for record in consumer.poll(PATIENCE_MS)[here]] == [b"before"]
        broker.pause()
        with socket.create_connection(("127.0.0.1", broker.ports["clear"]), timeout=5):
            assert consumer.poll(1000) == {}, "a paused broker takes connections and says nothing"
        assert send(beside, topic, [b"elsewhere"]) == [0]
        broker.resume()
        send(broker, topic, [b"after"])
        assert [record.value for record in consumer.poll(PATIENCE_MS)[here]] == [b"after"]
        broker.pause()
        pid = broker.pid
        broker.stop()
        assert not runs(pid), "a paused broker can be stopped"


def test_no_two_brokers_are_given_the_same_port():
    """So many draws without looking would agree by chance, for sure."""
    claims = [claim_ports(["clear", "controller"]) for _ in range(300)]
    for _, claim in claims:
        claim.close()
    ports = [port for chosen, _ in claims for port in chosen.values()]
    assert len(set(ports)) == 600


def test_a_broker_dies_with_its_test_run_even_one_that_is_killed(broker, tmp_path):
    """`broker` stands here for: this machine can run one."""
    code = (
        "import sys, time, pathlib; from tests.broker import Broker\n"
        "print(Broker.start(pathlib.Path(sys.argv[1])).pid, flush=True); time.sleep(600)"
    )
    command = [sys.executable, "-W", "ignore", "-c", code, str(tmp_path / "broker")]
    with subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, text=True) as run:
        pid = int(run.stdout.readline())
        assert runs(pid)
        run.send_signal(signal.SIGKILL)
    deadline = time.monotonic() + 10
    while runs(pid):
        assert time.monotonic() < deadline, f"broker {pid} is still there"
        time.sleep(0.05)


def test_without_java_tests_are_skipped_aloud_and_fail_where_a_broker_is_required(tmp_path, monkeypatch):
    (tmp_path / "bin").mkdir()
    (tmp_path / "bin" / "openssl").symlink_to(shutil.which("openssl"))
    monkeypatch.setenv("PATH", str(tmp_path / "bin"))
    monkeypatch.setenv("BEDLOAD_REQUIRE_BROKER", "0")
    with pytest.raises(pytest.skip.Exception, match=r"NOT TESTED.*no java.*openjdk-17-jre-headless"):
        start_or_skip(tmp_path / "broker")
    monkeypatch.setenv("BEDLOAD_REQUIRE_BROKER", "1")
    with pytest.raises(pytest.fail.Exception, match=r"BEDLOAD_REQUIRE_BROKER=1.*no java"):
        start_or_skip(tmp_path / "broker")


def test_a_java_that_is_too_old_is_named(broker, tmp_path, monkeypatch):
    """`broker` stands here for: openssl and the jars are there."""
    said = "Exception in thread main java.lang.UnsupportedClassVersionError: kafka/tools/StorageTool"
    (tmp_path / "java").write_text(f"#!/bin/sh\necho {said} >&2; exit 1\n")
    (tmp_path / "java").chmod(0o755)
    monkeypatch.setenv("PATH", f"{tmp_path}:{os.environ['PATH']}")
    with pytest.raises(Unavailable, match=rf"{tmp_path}/java is too old: the broker needs Java 17"):
        Broker.start(tmp_path / "broker")


def test_jars_that_maven_cannot_fetch_are_no_broker_and_leave_no_half_cache(tmp_path, monkeypatch):
    (tmp_path / "mvn").write_text("#!/bin/sh\necho no route to anywhere; exit 1\n")
    (tmp_path / "mvn").chmod(0o755)
    monkeypatch.setenv("PATH", f"{tmp_path}:{os.environ['PATH']}")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    for _ in range(2):
        with pytest.raises(Unavailable, match="no route to anywhere"):
            class_path()
