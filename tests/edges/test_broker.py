"""The broker edge without a broker: backoff, login files, and the sentences for what refuses to talk."""

import gc
import socket
import ssl
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mosquitto import Certificates, free_port
from motekeep.edges.broker import MqttBroker, reconnect_delay
from motekeep.edges.clock import SystemClock
from motekeep.edges.connection import Inlet
from motekeep.edges.login import DOWN_BYTES, INLET_BYTES, BrokerSettings, Tls, read_password, tls_context
from motekeep.edges.ports import Acknowledged, BrokerEvent, Disconnected, Received, SubscriptionRefused
from motekeep.errors import BrokerError

PATIENCE_S = 10.0


def settings_for(port: int, **changes: object) -> BrokerSettings:
    defaults: dict[str, object] = {
        "host": "127.0.0.1",
        "port": port,
        "client_id": "motekeep-quarry-east-gate",
        "will": ("motekeep/quarry/east-gate/health", '{"status":"offline"}'),
        "backoff_s": (0.05, 0.2),
    }
    return BrokerSettings(**{**defaults, **changes})  # type: ignore[arg-type]


def next_event(broker: MqttBroker, kind: type[BrokerEvent], patience_s: float = PATIENCE_S) -> BrokerEvent:  # type: ignore[valid-type]
    """The next event of a kind; others on the way are let go."""
    deadline = time.monotonic() + patience_s
    while time.monotonic() < deadline:
        event = broker.event(0.2)
        if isinstance(event, kind):
            return event
    raise AssertionError(f"no {kind.__name__} in {patience_s} s")


@contextmanager
def answering(serve: Callable[[socket.socket], None]) -> Iterator[int]:
    """A server on a free port that treats each connection with `serve`, then closes it."""
    listener = socket.create_server(("127.0.0.1", 0))

    def accept() -> None:
        with suppress(OSError):
            while True:
                connection, _ = listener.accept()
                with connection, suppress(OSError):
                    serve(connection)

    threading.Thread(target=accept, daemon=True).start()
    try:
        yield listener.getsockname()[1]
    finally:
        with suppress(OSError):
            listener.shutdown(socket.SHUT_RDWR)
        listener.close()


@contextmanager
def started(settings: BrokerSettings) -> Iterator[MqttBroker]:
    broker = MqttBroker(settings, SystemClock(trust_rtc=True))
    broker.start()
    try:
        yield broker
    finally:
        broker.stop(None, 1.0)


# -- backoff ----------------------------------------------------------------------------------------------------


@given(device=st.integers(0, 10**9), failures=st.integers(0, 10_000))
def test_the_delay_before_a_connection_stays_within_its_limits_and_is_the_same_each_time(
    device: int, failures: int
) -> None:
    delay = reconnect_delay(f"motekeep-{device}", failures, 1.0, 60.0)
    assert 1.0 <= delay <= 60.0
    assert delay == reconnect_delay(f"motekeep-{device}", failures, 1.0, 60.0)


def test_a_fleet_that_lost_its_broker_comes_back_spread_out() -> None:
    delays = sorted(reconnect_delay(f"motekeep-site-{n}", 8, 1.0, 60.0) for n in range(1000))
    assert delays[0] < 31.0
    assert delays[-1] > 59.0
    busiest = max(sum(1 for d in delays if second <= d < second + 1) for second in range(30, 60))
    assert busiest < 70  # 1000 over 30 s, evenly: 33


def open_files() -> int:
    return sum(1 for _ in Path("/proc/self/fd").iterdir())


def test_attempts_without_end_leave_no_open_file_behind() -> None:
    gc.disable()  # on a quiet gateway the cycle collector does not come by either
    try:
        with started(settings_for(free_port(), backoff_s=(0.002, 0.004))) as broker:
            next_event(broker, Disconnected)
            before = open_files()
            for _ in range(8):
                next_event(broker, Disconnected)
            assert open_files() <= before + 6  # those of the newest three; each has two
    finally:
        gc.enable()


# -- settings and files -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("host", "port"), [("", 1883), ("x" * 64 + ".example", 1883), ("a..b", 1883), ("localhost", 0)]
)
def test_settings_that_can_never_work_are_refused_at_start(host: str, port: int) -> None:
    broker = MqttBroker(settings_for(port, host=host), SystemClock(trust_rtc=True))
    with pytest.raises(BrokerError, match=r"mend \[broker\] host"):
        broker.start()


def test_the_password_is_the_first_line_of_its_file(tmp_path: Path) -> None:
    file = tmp_path / "password"
    file.write_bytes(b"s3cret with blanks \r\nnot this\n")
    assert read_password(file) == "s3cret with blanks "
    assert read_password(None) is None


def test_a_missing_password_file_is_told_and_tried_again(tmp_path: Path) -> None:
    with started(settings_for(free_port(), username="u", password_file=tmp_path / "absent")) as broker:
        first, second = next_event(broker, Disconnected), next_event(broker, Disconnected)
    assert isinstance(first, Disconnected)
    assert "password_file" in first.why
    assert first == second


def test_tls_files_that_do_not_fit_together_are_named(tmp_path: Path) -> None:
    certificates = Certificates(tmp_path)
    with pytest.raises(BrokerError, match=r"server\.key"):
        tls_context(Tls(certificates.ca, Path(f"{certificates.client}.crt"), Path(f"{certificates.server}.key")))
    context = tls_context(Tls(certificates.ca, Path(f"{certificates.client}.crt"), Path(f"{certificates.client}.key")))
    assert context.verify_mode == ssl.CERT_REQUIRED
    assert context.check_hostname


# -- who refuses to talk ----------------------------------------------------------------------------------------


def test_a_broker_that_speaks_only_mqtt_3_gets_one_plain_sentence_and_is_tried_again() -> None:
    """MQTT 3.1.1 section 3.2.2.3: CONNACK with return code 1, unacceptable protocol version."""

    def serve(connection: socket.socket) -> None:
        connection.recv(4096)
        connection.sendall(b"\x20\x02\x00\x01")

    with answering(serve) as port, started(settings_for(port)) as broker:
        for _ in range(2):
            event = next_event(broker, Disconnected)
            assert isinstance(event, Disconnected)
            assert event.refused
            assert (
                event.why
                == "this broker speaks only MQTT 3.1.1, which hides refusals; motekeep needs one that speaks MQTT 5"
            )


def test_a_broker_that_closes_without_an_answer_is_told_as_such() -> None:
    with answering(lambda connection: connection.recv(4096) and None) as port, started(settings_for(port)) as broker:
        event = next_event(broker, Disconnected)
    assert isinstance(event, Disconnected)
    assert "does it speak MQTT 5" in event.why


def test_rubbish_from_the_broker_ends_the_connection_and_not_the_edge() -> None:
    def serve(connection: socket.socket) -> None:
        connection.recv(4096)
        connection.sendall(bytes(range(256)) * 16)

    with answering(serve) as port, started(settings_for(port)) as broker:
        for _ in range(3):
            assert isinstance(next_event(broker, Disconnected), Disconnected)


def test_a_subscription_that_is_refused_is_told() -> None:
    """MQTT 5 sections 3.2 and 3.9: CONNACK with success, SUBACK with 0x01 for the first filter, 0x87 for the second."""

    def serve(connection: socket.socket) -> None:
        connection.recv(4096)
        connection.sendall(b"\x20\x03\x00\x00\x00")
        subscribe = connection.recv(4096)
        connection.sendall(b"\x90\x05" + subscribe[2:4] + b"\x00\x01\x87")
        connection.recv(4096)

    with answering(serve) as port, started(settings_for(port, filters=("a/b", "c/+"))) as broker:
        assert next_event(broker, SubscriptionRefused) == SubscriptionRefused("c/+", "not authorized (135)")


@pytest.mark.parametrize("host", ["127.0.0.1", "no-such-name.invalid"])
def test_a_broker_out_of_reach_is_told_in_words_and_tried_again(host: str) -> None:
    with started(settings_for(free_port(), host=host)) as broker:
        for _ in range(2):
            event = next_event(broker, Disconnected, 30.0)
            assert isinstance(event, Disconnected)
            assert "not reachable: Connection refused" in event.why or "name is not found" in event.why


def test_a_stop_while_connecting_hangs_on_nothing() -> None:
    with answering(lambda connection: time.sleep(3.0)) as port:
        broker = MqttBroker(settings_for(port), SystemClock(trust_rtc=True))
        broker.start()
        broker.event(0.3)
        began = time.monotonic()
        assert broker.stop(("t", "b"), 1.4) is False
        assert time.monotonic() - began < 1.5


def test_nothing_is_published_nor_queued_without_a_connection() -> None:
    with started(settings_for(free_port())) as broker:
        assert broker.publish("t", "b") is None
        broker.event(0.1)
        assert broker.publish("t", "b") is None


# -- the inlet --------------------------------------------------------------------------------------------------


def test_a_flood_from_above_is_bounded_and_answers_still_come_through() -> None:
    inlet = Inlet(INLET_BYTES)
    for _ in range(100):
        inlet.put(Received("t", b"x" * (DOWN_BYTES // 2)))
    inlet.put(Acknowledged(1, None, 0))
    taken: list[BrokerEvent] = []
    while (event := inlet.take(0.0)) is not None:
        taken.append(event)
    assert sum(len(e.payload) for e in taken if isinstance(e, Received)) <= INLET_BYTES
    assert taken[-1] == Acknowledged(1, None, 0)
    assert inlet.lost == 100 - (len(taken) - 1)
    inlet.put(Received("t", b"x"))  # room again once it was read
    assert inlet.take(0.0) == Received("t", b"x")


def test_many_wakes_are_one_and_a_wake_ends_a_wait() -> None:
    inlet = Inlet(INLET_BYTES)
    for _ in range(1000):
        inlet.wake()
    began = time.monotonic()
    assert inlet.take(30.0) is None
    assert time.monotonic() - began < 10.0
    inlet.put(Acknowledged(1, None, 0))
    assert inlet.take(0.0) == Acknowledged(1, None, 0)
