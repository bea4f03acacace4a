"""Journal, publisher and a real mosquitto together: what was committed arrives, whatever is killed meanwhile."""

import random
import sqlite3
import subprocess
import sys
import time
from pathlib import Path
from threading import Event, Thread

import pytest

from mosquitto import Mosquitto, Subscriber, running
from motekeep.edges.broker import MqttBroker
from motekeep.edges.clock import SystemClock
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.login import BrokerSettings
from motekeep.edges.ports import Batch, NewReading, Notice
from motekeep.loops.inbox import down_filters
from motekeep.loops.publisher import Publisher, PublisherSettings
from motekeep.loops.rows import RowSettings
from uplink_fakes import TOPICS

pytestmark = pytest.mark.whole

SENSORS = ("north", "south")
PATIENCE_S = 60.0


class Life:
    """One life of a small gateway: a journal, a publisher in its thread, readings on demand. Every fourth batch is of
    the past, so both ways out are used."""

    def __init__(self, folder: Path, port: int, receipt: str = "puback") -> None:
        self.clock = SystemClock(trust_rtc=True)
        self.journal = Journal(JournalSettings(folder / "journal.db", TOPICS), self.clock)
        self.stop = Event()
        settings = BrokerSettings(
            "127.0.0.1", port, "motekeep-life", (TOPICS.health, "{}"), down_filters(TOPICS), backoff_s=(0.05, 0.2)
        )
        self.publisher = Publisher(
            PublisherSettings(RowSettings(60.0, receipt=receipt, late_rate=0.0)),
            TOPICS,
            SENSORS,
            journal=self.journal.reader(),
            broker=MqttBroker(settings, self.clock),
            clock=self.clock,
            stop=self.stop,
            farewell=lambda _: '{"status":"offline"}',
        )
        self.thread = Thread(target=self.publisher.run, daemon=True)
        self.thread.start()

    def commit(self) -> int:
        """One batch, durable when this returns; its sequence number, the same for all sensors."""
        now, rows, seq = self.clock.now(), [], 0
        for sensor in SENSORS:
            seq = self.journal.next_seq(sensor)
            past_s = 0.0 if seq % 4 else 3600.0
            body = f'{{"sensor":"{sensor}","seq":{seq},"pad":"{"x" * 500}"}}'
            start = now.utc - past_s - 60.0
            rows.append(
                NewReading(sensor, seq, now.boot_id, now.boot_s - past_s - 60.0, start, 60.0, "synced", 2, body)
            )
        self.journal.commit(Batch(rows, [Notice(TOPICS.finding, str(seq))]), now)
        self.publisher.wake()
        return seq

    def settle(self) -> None:
        deadline = time.monotonic() + PATIENCE_S
        while self.journal.state().waiting:
            assert time.monotonic() < deadline, f"{self.journal.state().waiting} readings still wait"
            time.sleep(0.02)

    def end(self) -> None:
        self.stop.set()
        self.publisher.wake()
        self.thread.join(5.0)
        assert not self.thread.is_alive()
        self.journal.close()


def live_until_killed(folder: str, port: str) -> None:
    """What the child process does: commit as fast as it can and say so."""
    life = Life(Path(folder), int(port))
    while True:
        print(life.commit(), flush=True)


def heard_of(heard: Subscriber, sensor: str) -> list[int]:
    return heard.seqs(TOPICS.reading(sensor)) + heard.seqs(TOPICS.late(sensor))


def wait_for_all(heard: Subscriber, last: int) -> None:
    deadline = time.monotonic() + PATIENCE_S
    while any(set(heard_of(heard, sensor)) < set(range(1, last + 1)) for sensor in SENSORS):
        assert time.monotonic() < deadline, "readings that were committed did not arrive"
        time.sleep(0.1)


def kill_again_and_again(tmp_path: Path, times: int) -> None:
    mosquitto = Mosquitto(tmp_path)
    chance = random.Random(times)
    code = (
        f"import sys; sys.path[:0] = {sys.path!r}; import test_uplink_journal as t; t.live_until_killed(*sys.argv[1:])"
    )
    last = 0
    with running(mosquitto), mosquitto.subscriber() as heard:
        for _ in range(times):
            child = subprocess.Popen(
                [sys.executable, "-c", code, str(tmp_path), str(mosquitto.port)],
                stdout=subprocess.PIPE,
                stderr=subprocess.DEVNULL,
                text=True,
            )
            assert child.stdout is not None
            while not (line := child.stdout.readline().strip()).isdigit():  # its log goes the same way
                assert child.poll() is None, "the child did not start"
            time.sleep(chance.uniform(0.0, 0.5))
            child.kill()
            committed = [int(line), *(int(said) for said in child.stdout.read().splitlines() if said.isdigit())][-1]
            child.wait(10.0)
            assert committed > last  # numbers are never used again
            last = committed
        life = Life(tmp_path, mosquitto.port)
        last = max(life.journal.next_seq(sensor) - 1 for sensor in SENSORS)
        life.settle()
        wait_for_all(heard, last)
        deadline = time.monotonic() + PATIENCE_S
        while len(set(heard.messages(TOPICS.finding))) < last:  # they have a smaller part of the window
            assert time.monotonic() < deadline, "findings that were committed did not arrive"
            time.sleep(0.1)
        life.end()
        for sensor in SENSORS:
            assert max(heard_of(heard, sensor)) == last
        assert {int(n) for n in heard.messages(TOPICS.finding)} == set(range(1, last + 1))


def test_killed_six_times_every_committed_reading_and_finding_arrives(tmp_path: Path) -> None:
    kill_again_and_again(tmp_path, 6)


@pytest.mark.long
def test_killed_fifty_times_every_committed_reading_and_finding_arrives(tmp_path: Path) -> None:
    kill_again_and_again(tmp_path, 50)


def test_an_hour_without_broker_arrives_whole_oldest_first_and_only_once(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    life = Life(tmp_path, mosquitto.port)
    for _ in range(60):
        life.commit()
    with running(mosquitto), mosquitto.subscriber() as heard:
        life.settle()
        wait_for_all(heard, 60)
        life.end()
        for sensor in SENSORS:
            late = heard.seqs(TOPICS.late(sensor))
            assert late == sorted(late)
            assert sorted(heard_of(heard, sensor)) == list(range(1, 61))
        # the marks were written: a second life has nothing to send
        again = Life(tmp_path, mosquitto.port)
        time.sleep(1.0)
        assert again.journal.state().waiting == 0
        again.end()
        assert len(heard_of(heard, "north")) == 60


def test_with_receipt_taken_the_archive_has_the_last_word_and_its_gaps_are_filled(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    with running(mosquitto):
        life = Life(tmp_path, mosquitto.port, "taken")
        for _ in range(40):
            life.commit()
        life.settle()
        with mosquitto.subscriber() as heard:  # an archive that came late: it asks for what it lacks
            mosquitto.publish(TOPICS.resend, '{"sensor":"north","from_seq":1,"to_seq":40}')
            mosquitto.publish(TOPICS.resend, '{"sensor":"south","from_seq":1,"to_seq":40}')
            wait_for_all(heard, 40)
            mosquitto.publish(TOPICS.taken("north"), '{"through_seq":40}', "-r")
            mosquitto.publish(TOPICS.taken("north"), '{"through_seq":41}')  # beyond us: refused
            deadline = time.monotonic() + PATIENCE_S
            while life.publisher.facts(life.clock.now()).bad_requests < 1:
                assert time.monotonic() < deadline
                time.sleep(0.05)
        life.end()
    database = sqlite3.connect(tmp_path / "journal.db")
    assert not database.execute("SELECT 1 FROM sensors WHERE sensor = 'north' AND sent != ''").fetchall()
    assert database.execute("SELECT sent FROM sensors WHERE sensor = 'south'").fetchone() == ("1-40",)
