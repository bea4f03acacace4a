"""Readings of the journal that were made before the clock was trusted, stamped afterwards.

Owns which of them can be stamped by now, the rewriting of their rows, and the amendments for those that had gone out.
The arithmetic of time is `message/restamp.py`.
"""

import sqlite3
from collections.abc import Callable
from dataclasses import dataclass, replace

import structlog

from motekeep.edges.journal_boots import Boots
from motekeep.edges.journal_ledger import Ledger
from motekeep.edges.journal_room import count_lost, readable
from motekeep.edges.journal_schema import digest, transaction
from motekeep.edges.journal_shapes import Held
from motekeep.edges.ports import NewReading, Notice
from motekeep.instant import Instant, from_rfc3339
from motekeep.message.documents import Clock, ReadingDocument
from motekeep.message.restamp import Bounds, bounds, restamp_amendment, restamped
from motekeep.message.topics import Topics

log = structlog.get_logger()

ROWS_A_TRANSACTION = 200
# Some 0.3 s here; a boot of months without a clock is stamped over many commits, which must stay short.
ROWS_A_CALL = 2000


@dataclass(frozen=True, slots=True)
class Stamp:
    """How the readings of one boot are stamped."""

    clock: Clock
    offset: float
    between: Bounds | None = None


@dataclass(slots=True)
class _Shift:
    """Neighbouring readings of a sensor that had gone out and move by the same time."""

    sensor: str
    from_seq: int
    to_seq: int
    clock: Clock
    shift_s: float


class Restamper:
    """`clock_wait_s`: readings older than that may have gone out before."""

    def __init__(self, ledger: Ledger, boots: Boots, topics: Topics, clock_wait_s: float) -> None:
        self._ledger = ledger
        self._boots = boots
        self._topics = topics
        self._clock_wait_s = clock_wait_s
        # whether the file may have something to stamp; looked up once, then known
        self.due = True

    def stored(self, connection: sqlite3.Connection, at: Instant, make_room: Callable[[int], bool]) -> list[Notice]:
        """Stamp up to ROWS_A_CALL readings of the file; the amendments, stored with them. Raises sqlite3.Error."""
        notices: list[Notice] = []
        left = ROWS_A_CALL
        waiting = [n for (n,) in connection.execute("SELECT DISTINCT boot FROM readings WHERE clock = 'unsynced'")]
        # this boot first: its readings are held back for the clock
        for number in sorted(waiting, reverse=True):
            stamp = self._stamp(number, at)
            while stamp is not None and left > 0:
                make_room(ROWS_A_TRANSACTION * 150)
                with self._ledger.offer_lock:
                    done, told = self._some(connection, number, stamp, at)
                notices += told
                left -= done
                if done < ROWS_A_TRANSACTION:
                    break
        if left > 0:
            self.due = False
        return notices

    def held(self, at: Instant) -> list[Notice]:
        """The same for readings of this boot that only memory has."""
        with self._ledger.offer_lock:
            shifts: list[_Shift] = []
            everything = [
                replace(held, readings=tuple(self._held_reading(r, shifts, at) for r in held.readings))
                for held in self._ledger.all_held()
            ]
            self._ledger.replace_held(everything)
            notices = self._amendments(shifts)
            rows = self._ledger.number_notices((n.topic, n.body) for n in notices)
        if rows:
            self._ledger.hold(Held((), rows))
        return notices

    def _held_reading(self, reading: NewReading, shifts: list[_Shift], at: Instant) -> NewReading:
        if reading.clock != "unsynced" or reading.boot_id != at.boot_id:
            return reading
        document = restamped(ReadingDocument.model_validate_json(reading.body), "corrected", at.offset)
        start = from_rfc3339(document.start)
        self._note(shifts, document, start - reading.start, reading.boot_id, at)
        return replace(reading, clock=document.clock, start=start, body=document.json_text())

    def _stamp(self, number: int, at: Instant) -> Stamp | None:
        """None while nothing is known of that boot's clock."""
        boots, spans = self._boots.spans()
        index = next((i for i, b in enumerate(boots) if b.number == number), None)
        if index is None:
            return None
        if index == len(boots) - 1:
            return Stamp("corrected", at.offset)
        if (offset := boots[index].offset) is not None:
            return Stamp("corrected", offset)
        between = bounds(spans, index)
        return None if between is None else Stamp("bounded", between.middle, between)

    def _some(self, connection: sqlite3.Connection, number: int, stamp: Stamp, at: Instant) -> tuple[int, list[Notice]]:
        """One transaction: how many readings it saw, and the amendments it stored."""
        rows = connection.execute(
            "SELECT r.id, r.sensor, r.seq, r.from_seq, r.body, r.crc, r.start, b.boot_id"
            " FROM readings AS r JOIN boots AS b ON b.number = r.boot"
            " WHERE r.clock = 'unsynced' AND r.boot = ? ORDER BY r.id LIMIT ?",
            (number, ROWS_A_TRANSACTION),
        ).fetchall()
        shifts: list[_Shift] = []
        with transaction(connection):
            for id_, sensor, seq, from_seq, body, crc, start, boot_id in rows:
                document = readable(digest(sensor, seq, from_seq, "unsynced", body), crc, body)
                if document is None:
                    connection.execute("DELETE FROM readings WHERE id = ?", (id_,))
                    count_lost(connection, "damaged", 1)
                    self._ledger.counted_lost("damaged", 1)
                    continue
                document = restamped(document, stamp.clock, stamp.offset, stamp.between)
                text, moved = document.json_text(), from_rfc3339(document.start)
                connection.execute(
                    "UPDATE readings SET clock = ?, start = ?, crc = ?, body = ? WHERE id = ?",
                    (stamp.clock, moved, digest(sensor, seq, from_seq, stamp.clock, text), text, id_),
                )
                self._note(shifts, document, moved - start, boot_id, at)
            notices = self._amendments(shifts)
            numbered = self._ledger.number_notices((n.topic, n.body) for n in notices)
            connection.executemany(
                "INSERT INTO notices (id, topic, body) VALUES (?, ?, ?)", [(n.id, n.topic, n.body) for n in numbered]
            )
        if rows:
            log.info("journal.readings_restamped", readings=len(rows), clock=stamp.clock, amendments=len(notices))
        return len(rows), notices

    def _note(self, shifts: list[_Shift], document: ReadingDocument, shift_s: float, boot_id: str, at: Instant) -> None:
        """Add a reading to the shifts, if anybody may have it as it was."""
        from_seq, seq = document.from_seq or document.seq, document.seq
        state = self._ledger.state_of(document.sensor)
        out = seq <= state.offered or len(state.waiting.within(from_seq, seq)) < seq - from_seq + 1
        if not out and seq <= state.inherited:
            out = self._boots.waited_s(boot_id, at) >= self._clock_wait_s
        if not out:
            return
        for last in reversed(shifts):
            if last.sensor == document.sensor:
                if last.to_seq + 1 == from_seq and abs(last.shift_s - shift_s) < 0.05:
                    last.to_seq = seq
                    return
                break
        shifts.append(_Shift(document.sensor, from_seq, seq, document.clock, shift_s))

    def _amendments(self, shifts: list[_Shift]) -> list[Notice]:
        return [
            Notice(
                self._topics.amend(s.sensor),
                restamp_amendment(s.sensor, s.from_seq, s.to_seq, s.clock, s.shift_s).json_text(),
            )
            for s in shifts
        ]
