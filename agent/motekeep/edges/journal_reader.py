"""The publisher's side of the journal: what waits for delivery, and the marks of what became of it.

Owns a connection of its own that can only read. Nothing here writes: marks go into the ledger, and with the next
commit into the file. Must not know topics of readings or the broker.
"""

import sqlite3
from collections.abc import Sequence
from pathlib import Path

import structlog

from motekeep.edges.journal_boots import Boots
from motekeep.edges.journal_ledger import Ledger
from motekeep.edges.journal_schema import (
    DamagedError,
    code_of,
    digest,
    is_damage,
    is_store_fault,
    open_reader,
    tolerant_text,
)
from motekeep.edges.journal_shapes import as_row
from motekeep.edges.ports import Clock, NoticeRow, Row

log = structlog.get_logger()

# The sensor is known and a boot's name is in memory: a backlog leaves only as fast as its text columns are read.
SELECT = (
    "SELECT seq, from_seq, boot, boot_s, seconds, clock, body, crc FROM readings"
    " WHERE seq BETWEEN ? AND ? AND sensor = ? ORDER BY seq LIMIT ?"
)
# the one reading that stands for number `seq` and later ones, if it was merged
COVERING = (
    "SELECT seq, from_seq, boot, boot_s, seconds, clock, body, crc FROM readings"
    " WHERE seq > ? AND sensor = ? ORDER BY seq LIMIT 1"
)


class Reader:
    """A `JournalReader`. One object a thread; it opens its connection in the thread that first asks."""

    def __init__(self, path: Path, ledger: Ledger, boots: Boots, clock: Clock, clock_wait_s: float) -> None:
        self._path = path
        self._ledger = ledger
        self._boots = boots
        self._clock = clock
        self._clock_wait_s = clock_wait_s
        self._connection: sqlite3.Connection | None = None
        self._generation = -1

    def waiting(self, sensor: str, after_seq: int, limit: int) -> list[Row]:
        """Rows that wait for delivery, in order of number, past `after_seq`.

        It stops at the first unsynced reading that still waits for the clock: what follows in the order must not
        overtake it. A reading whose text does not match its checksum is never given: it is counted as `damaged`."""
        with self._ledger.offer_lock:
            glance = self._ledger.glance(sensor, after_seq)
            rows: list[Row] = []
            for low, high in glance.ranges:
                if len(rows) >= limit:
                    break
                # a merged reading with a part delivered lies in two ranges
                start = max(low, rows[-1].seq + 1) if rows else low
                if start <= high:
                    rows += self._rows(sensor, start, high, limit - len(rows))
            rows += [as_row(r) for r in glance.held[: max(limit - len(rows), 0)]]
            released = self._released(rows)
            self._ledger.offered(released)
            return released

    def notices(self, after_id: int, limit: int) -> list[NoticeRow]:
        done = self._ledger.done_notices()
        held = self._ledger.held_notices(after_id)
        stored = self._query(
            "SELECT id, topic, body FROM notices WHERE id > ? ORDER BY id LIMIT ?", (after_id, limit + len(done))
        )
        rows = [NoticeRow(*row) for row in stored if row[0] not in done]
        known = {row.id for row in rows}
        return (rows + [n for n in held if n.id not in known])[:limit]

    def stored(self, sensor: str, from_seq: int, to_seq: int, limit: int) -> list[Row]:
        """Rows of a range of numbers whatever their state; the last may be a merged one that reaches past `to_seq`."""
        held = self._ledger.held_between(sensor, from_seq, to_seq)
        rows = self._rows(sensor, from_seq, to_seq, limit)
        return (rows + [as_row(r) for r in held])[:limit]

    def mark_delivered(self, rows: Sequence[Row]) -> None:
        self._ledger.delivered(rows)

    def mark_sent(self, rows: Sequence[Row]) -> None:
        self._ledger.sent(rows)

    def mark_aside(self, rows: Sequence[Row]) -> None:
        self._ledger.aside(rows, "set_aside")

    def mark_taken(self, sensor: str, through_seq: int) -> None:
        self._ledger.taken(sensor, through_seq)

    def mark_notices(self, rows: Sequence[NoticeRow]) -> None:
        self._ledger.notices_marked([row.id for row in rows])

    def pending_marks(self) -> int:
        return self._ledger.pending_marks()

    def close(self) -> None:
        """In the thread that used it."""
        if self._connection is not None:
            self._connection.close()
            self._connection = None

    def _released(self, rows: list[Row]) -> list[Row]:
        if all(row.clock != "unsynced" for row in rows):
            return rows
        at = self._clock.now()
        for index, row in enumerate(rows):
            if row.clock == "unsynced" and self._boots.waited_s(row.boot_id, at) < self._clock_wait_s:
                return rows[:index]
        return rows

    def _rows(self, sensor: str, low: int, high: int, limit: int) -> list[Row]:
        found = self._query(SELECT, (low, high, sensor, limit))
        if len(found) < limit and (not found or found[-1][0] != high):
            found += [row for row in self._query(COVERING, (high, sensor)) if row[1] <= high]
        rows, name_of = [], self._boots.name_of
        for seq, from_seq, boot, boot_s, seconds, clock, body, crc in found:
            row = Row(sensor, seq, from_seq, name_of(boot), boot_s, seconds, clock, body)
            if digest(sensor, seq, from_seq, clock, body) == crc:
                rows.append(row)
                continue
            log.error("journal.reading_damaged", sensor=sensor, seq=seq)
            self._ledger.aside([row], "damaged")
        return rows

    def _query(self, sql: str, values: tuple[object, ...]) -> list[tuple]:  # type: ignore[type-arg]  # columns vary
        """All rows at once: a statement left open would keep the writer from starting its log anew."""
        try:
            try:
                rows = self._open().execute(sql, values).fetchall()
            except sqlite3.OperationalError as error:
                if code_of(error) or self._connection is None:
                    raise
                # the binding could not decode a text: slower, but digests then tell which row it is
                self._connection.text_factory = tolerant_text
                rows = self._connection.execute(sql, values).fetchall()
        except (sqlite3.Error, DamagedError) as error:
            if isinstance(error, sqlite3.Error) and not is_store_fault(error):
                raise
            self._failed(error)
            return []
        self._ledger.reading_fails = None
        return rows

    def _open(self) -> sqlite3.Connection:
        if self._generation != self._ledger.generation:
            self.close()
        if self._connection is None:
            generation = self._ledger.generation
            self._connection = open_reader(self._path)
            self._generation = generation
        return self._connection

    def _failed(self, error: sqlite3.Error | DamagedError) -> None:
        """What memory holds is still given: live readings go out with the card gone."""
        self.close()
        if isinstance(error, DamagedError) or is_damage(error):
            self._ledger.damage_seen = True
        if self._ledger.reading_fails is None:
            log.warning("journal.reading_failed", error=str(error))
        self._ledger.reading_fails = str(error)
