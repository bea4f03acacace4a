"""What the journal knows in memory, shared by the writer's and the publisher's thread.

Owns, under one lock: which numbers wait or were sent, marks that are not written yet, what a failing store holds back,
what was lost. Must not know SQL or files. The publisher asks it first, so that a reading marked a moment ago is not
given again, and an empty queue costs no query.
"""

from collections import Counter, deque
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import replace
from threading import Lock

from motekeep.edges.journal_shapes import Changes, Glance, Held, SensorLine, SensorState
from motekeep.edges.ports import NewReading, NoticeRow, Row
from motekeep.edges.spans import Spans

# What a failing store holds back in memory, all sensors together: over 8 h of four sensors at one a minute, and a few
# MB of a gateway that has 50 for us. Beyond, the oldest go and are counted as `unstored`.
MAX_HELD_READINGS = 2000
MAX_HELD_NOTICES = 500
# The state of a sensor is written with every commit. Ranges come from outages and refusals; past this many the smallest
# holes are closed, which sends some readings twice.
MAX_RANGES = 64


class Ledger:
    """Safe from any thread, but `hold`, `changes` and what follows them belong to the writer's."""

    def __init__(self) -> None:
        self._lock = Lock()
        # held while readings are shown to the publisher, and while unsynced ones are restamped: else one could go out
        # unsynced at the very moment it is stamped, and no amendment would follow
        self.offer_lock = Lock()
        self._sensors: dict[str, SensorState] = {}
        self._held: deque[Held] = deque()
        self._kept: dict[str, str] = {}
        self._lost: Counter[str] = Counter()
        self._lost_unsaved: Counter[str] = Counter()
        self._notices_done: set[int] = set()
        self._next_notice = 1
        self._marks = 0
        # grows when the file was replaced: readers then open it anew
        self.generation = 0
        # what a reader met that the writer must look into
        self.damage_seen = False
        self.reading_fails: str | None = None

    # -- numbers ------------------------------------------------------------------------------------------------

    def load(self, sensors: Mapping[str, tuple[int, Spans, Spans]], lost: Mapping[str, int], next_notice: int) -> None:
        """What the file says, at the first opening; that may be after readings were held in memory for some time."""
        with self._lock:
            for name, (last, waiting, sent) in sensors.items():
                state = self._of(name)
                state.used, state.stored = max(state.used, last), max(state.stored, last)
                state.inherited = max(state.inherited, last)
                state.waiting, state.sent = state.waiting.union(waiting), state.sent.union(sent)
            self._lost += Counter(lost)
            self._next_notice = max(self._next_notice, next_notice)

    def used(self, sensor: str) -> int:
        with self._lock:
            return self._of(sensor).used

    def all_used(self) -> dict[str, int]:
        with self._lock:
            return {name: state.used for name, state in self._sensors.items()}

    def skip_to(self, sensor: str, used: int) -> None:
        """Numbers up to `used` may have been given out by a process that could not store them."""
        with self._lock:
            state = self._of(sensor)
            state.used = max(state.used, used)
            state.stored = state.inherited = state.used
            state.changes += 1

    def expect(self, readings: Iterable[NewReading]) -> None:
        """Raises ValueError when a reading does not carry its sensor's next number: a bug of the caller."""
        following: dict[str, int] = {}
        with self._lock:
            for reading in readings:
                due = following.get(reading.sensor, self._of(reading.sensor).used) + 1
                if reading.seq != due:
                    raise ValueError(f"reading {reading.seq} of {reading.sensor!r} is out of turn, {due} is next")
                following[reading.sensor] = due

    def number_notices(self, topics_and_bodies: Iterable[tuple[str, str]]) -> tuple[NoticeRow, ...]:
        with self._lock:
            rows = []
            for topic, body in topics_and_bodies:
                rows.append(NoticeRow(self._next_notice, topic, body))
                self._next_notice += 1
            return tuple(rows)

    # -- a failing store ----------------------------------------------------------------------------------------

    def hold(self, batch: Held) -> None:
        """Keep in memory what could not be stored; the publisher sees it from now on."""
        with self._lock:
            for reading in batch.readings:
                state = self._of(reading.sensor)
                state.used = reading.seq
                state.waiting.add(reading.seq, reading.seq)
                state.changes += 1
            if batch.readings or batch.notices or batch.services:
                self._held.append(batch)
            while self._too_much():
                self._forget(self._held.popleft())

    def keep(self, values: Mapping[str, str]) -> None:
        with self._lock:
            self._kept.update(values)

    def kept(self, name: str) -> str | None:
        with self._lock:
            return self._kept.get(name)

    def held_readings(self) -> int:
        with self._lock:
            return sum(len(h.readings) for h in self._held)

    def all_held(self) -> list[Held]:
        with self._lock:
            return list(self._held)

    def oldest_held(self, bytes_: int) -> list[Held]:
        """The oldest ones held back, about that much of them; at least one unless there is none."""
        chosen: list[Held] = []
        size = 0
        with self._lock:
            for held in self._held:
                size += held.bytes
                if chosen and size > bytes_:
                    break
                chosen.append(held)
        return chosen

    def replace_held(self, held: Sequence[Held]) -> None:
        """The same ones with other bodies, after a restamp."""
        with self._lock:
            self._held = deque(held)

    def _too_much(self) -> bool:
        return (
            sum(len(h.readings) for h in self._held) > MAX_HELD_READINGS
            or sum(len(h.notices) for h in self._held) > MAX_HELD_NOTICES
        )

    def _forget(self, held: Held) -> None:
        for reading in held.readings:
            state = self._of(reading.sensor)
            state.waiting.remove(reading.seq, reading.seq)
            state.sent.remove(reading.seq, reading.seq)
            state.stored = max(state.stored, reading.seq)  # there is nothing of it to store any more
        self._count("unstored", len(held.readings))
        self._count("notices", len([n for n in held.notices if n.id not in self._notices_done]))
        self._notices_done -= {n.id for n in held.notices}

    # -- to and from the file -----------------------------------------------------------------------------------

    def changes(self, adding: Sequence[Held]) -> Changes:
        """What goes into the transaction that stores `adding`, which follow all that is stored already."""
        with self._lock:
            ends: dict[str, int] = {}
            for reading in (r for held in adding for r in held.readings):
                ends[reading.sensor] = reading.seq
            lines = []
            for name, state in self._sensors.items():
                last = ends.get(name, state.stored)
                if name not in ends and state.changes == state.saved:
                    continue
                fresh = Spans([(state.used + 1, last)] if last > state.used else [])
                waiting, sent = state.waiting.within(1, last).union(fresh), state.sent.within(1, last)
                waiting.coarsen(MAX_RANGES)
                sent.coarsen(MAX_RANGES)
                lines.append(SensorLine(name, last, str(waiting), str(sent), state.changes))
            return Changes(
                tuple(lines), dict(self._kept), dict(self._lost_unsaved), frozenset(self._notices_done), self._marks
            )

    def settle(self, changes: Changes, added: Sequence[Held]) -> None:
        """That transaction is durable: `added` are in the file and visible; what changed since is still to be
        written.
        """
        with self._lock:
            for line in changes.sensors:
                state = self._of(line.sensor)
                if line.last_seq > state.used:
                    state.waiting.add(state.used + 1, line.last_seq)
                    state.used = line.last_seq
                state.stored = max(state.stored, line.last_seq)
                state.saved = line.changes
            for held in added:
                if self._held and self._held[0] is held:
                    self._held.popleft()
            for name, value in changes.kept.items():
                if self._kept.get(name) == value:
                    del self._kept[name]
            self._lost_unsaved.subtract(changes.lost)
            self._lost_unsaved += Counter()  # drops what fell to zero
            self._notices_done -= changes.notices_done
            self._marks -= changes.marks

    def stored_after_all(self, last: Mapping[str, int]) -> None:
        """The file, opened again, has readings up to `last`: a commit that seemed to fail had become durable."""
        with self._lock:
            for name, seq in last.items():
                self._of(name).stored = max(self._of(name).stored, seq)
            # one without readings may be stored or not: storing a notice again is harmless, it has its number
            while self._held and self._held[0].readings:
                if any(r.seq > self._of(r.sensor).stored for r in self._held[0].readings):
                    break
                self._held.popleft()

    def restrict(self, covered: Mapping[str, Spans]) -> None:
        """The file was rescued: only `covered` numbers are left in it. Waiting ones that are not are lost, and
        counted.
        """
        with self._lock:
            for name, state in self._sensors.items():
                there = covered.get(name, Spans())
                for spans in (state.waiting, state.sent):
                    for low, high in spans.within(1, state.stored).without(there):
                        self._count("damaged", spans.remove(low, high))
                state.changes += 1

    # -- the publisher ------------------------------------------------------------------------------------------

    def glance(self, sensor: str, after_seq: int) -> Glance:
        with self._lock:
            state = self._sensors.get(sensor)
            if state is None or not state.waiting:
                return Glance((), ())
            ranges = tuple(state.waiting.within(after_seq + 1, state.stored))
            held = tuple(
                r
                for h in self._held
                for r in h.readings
                if r.sensor == sensor and after_seq < r.seq and r.seq > state.stored and r.seq in state.waiting
            )
            return Glance(ranges, held)

    def held_between(self, sensor: str, from_seq: int, to_seq: int) -> list[NewReading]:
        with self._lock:
            return [
                r
                for h in self._held
                for r in h.readings
                if r.sensor == sensor and from_seq <= r.seq <= to_seq and r.seq > self._of(sensor).stored
            ]

    def held_notices(self, after_id: int) -> list[NoticeRow]:
        with self._lock:
            return [n for h in self._held for n in h.notices if n.id > after_id and n.id not in self._notices_done]

    def done_notices(self) -> frozenset[int]:
        with self._lock:
            return frozenset(self._notices_done)

    def offered(self, rows: Iterable[Row]) -> None:
        with self._lock:
            for row in rows:
                if row.clock == "unsynced":
                    self._of(row.sensor).offered = max(self._of(row.sensor).offered, row.seq)

    def delivered(self, rows: Iterable[Row]) -> None:
        with self._lock:
            for sensor, low, high in _stretches(rows):
                self._mark(sensor, low, high)

    def sent(self, rows: Iterable[Row]) -> None:
        with self._lock:
            for sensor, low, high in _stretches(rows):
                waiting = self._of(sensor).waiting.within(low, high)
                if self._mark(sensor, low, high):
                    for span in waiting:
                        self._of(sensor).sent.add(*span)

    def aside(self, rows: Iterable[Row], kind: str) -> None:
        with self._lock:
            for row in rows:
                self._count(kind, 1 if self._mark(row.sensor, row.from_seq, row.seq) else 0)

    def taken(self, sensor: str, through_seq: int) -> None:
        with self._lock:
            state = self._sensors.get(sensor)
            if state is None:
                return
            through = min(through_seq, state.used)
            self._mark(sensor, 1, through)

    def notices_marked(self, ids: Iterable[int]) -> None:
        with self._lock:
            fresh = set(ids) - self._notices_done
            self._notices_done |= fresh
            self._marks += len(fresh)

    def pending_marks(self) -> int:
        with self._lock:
            return self._marks

    def _mark(self, sensor: str, low: int, high: int) -> int:
        state = self._of(sensor)
        # both, whichever it was: a reading sent twice may be in either
        gone = state.waiting.remove(low, high) + state.sent.remove(low, high)
        if gone:
            state.changes += 1
            self._marks += gone
        return gone

    # -- counting -----------------------------------------------------------------------------------------------

    def undelivered(self, sensor: str) -> Spans:
        """What waits for the broker or for an archive's word: nothing of it may be deleted."""
        with self._lock:
            state = self._of(sensor)
            return state.waiting.union(state.sent)

    def state_of(self, sensor: str) -> SensorState:
        """A copy, for reading."""
        with self._lock:
            state = self._of(sensor)
            return replace(state, waiting=state.waiting.copy(), sent=state.sent.copy())

    def sensors(self) -> list[str]:
        with self._lock:
            return list(self._sensors)

    def waiting(self) -> int:
        with self._lock:
            return sum(len(state.waiting) for state in self._sensors.values())

    def first_waiting(self) -> dict[str, int]:
        with self._lock:
            return {n: s.waiting.first for n, s in self._sensors.items() if s.waiting.first is not None}

    def lost(self) -> dict[str, int]:
        with self._lock:
            return dict(self._lost)

    def count_lost(self, kind: str, number: int) -> None:
        """A loss to be written with the next commit."""
        with self._lock:
            self._count(kind, number)

    def counted_lost(self, kind: str, number: int) -> None:
        """A loss that the file has already."""
        with self._lock:
            self._lost[kind] += number

    def _count(self, kind: str, number: int) -> None:
        if number:
            self._lost[kind] += number
            self._lost_unsaved[kind] += number

    def _of(self, sensor: str) -> SensorState:
        state = self._sensors.get(sensor)
        if state is None:
            state = self._sensors[sensor] = SensorState()
        return state


def _stretches(rows: Iterable[Row]) -> Iterator[tuple[str, int, int]]:
    """Neighbours as one: sensor, first and last number. A batch of a hundred is one stretch nearly always."""
    sensor, low, high = "", 0, 0
    for row in rows:
        if row.sensor == sensor and row.from_seq == high + 1:
            high = row.seq
            continue
        if sensor:
            yield sensor, low, high
        sensor, low, high = row.sensor, row.from_seq, row.seq
    if sensor:
        yield sensor, low, high
