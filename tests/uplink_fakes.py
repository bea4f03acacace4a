"""A journal in memory and a simulated broker on the fake clock: both small, both keep their port's contract.

The broker answers, refuses, swallows or hangs up as a rule says, after a delay and at a byte rate. Nothing waits for
real: a publisher that runs in the test's own thread lives through hours in milliseconds.
"""

import heapq
import itertools
import json
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from threading import Event
from typing import Literal

from clocks import FakeClock
from motekeep.edges.ports import (
    Acknowledged,
    BrokerEvent,
    Connected,
    Disconnected,
    NoticeRow,
    Received,
    Row,
)
from motekeep.errors import StoreError
from motekeep.loops.publisher import Publisher, PublisherSettings
from motekeep.loops.rows import RowSettings
from motekeep.message.topics import Topics

TOPICS = Topics("motekeep", "quarry", "east-gate")
State = Literal["waiting", "sent", "delivered", "aside", "taken"]


class FakeJournal:
    """The `JournalReader` port over lists. `broken` makes every call fail."""

    def __init__(self) -> None:
        self.rows: dict[str, dict[int, Row]] = {}
        self.states: dict[tuple[str, int], State] = {}
        self.notice_rows: list[NoticeRow] = []
        self.broken = False
        self.calls = 0

    def add(self, row: Row) -> Row:
        self.rows.setdefault(row.sensor, {})[row.seq] = row
        self.states[row.sensor, row.seq] = "waiting"
        return row

    def notice(self, topic: str, body: str) -> None:
        self.notice_rows.append(NoticeRow(len(self.notice_rows) + 1, topic, body))

    def in_state(self, state: State, sensor: str = "north") -> list[int]:
        return [seq for (name, seq), s in sorted(self.states.items()) if s == state and name == sensor]

    def waiting(self, sensor: str, after_seq: int, limit: int) -> list[Row]:
        self._called()
        found = (
            r for s, r in self.rows.get(sensor, {}).items() if s > after_seq and self.states[sensor, s] == "waiting"
        )
        return list(itertools.islice(found, limit))

    def notices(self, after_id: int, limit: int) -> list[NoticeRow]:
        self._called()
        return [n for n in self.notice_rows if n.id > after_id][:limit]

    def stored(self, sensor: str, from_seq: int, to_seq: int, limit: int) -> list[Row]:
        self._called()
        found = (r for s, r in self.rows.get(sensor, {}).items() if from_seq <= s <= to_seq)
        return list(itertools.islice(found, limit))

    def mark_delivered(self, rows: Sequence[Row]) -> None:
        self._mark(rows, "delivered")

    def mark_sent(self, rows: Sequence[Row]) -> None:
        self._mark(rows, "sent")

    def mark_aside(self, rows: Sequence[Row]) -> None:
        self._mark(rows, "aside")

    def mark_taken(self, sensor: str, through_seq: int) -> None:
        self._mark([r for s, r in self.rows.get(sensor, {}).items() if s <= through_seq], "taken")

    def mark_notices(self, rows: Sequence[NoticeRow]) -> None:
        self.notice_rows = [n for n in self.notice_rows if n not in rows]

    def _mark(self, rows: Sequence[Row], state: State) -> None:
        for row in rows:
            self.states[row.sensor, row.seq] = state

    def _called(self) -> None:
        self.calls += 1
        if self.broken:
            raise StoreError("reading the journal", "the disk is gone", "put it back")


@dataclass(frozen=True, slots=True)
class Sent:
    """A message as it reached the broker, and when."""

    topic: str
    body: str
    retain: bool
    at_s: float

    @property
    def seqs(self) -> list[int]:
        return seqs_of(self.topic, self.body)


def seqs_of(topic: str, body: str) -> list[int]:
    """The sequence numbers in a reading or late message."""
    document = json.loads(body)
    return [r["seq"] for r in document["readings"]] if "/late/" in topic else [document["seq"]]


# What the broker makes of a message: a reason code, no answer at all, or the end of the connection.
Verdict = int | Literal["swallow", "hang up"]


class FakeBroker:
    """The `Broker` port. `rule` judges each message as it arrives."""

    def __init__(self, clock: FakeClock) -> None:
        self.rule: Callable[[str, str], Verdict] = lambda _topic, _body: 0
        self.latency_s = 0.05
        self.bytes_s = 1e9
        self.receive_maximum = 65_535
        self.maximum_packet: int | None = None
        self.reconnect_s = 2.0
        self.hangs_up_on_refusal = False  # as mosquitto 2.0.11 does
        self.accepted: list[Sent] = []
        self.arrived: list[Sent] = []
        self.farewell: tuple[str, str] | None = None
        self.connections = 0
        self.most_in_flight = 0
        self.reachable = True
        self._clock = clock
        self._mids = itertools.count(1)
        self._order = itertools.count()
        self._coming: list[tuple[float, int, int, BrokerEvent]] = []
        self._ready: deque[BrokerEvent | None] = deque()
        self._in_flight = 0
        self._free_s = 0.0
        self._up = False
        self._stirred = Event()

    def start(self) -> None:
        self._later(0.1, Connected(0, None))

    def event(self, timeout_s: float) -> BrokerEvent | None:
        end_s = self._clock.now().boot_s + timeout_s
        while True:
            if self._ready:
                return self._ready.popleft()
            now_s = self._clock.now().boot_s
            next_s = self._coming[0][0] if self._coming else float("inf")
            if next_s <= now_s:
                self._arrive()
            elif now_s >= end_s:
                return None
            else:
                self._stirred.clear()
                self._clock.wait(self._stirred, min(next_s, end_s) - now_s)

    def wake(self) -> None:
        self._put(None)

    def _put(self, event: BrokerEvent | None) -> None:
        self._ready.append(event)
        self._stirred.set()

    def publish(self, topic: str, body: str, *, retain: bool = False) -> int | None:
        if not self._up:
            return None
        now_s = self._clock.now().boot_s
        mid = next(self._mids)
        self._free_s = max(self._free_s, now_s) + len(body) / self.bytes_s
        self._in_flight += 1
        self.most_in_flight = max(self.most_in_flight, self._in_flight)
        arrives_s = self._free_s + self.latency_s / 2
        self.arrived.append(Sent(topic, body, retain, arrives_s))
        verdict = self.rule(topic, body)
        if verdict == "hang up":
            self._later(arrives_s + self.latency_s / 2 - now_s, Disconnected("the broker hung up"))
        elif verdict != "swallow":
            if verdict < 0x80:
                self.accepted.append(self.arrived[-1])
            refusal = None if verdict < 0x80 else f"code {verdict}"
            self._later(arrives_s + self.latency_s / 2 - now_s, Acknowledged(mid, refusal, verdict))
            if refusal and self.hangs_up_on_refusal:
                self._later(arrives_s + self.latency_s / 2 - now_s, Disconnected("the connection broke"))
        return mid

    def say(self, topic: str, payload: str, *, retained: bool = False) -> None:
        """A message to the device."""
        self._put(Received(topic, payload.encode(), retained))

    def drop(self, why: str) -> None:
        if self._up:
            self._break(why)

    def cut(self, why: str = "the line was cut", *, for_s: float | None = None) -> None:
        self._break(why, for_s)

    def stop(self, farewell: tuple[str, str] | None, seconds: float) -> bool:
        self.farewell = farewell
        self._clock.advance(0.0 if self._up else min(seconds, 0.1))
        return self._up

    def _break(self, why: str, for_s: float | None = None) -> None:
        self._up = False
        self._coming.clear()
        self._in_flight = 0
        self._put(Disconnected(why))
        self._later(self.reconnect_s if for_s is None else for_s, Connected(0, None))

    def _later(self, seconds: float, event: BrokerEvent) -> None:
        heapq.heappush(self._coming, (self._clock.now().boot_s + seconds, next(self._order), self.connections, event))

    def _arrive(self) -> None:
        _, _, connection, event = heapq.heappop(self._coming)
        match event:
            case Connected():
                self._up = True
                self.connections += 1
                self._free_s = 0.0
                self._put(Connected(self.receive_maximum, self.maximum_packet))
            case Disconnected() if connection == self.connections:
                self._break(event.why)
            case Acknowledged() if connection == self.connections and self._up:
                self._in_flight -= 1
                self._put(event)


class Gateway:
    """A publisher with a fake journal, broker and clock, and the readings of a made-up sensor."""

    def __init__(
        self, sensors: Sequence[str] = ("north",), *, window: int = 20, boot_s: float = 100_000.0, **rows: object
    ) -> None:
        self.clock = FakeClock(boot_s=boot_s)
        self.journal = FakeJournal()
        self.broker = FakeBroker(self.clock)
        self.stop = Event()
        self.settings = PublisherSettings(RowSettings(interval_s=60.0), window=window)
        if rows:
            self.settings = replace(self.settings, rows=replace(self.settings.rows, **rows))  # type: ignore[arg-type]
        self.publisher = Publisher(
            self.settings,
            TOPICS,
            sensors,
            journal=self.journal,
            broker=self.broker,
            clock=self.clock,
            stop=self.stop,
            farewell=lambda at: f'{{"status":"offline","at":{at.utc}}}',
        )
        self._seqs = {sensor: itertools.count(1) for sensor in sensors}

    def reading(self, sensor: str = "north", *, age_s: float = 0.0, pad: int = 0, clock: str = "synced") -> Row:
        """A committed reading whose interval ended `age_s` ago."""
        seq, now = next(self._seqs[sensor]), self.clock.now()
        body = json.dumps({"sensor": sensor, "seq": seq, "pad": "x" * pad})
        row = Row(sensor, seq, seq, now.boot_id, now.boot_s - age_s - 60.0, 60.0, clock, body)
        return self.journal.add(row)

    def backlog(self, count: int, sensor: str = "north", pad: int = 0) -> None:
        """So many readings of the past, a minute apart, the last one ten minutes old."""
        for i in range(count):
            self.reading(sensor, age_s=600.0 + 60.0 * (count - i), pad=pad)

    def minute_by_minute(self, minutes: int, sensor: str = "north", pad: int = 0) -> None:
        """From now on a fresh reading a minute, with its wake."""
        for minute in range(minutes):

            def commit() -> None:
                self.reading(sensor, pad=pad)
                self.publisher.wake()

            self.clock.after(60.0 * minute + 1.0, commit)

    def run(self, seconds: float, *, until_settled: bool = False) -> None:
        """Let the publisher run for so long, or until no row waits any more, then stop it."""

        def end() -> None:
            self.stop.set()
            self.publisher.wake()

        def look() -> None:
            if "waiting" in self.journal.states.values() or self.journal.notice_rows:
                self.clock.after(60.0, look)
            else:
                end()

        self.clock.after(seconds, end)
        if until_settled:
            self.clock.after(240.0, look)
        self.publisher.run()

    def accepted_on(self, topic: str) -> list[Sent]:
        return [sent for sent in self.broker.accepted if sent.topic == topic]

    def arrived_seqs(self, topic: str) -> list[int]:
        return [seq for sent in self.accepted_on(topic) for seq in sent.seqs]
