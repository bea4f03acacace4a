"""The broker edge and the publisher against a real mosquitto, with a proxy in between where the line misbehaves."""

import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from threading import Event, Thread

import pytest

from mosquitto import Certificates, Mosquitto, running
from motekeep.edges.broker import MqttBroker
from motekeep.edges.clock import SystemClock
from motekeep.edges.login import BrokerSettings, Tls
from motekeep.edges.ports import Acknowledged, Connected, Disconnected, Received, Row
from motekeep.loops.inbox import down_filters
from motekeep.loops.publisher import Publisher, PublisherSettings
from motekeep.loops.rows import RowSettings
from proxy import proxied
from uplink_fakes import TOPICS, FakeJournal

pytestmark = pytest.mark.whole

READING, LATE, HEALTH = TOPICS.reading("north"), TOPICS.late("north"), TOPICS.health
WILL = '{"schema":"motekeep/health/1","site":"quarry","gateway":"east-gate","status":"offline","boot":"b","life":1}'
PATIENCE_S = 40.0


def settings_for(port: int, **changes: object) -> BrokerSettings:
    plain = BrokerSettings(
        "127.0.0.1",
        port,
        "motekeep-quarry-east-gate",
        will=(HEALTH, WILL),
        filters=down_filters(TOPICS),
        backoff_s=(0.1, 0.5),
        steady_s=1.0,
        will_delay_s=1,
    )
    return replace(plain, **changes)  # type: ignore[arg-type]


def wait_for(what: Callable[[], object], why: str, patience_s: float = PATIENCE_S) -> None:
    deadline = time.monotonic() + patience_s
    while not what():
        assert time.monotonic() < deadline, f"waited in vain: {why}"
        time.sleep(0.05)


class Uplink:
    """A publisher in its own thread on a real broker edge, over a journal in memory."""

    def __init__(self, settings: BrokerSettings, *, late_rate: float = 0.0, stall_s: float = 90.0) -> None:
        self.clock = SystemClock(trust_rtc=True)
        self.journal = FakeJournal()
        self.stop = Event()
        self.broker = MqttBroker(settings, self.clock)
        self.publisher = Publisher(
            PublisherSettings(RowSettings(60.0, late_rate=late_rate), stall_s=stall_s),
            TOPICS,
            ["north"],
            journal=self.journal,
            broker=self.broker,
            clock=self.clock,
            stop=self.stop,
            farewell=lambda at: f'{{"status":"offline","at":{at.utc}}}',
        )
        self.thread = Thread(target=self.publisher.run, daemon=True)
        self.seq = 0

    def reading(self, *, age_s: float = 0.0, pad: int = 300) -> None:
        self.seq += 1
        now = self.clock.now()
        body = f'{{"sensor":"north","seq":{self.seq},"pad":"{"x" * pad}"}}'
        self.journal.add(Row("north", self.seq, self.seq, now.boot_id, now.boot_s - age_s - 60.0, 60.0, "synced", body))

    def backlog(self, count: int, pad: int = 300) -> None:
        for i in range(count):
            self.reading(age_s=600.0 + 60.0 * (count - i), pad=pad)

    def delivered(self) -> list[int]:
        return self.journal.in_state("delivered")

    def all_delivered(self) -> None:
        wait_for(lambda: len(self.delivered()) == self.seq, "every row to be delivered")

    def up(self) -> bool:
        return self.publisher.facts(self.clock.now()).since is not None

    def close(self) -> float:
        """Stop it; how long that took."""
        began = time.monotonic()
        self.stop.set()
        self.publisher.wake()
        self.thread.join(10.0)
        assert not self.thread.is_alive()
        return time.monotonic() - began


@contextmanager
def uplink(settings: BrokerSettings, **changes: float) -> Iterator[Uplink]:
    up = Uplink(settings, **changes)
    try:
        yield up
    finally:
        if up.thread.is_alive():
            up.close()


def take(broker: MqttBroker, kind: type, patience_s: float = 10.0) -> object:
    deadline = time.monotonic() + patience_s
    while time.monotonic() < deadline:
        if isinstance(event := broker.event(0.2), kind):
            return event
    raise AssertionError(f"no {kind.__name__}")


# -- the whole way ----------------------------------------------------------------------------------------------


def test_readings_of_an_outage_arrive_late_in_order_and_complete_and_live_ones_live(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), uplink(settings_for(mosquitto.port)) as up, mosquitto.subscriber() as before:
        up.publisher.post(HEALTH, '{"status":"normal"}')
        up.thread.start()
        up.reading()
        up.publisher.wake()
        wait_for(lambda: before.seqs(READING) == [1], "the live reading")
        mosquitto.stop()
        up.backlog(2500)
        up.publisher.wake()
        time.sleep(1.0)
        assert up.delivered() == [1]
        mosquitto.start()
        with mosquitto.subscriber() as heard:
            # whatever left before the subscriber was there: asked for again, as an archive would
            up.all_delivered()
            mosquitto.publish(TOPICS.resend, '{"sensor":"north","from_seq":2,"to_seq":2501}')
            wait_for(lambda: heard.seqs(LATE)[-2500:] == list(range(2, 2502)), "the whole range in order")
            up.reading()
            up.publisher.wake()
            wait_for(lambda: heard.seqs(READING) == [2502], "live again")
            assert heard.messages(HEALTH)[-1] == '{"status":"normal"}'
            assert up.close() < 2.0
            wait_for(lambda: '"offline"' in heard.messages(HEALTH)[-1], "the farewell")
            assert WILL not in heard.messages(HEALTH)


def test_a_durable_subscriber_hears_the_backlog_oldest_first_without_gap_or_double(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), mosquitto.subscriber() as heard, uplink(settings_for(mosquitto.port)) as up:
        up.backlog(3210)
        up.thread.start()
        up.all_delivered()
        wait_for(lambda: len(heard.seqs(LATE)) >= 3210, "all to be heard")
        assert heard.seqs(LATE) == list(range(1, 3211))


# -- refusals ---------------------------------------------------------------------------------------------------


def test_what_the_access_rules_refuse_is_not_delivered_and_the_rest_is(tmp_path: Path) -> None:
    rules = f"topic readwrite {READING}\ntopic readwrite {HEALTH}\ntopic read {TOPICS.resend}\ntopic readwrite hello\n"
    mosquitto = Mosquitto(tmp_path, acl=rules)
    with running(mosquitto), uplink(settings_for(mosquitto.port)) as up:
        up.backlog(150)
        up.reading()
        up.thread.start()
        wait_for(lambda: up.delivered() == [151], "the live reading, which is allowed")
        wait_for(lambda: up.publisher.facts(up.clock.now()).refused >= 3, "three refusals")
        facts = up.publisher.facts(up.clock.now())
        assert up.journal.in_state("waiting") == list(range(1, 151))
        assert facts.set_aside == 0
        assert facts.reconnects <= 3  # mosquitto 2.0.11 hangs up after each refusal
        up.reading()
        up.publisher.wake()
        wait_for(lambda: up.delivered() == [151, 152], "live readings in spite of that")
        (tmp_path / "acl").write_text("topic readwrite #\n")
        assert mosquitto._process is not None
        mosquitto._process.send_signal(signal.SIGHUP)
        up.all_delivered()


@pytest.mark.parametrize("announced", [True, False])
def test_a_row_larger_than_the_broker_takes_is_set_aside_and_the_others_arrive(tmp_path: Path, announced: bool) -> None:
    # message_size_limit is enforced but not announced: mosquitto then answers or hangs up, as its version has it
    limit = "max_packet_size 20000" if announced else "message_size_limit 20000"
    mosquitto = Mosquitto(tmp_path, [limit])
    with running(mosquitto), uplink(settings_for(mosquitto.port)) as up:
        up.publisher.post(HEALTH, "{}")
        up.backlog(40)
        up.reading(age_s=600.0, pad=40_000)
        up.reading(age_s=500.0)
        up.reading(pad=40_000)
        up.thread.start()
        wait_for(lambda: up.journal.in_state("aside") == [41, 43], "the large rows to be set aside", 60.0)
        wait_for(lambda: up.delivered() == [*range(1, 41), 42], "the others")
        assert up.publisher.facts(up.clock.now()).set_aside == 2


# -- login ------------------------------------------------------------------------------------------------------


def test_password_and_client_certificate_let_us_in_and_are_read_anew_for_each_connection(tmp_path: Path) -> None:
    (tmp_path / "strange").mkdir()
    certificates, strange = Certificates(tmp_path), Certificates(tmp_path / "strange")
    mosquitto = Mosquitto(tmp_path, users={"gateway": "right"}, tls=certificates)
    password, cert, key = tmp_path / "password", tmp_path / "mine.crt", tmp_path / "mine.key"
    password.write_text("wrong\n")
    shutil.copy(f"{strange.client}.crt", cert)
    shutil.copy(f"{strange.client}.key", key)
    tls = Tls(certificates.ca, cert, key)
    settings = settings_for(mosquitto.port, username="gateway", password_file=password, tls=tls)
    with running(mosquitto), uplink(settings) as up:

        def why() -> str:
            return up.publisher.facts(up.clock.now()).why or ""

        up.backlog(120)
        up.thread.start()
        wait_for(lambda: "refuses our certificate" in why(), "the refusal of the certificate")
        assert up.publisher.facts(up.clock.now()).connection_refused == why()
        shutil.copy(f"{certificates.client}.crt", cert)
        shutil.copy(f"{certificates.client}.key", key)
        wait_for(lambda: "refuses our login" in why(), "the refusal of the password")
        assert not up.up()
        password.write_text("right\n")
        up.all_delivered()
        assert up.publisher.facts(up.clock.now()).connection_refused is None
        assert up.close() < 2.0


def test_a_broker_with_a_certificate_of_somebody_else_is_not_talked_to(tmp_path: Path) -> None:
    (tmp_path / "ours").mkdir()
    (tmp_path / "theirs").mkdir()
    ours, theirs = Certificates(tmp_path / "ours"), Certificates(tmp_path / "theirs")
    mosquitto = Mosquitto(tmp_path, tls=theirs)
    with running(mosquitto):
        broker = MqttBroker(settings_for(mosquitto.port, tls=Tls(ours.ca)), SystemClock(trust_rtc=True))
        broker.start()
        event = take(broker, Disconnected)
        broker.stop(None, 1.0)
    assert isinstance(event, Disconnected)
    assert "not trusted" in event.why
    assert "clock" in event.why


# -- the line ---------------------------------------------------------------------------------------------------


def test_swallowed_answers_deliver_nothing_and_a_cut_brings_everything_again(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), proxied(mosquitto.port) as proxy, mosquitto.subscriber() as heard:
        proxy.swallow_pubacks = True
        with uplink(settings_for(proxy.port)) as up:
            up.backlog(1000)
            up.thread.start()
            wait_for(lambda: proxy.swallowed >= 1, "an answer to be swallowed")
            time.sleep(0.5)
            assert up.delivered() == []
            proxy.swallow_pubacks = False
            proxy.cut()
            up.all_delivered()
            wait_for(lambda: set(heard.seqs(LATE)) == set(range(1, 1001)), "all to be heard")


def test_a_stalled_line_is_given_up_by_progress_and_the_backlog_arrives_over_a_new_one(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), proxied(mosquitto.port) as proxy, uplink(settings_for(proxy.port), stall_s=2.0) as up:
        up.thread.start()
        wait_for(up.up, "a connection")
        proxy.stalled = True
        up.backlog(500)
        up.publisher.wake()
        wait_for(lambda: "no answer for" in (up.publisher.facts(up.clock.now()).why or ""), "the stall to be noticed")
        assert up.delivered() == []
        proxy.stalled = False
        up.all_delivered()


def test_an_idle_half_open_line_is_noticed_within_two_keepalives_or_so(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    settings = settings_for(0, keepalive_s=2)
    with running(mosquitto), proxied(mosquitto.port) as proxy:
        broker = MqttBroker(replace(settings, port=proxy.port), SystemClock(trust_rtc=True))
        broker.start()
        take(broker, Connected)
        proxy.stalled = True
        event = take(broker, Disconnected, 15.0)
        broker.stop(None, 1.0)
    assert event == Disconnected("no sign of life from the broker for 4 s")


@pytest.mark.parametrize("filled", [False, True])
def test_a_stop_over_a_stalled_line_is_back_within_two_seconds(tmp_path: Path, filled: bool) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), proxied(mosquitto.port) as proxy, uplink(settings_for(proxy.port)) as up:
        up.backlog(3000, pad=2000)
        if not filled:
            up.thread.start()
            up.all_delivered()
        proxy.stalled = True
        if filled:  # one message waits for its answer from the first
            up.thread.start()
            time.sleep(1.0)
        assert up.close() < 2.0


def test_a_line_with_latency_carries_the_backlog_in_a_window_not_one_by_one(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), proxied(mosquitto.port) as proxy, uplink(settings_for(proxy.port)) as up:
        proxy.latency_s = 0.05
        up.backlog(10_000)
        up.thread.start()
        began = time.monotonic()
        up.all_delivered()
        assert time.monotonic() - began < 10.0  # a hundred messages one by one would take longer than 10 s


def test_a_refused_connection_is_tried_again_with_growing_delay(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), proxied(mosquitto.port) as proxy, uplink(settings_for(proxy.port)) as up:
        proxy.refusing = True
        up.backlog(10)
        up.thread.start()
        wait_for(lambda: proxy.connections >= 4, "several attempts")
        proxy.refusing = False
        up.all_delivered()


def test_a_dead_network_thread_is_noticed_and_replaced(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    quiet, threading.excepthook = threading.excepthook, lambda _: None
    try:
        with running(mosquitto), uplink(settings_for(mosquitto.port)) as up:
            up.thread.start()
            wait_for(up.up, "a connection")
            connection = up.broker._connection
            assert connection is not None

            def fail(*_: object) -> None:
                raise RuntimeError("a bug in the library")

            connection._client._loop = fail  # type: ignore[method-assign]
            wait_for(lambda: not connection.alive, "the thread to die")
            assert connection._client.is_connected()  # what the library still believes
            up.backlog(10)
            up.publisher.wake()
            up.all_delivered()
            assert up.publisher.facts(up.clock.now()).why == "the network thread of the MQTT library died"
    finally:
        threading.excepthook = quiet


def test_a_callback_that_fails_does_not_end_the_network_thread(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto):
        broker = MqttBroker(settings_for(mosquitto.port), SystemClock(trust_rtc=True))
        broker.start()
        take(broker, Connected)
        assert broker._connection is not None
        real_put, failed = broker._inlet.put, []

        def put(event: object) -> None:
            if isinstance(event, Received):
                failed.append(event)
                raise RuntimeError("a bug in a callback")
            real_put(event)  # type: ignore[arg-type]

        broker._inlet.put = put  # type: ignore[method-assign]
        mosquitto.publish(TOPICS.resend, "{}")
        wait_for(lambda: failed, "the callback to fail")
        assert broker._connection.alive
        mid = broker.publish(READING, "{}")
        event = take(broker, Acknowledged)
        broker.stop(None, 1.0)
    assert isinstance(event, Acknowledged)
    assert event.mid == mid


# -- will and takeover ------------------------------------------------------------------------------------------


VICTIM = """
import sys, time
sys.path[:0] = {path!r}
import test_broker_mosquitto as t
up = t.Uplink(t.settings_for({port}))
up.publisher.post(t.HEALTH, '{{"status":"normal"}}')
up.thread.start()
time.sleep(600)
"""


def test_the_will_says_offline_when_the_process_is_killed(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), mosquitto.subscriber(HEALTH) as heard:
        path = [str(Path(__file__).parent), str(Path(__file__).parent.parent)]
        victim = subprocess.Popen([sys.executable, "-c", VICTIM.format(path=path, port=mosquitto.port)])
        try:
            wait_for(lambda: '{"status":"normal"}' in heard.messages(HEALTH), "the birth")
        finally:
            victim.kill()
            victim.wait(10.0)
        wait_for(lambda: heard.messages(HEALTH)[-1] == WILL, "the will")
        with mosquitto.subscriber(HEALTH) as newcomer:
            wait_for(lambda: (HEALTH, True, WILL) in newcomer.raw(), "the retained will")


def test_a_line_that_is_back_within_the_will_delay_causes_no_offline(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with (
        running(mosquitto),
        proxied(mosquitto.port) as proxy,
        mosquitto.subscriber(HEALTH) as heard,
        uplink(settings_for(proxy.port, will_delay_s=5)) as up,
    ):
        up.publisher.post(HEALTH, '{"status":"normal"}')
        up.thread.start()
        for n in range(3):
            wait_for(lambda n=n: len(heard.messages(HEALTH)) > n, "a birth at each connection")
            proxy.cut()
        wait_for(lambda: len(heard.messages(HEALTH)) >= 4, "the last birth")
        time.sleep(6.0)  # longer than the delay
        assert WILL not in heard.messages(HEALTH)


def test_a_second_client_with_our_name_leaves_our_birth_as_the_last_word(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), mosquitto.subscriber(HEALTH) as heard, uplink(settings_for(mosquitto.port)) as up:
        up.publisher.post(HEALTH, '{"status":"normal"}')
        up.thread.start()
        wait_for(up.up, "a connection")
        mosquitto.publish("hello", "hello", "-i", "motekeep-quarry-east-gate")  # takes the session over, then leaves
        wait_for(lambda: up.publisher.facts(up.clock.now()).reconnects == 1, "to be back")
        up.reading()
        up.publisher.wake()
        up.all_delivered()
        time.sleep(2.0)
        assert heard.messages(HEALTH)[-1] == '{"status":"normal"}'


def test_what_the_broker_announces_is_kept_to(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path, ["max_inflight_messages 7", "max_packet_size 30000"])
    with running(mosquitto):
        broker = MqttBroker(settings_for(mosquitto.port), SystemClock(trust_rtc=True))
        broker.start()
        event = take(broker, Connected)
        broker.stop(None, 1.0)
    assert event == Connected(7, 30_000)


def test_the_broker_is_restarted_by_kill_while_rows_flow_and_nothing_is_missing(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto), uplink(settings_for(mosquitto.port), late_rate=20.0) as up:
        up.backlog(6000)
        up.thread.start()
        for _ in range(3):
            done = len(up.delivered())
            wait_for(lambda done=done: len(up.delivered()) > done, "some rows to pass")
            mosquitto.kill()
            mosquitto.start()
        assert len(up.delivered()) < 6000
        with mosquitto.subscriber(LATE) as heard:
            up.all_delivered()  # so says the broker, whose memory died three times: an archive asks for what it lacks
            mosquitto.publish(TOPICS.resend, '{"sensor":"north","from_seq":1,"to_seq":6000}')
            wait_for(lambda: set(heard.seqs(LATE)) >= set(range(1, 6001)), "the resend", 60.0)
