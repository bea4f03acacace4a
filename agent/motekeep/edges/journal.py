"""The journal: every reading durable before it is published, and the only queue there is.

Owns the writing side: one transaction an interval, in one thread, and what is done when the store cannot take it. Must
not know sensors, topics of readings or the broker. The rest of the room: `journal_file` the open file, `journal_schema`
its tables, `journal_ledger` what memory knows, `journal_reader` the publisher's side, `journal_room` limits,
`journal_restamp` and `journal_boots` clocks, `journal_rescue` and `journal_pages` damage, `journal_view` the
commands' side.

    commit -- store can ----> one transaction, durable, then visible to the reader
         `-- store cannot --> memory (bounded), visible at once; stored in order by the next commit that can
"""

import sqlite3
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import structlog

from motekeep.edges.ballast import SLICES
from motekeep.edges.journal_boots import Boots
from motekeep.edges.journal_file import JournalFile
from motekeep.edges.journal_ledger import Ledger
from motekeep.edges.journal_reader import Reader
from motekeep.edges.journal_restamp import Restamper
from motekeep.edges.journal_room import Room, count_lost
from motekeep.edges.journal_schema import (
    FULL,
    PAGE_BYTES,
    ForeignError,
    Sizes,
    code_of,
    digest,
    is_damage,
    is_store_fault,
    transaction,
)
from motekeep.edges.journal_shapes import Changes, Held
from motekeep.edges.ports import Batch, Clock, NewReading, NewService, Notice, StoreState
from motekeep.errors import StoreError, StoreFullError
from motekeep.instant import Instant
from motekeep.message.topics import Topics

log = structlog.get_logger()

# Findings that wait for a broker: some years of ordinary ones; the oldest go first and are counted as `notices`.
MAX_NOTICES = 5000
# What was held back is stored in transactions of this size, or an eighth of a small journal: each has to find room.
HELD_BYTES = 1 << 18
# Service records: a visit a day for 25 years. Only a script that went wrong gets there; then the oldest go.
MAX_SERVICES = 10_000
PRUNE_BATCHES = 10
# With less than this left on the disk and half of the ballast given, the file stops growing and its log is emptied at
# every commit: within the room that they have, both go on beside others that keep the disk full. The other half of the
# ballast is for bringing over what the log has already.
TIGHT_BYTES = 1 << 20
DAY_S = 86400.0
# One for each slice of the ballast, and for a file that had to be rescued.
ATTEMPTS = SLICES + 2
NOTHING = Held((), ())


@dataclass(frozen=True, slots=True)
class JournalSettings:
    """`clock_wait_s`: how long after boot readings wait for a trusted clock before they go out `unsynced`."""

    path: Path
    topics: Topics
    keep_days: int = 400
    max_bytes: int = 512 << 20
    clock_wait_s: float = 900.0


class Journal:
    """A `JournalWriter`, bound to the thread that made it; `reader` gives the publisher's side.

    Making one opens or creates the file, checks it, rescues it when it is damaged, and counts one more life. Where it
    cannot be written it starts all the same, in memory, as long as it can learn which numbers were used; else it raises
    StoreError. `progress` is called now and then while a large file is checked.
    """

    def __init__(self, settings: JournalSettings, clock: Clock, progress: Callable[[], None] | None = None) -> None:
        self._settings = settings
        self._clock = clock
        self._ledger = Ledger()
        self._held_bytes = min(HELD_BYTES, Sizes(settings.max_bytes).max_pages * PAGE_BYTES // 8)
        self._boots = Boots()
        self._file = JournalFile(settings.path, Sizes(settings.max_bytes), self._ledger, self._boots, progress)
        self._room = Room(self._ledger)
        self._restamper = Restamper(self._ledger, self._boots, settings.topics, settings.clock_wait_s)
        self._why: str | None = None  # why the store takes nothing just now
        self._why_full = False
        self._oldest: dict[str, tuple[int, float | None]] = {}
        self._file.claim()
        try:
            self._start(clock.now())
        except BaseException:
            self._file.close()
            self._file.release()
            raise

    @property
    def life(self) -> int:
        """How many times a daemon has started with this journal, this one included."""
        return self._file.life

    def next_seq(self, sensor: str) -> int:
        return self._ledger.used(sensor) + 1

    def kept(self, name: str) -> str | None:
        """What was last committed under this name in `Batch.keep`; None also while the file cannot be read."""
        if (held := self._ledger.kept(name)) is not None:
            return held
        row = self._one("SELECT value FROM kept WHERE name = ?", (name,))
        return None if row is None else str(row[0])

    def has_service(self, id_: str) -> bool:
        """Whether this service record is in the file; False also while that cannot be read."""
        return self._one("SELECT 1 FROM services WHERE id = ?", (id_,)) is not None

    def commit(self, batch: Batch, at: Instant) -> None:
        """Durable when this returns, or held in memory when the store cannot take it. Raises ValueError for a number
        out of turn, which is a bug of the caller; never for the store."""
        self._ledger.expect(batch.readings)
        self._ledger.keep(batch.keep)
        notices = self._ledger.number_notices((n.topic, n.body) for n in batch.notices)
        held = Held(tuple(batch.readings), notices, tuple(batch.services))
        self._boots.trust(at)
        self._restamper.due |= any(r.clock == "unsynced" for r in held.readings)
        self._save(held, at)
        if self._restamper.due:
            self.restamp(at)

    def flush(self, at: Instant) -> None:
        """Write what only memory knows. A flush that the store cannot take loses nothing: the next commit writes it."""
        if self._ledger.all_held() or self._ledger.changes(()) or self._boots.unsaved:
            self._save(NOTHING, at)

    def pending_marks(self) -> int:
        return self._ledger.pending_marks()

    def restamp(self, at: Instant) -> list[Notice]:
        """See `JournalWriter.restamp`: the amendments that it returns are in the journal already."""
        if not at.trusted:
            return []
        self._boots.trust(at)
        notices = self._restamper.held(at) if self._ledger.all_held() else []
        db = self._file.connection
        if db is None:
            return notices
        try:
            stored = self._restamper.stored(db, at, lambda bytes_: self._make_room(db, bytes_))
        except (sqlite3.Error, StoreError) as error:
            self._failed(error)
            self._restamper.due = True
            return notices
        self._file.notices += len(stored)
        return notices + stored

    def prune(self, at: Instant) -> None:
        """Delete delivered readings older than `keep_days`, and lay the ballast down again when the disk has room.

        Deletes nothing while the clock is not trusted: a wrong date would make everything look old. At most some
        thousand rows of a sensor a call, so that a commit never waits long.
        """
        self._file.ballast.restore(self._file.free())
        db = self._file.connection
        if not at.trusted or db is None:
            return
        try:
            self._save_marks(db)
            gone = self._room.expire(db, at.utc - self._settings.keep_days * DAY_S, PRUNE_BATCHES)
        except sqlite3.Error as error:
            self._failed(error)
            return
        if gone:
            log.info("journal.history_expired", readings=gone)

    def state(self) -> StoreState:
        return StoreState(
            waiting=self._ledger.waiting(),
            oldest_waiting=self._oldest_waiting(),
            bytes=self._file.bytes(),
            disk_free=self._file.free(),
            lost={kind: count for kind, count in self._ledger.lost().items() if count},
            degraded=self._degraded(),
            full=self._why_full or self._room.merging,
            in_memory=self._ledger.held_readings(),
        )

    def reader(self) -> Reader:
        """The publisher's side; one object a thread, any number of them."""
        return Reader(self._settings.path, self._ledger, self._boots, self._clock, self._settings.clock_wait_s)

    def close(self) -> None:
        """Write what is left and close; what the store does not take is lost with this process."""
        self.flush(self._clock.now())
        self._file.note_numbers(exact=True)
        self._file.close()
        self._file.release()

    # -- saving -------------------------------------------------------------------------------------------------

    def _start(self, at: Instant) -> None:
        if self._save(NOTHING, at):
            # from now on numbers are given out that the side file hears of later
            self._file.note_numbers(exact=False)
        elif not self._file.loaded:
            self._file.start_in_memory(self._why, at)
        log.info("journal.opened", path=str(self._settings.path), life=self.life, sqlite=sqlite3.sqlite_version)

    def _save(self, held: Held, at: Instant) -> bool:
        """Store what memory holds back, then `held`; whether all of it is durable. What is not stays in memory."""
        for _ in range(ATTEMPTS):
            try:
                db = self._file.ready(at)
                while waiting := self._ledger.oldest_held(self._held_bytes):
                    self._write(db, waiting)
                self._write(db, [held])
            except (sqlite3.Error, StoreError, OSError) as error:
                again = self._failed(error)
                self._hold(held)
                held = NOTHING
                if not again:
                    return False
            else:
                self._recovered()
                return True
        return False

    def _hold(self, held: Held) -> None:
        if held.readings or held.notices or held.services:
            self._ledger.hold(held)
        if held.readings:
            self._file.note_numbers(exact=True)

    def _write(self, db: sqlite3.Connection, adding: Sequence[Held]) -> None:
        """One transaction: readings, notices, kept values, marks, losses, boots."""
        readings = [r for held in adding for r in held.readings]
        notices = [n for held in adding for n in held.notices]
        services = [s for held in adding for s in held.services]
        if (readings or notices or services) and not self._make_room(db, sum(held.bytes for held in adding)):
            raise StoreFullError("storing readings", "the journal is at its limit", "bring the uplink back")
        changes = self._ledger.changes(adding)
        if not (readings or notices or services or changes or self._boots.unsaved):
            return
        growth = len(notices) - len(changes.notices_done)
        with transaction(db):
            self._boots.save(db)
            db.executemany(
                "INSERT INTO readings (sensor, seq, from_seq, boot, boot_s, start, seconds, clock, flag, crc, body)"
                " VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                [self._values(r) for r in readings],
            )
            # OR IGNORE: after a commit that failed in doubt a notice may be there already
            db.executemany(
                "INSERT OR IGNORE INTO notices (id, topic, body) VALUES (?, ?, ?)",
                [(n.id, n.topic, n.body) for n in notices],
            )
            forgotten = _write_services(db, services)
            _write_changes(db, changes)
            shed = _limit_notices(db, self._file.notices + growth - MAX_NOTICES)
        self._ledger.settle(changes, adding)
        self._ledger.counted_lost("notices", shed)
        self._ledger.counted_lost("services", forgotten)
        self._boots.saved()
        self._file.notices += growth - shed
        self._file.stored({r.sensor for r in readings})

    def _values(self, r: NewReading) -> tuple[object, ...]:
        crc = digest(r.sensor, r.seq, r.seq, r.clock, r.body)
        boot = self._boots.number_of(r.boot_id)
        return (r.sensor, r.seq, r.seq, boot, r.boot_s, r.start, r.seconds, r.clock, r.flag, crc, r.body)

    def _save_marks(self, db: sqlite3.Connection) -> None:
        """Write only what memory knows, in a transaction of its own. Raises sqlite3.Error."""
        changes = self._ledger.changes(())
        if changes:
            with transaction(db):
                _write_changes(db, changes)
            self._ledger.settle(changes, ())
            self._file.notices -= len(changes.notices_done)

    def _make_room(self, db: sqlite3.Connection, bytes_: int) -> bool:
        tight = self._short() and self._file.ballast.low
        pages = db.execute("PRAGMA page_count").fetchone()[0] if tight else self._file.sizes.max_pages
        db.execute(f"PRAGMA max_page_count = {pages}")
        db.execute(f"PRAGMA wal_autocheckpoint = {1 if tight else self._file.sizes.checkpoint_pages}")
        return self._room.make(db, bytes_, lambda: self._save_marks(db))

    def _short(self) -> bool:
        free = self._file.free()
        return free is not None and free < TIGHT_BYTES

    # -- failing ------------------------------------------------------------------------------------------------

    def _failed(self, error: Exception) -> bool:
        """Note why, do what can be done about it, and say whether to try again at once. Raises what is no fault of
        the store."""
        foreign = isinstance(error, ForeignError) and not self._file.loaded
        if foreign or (isinstance(error, sqlite3.Error) and not is_store_fault(error)):
            raise error
        if self._why is None:
            log.error("journal.store_failed", error=str(error), code=getattr(error, "sqlite_errorname", None))
        self._why = str(error)
        if isinstance(error, StoreError):  # its own limit, or a file it cannot use: nothing to gain from the disk
            self._why_full = isinstance(error, StoreFullError)
            return False
        self._why_full = isinstance(error, sqlite3.Error) and code_of(error) == FULL
        if isinstance(error, sqlite3.Error) and is_damage(error):
            self._file.suspect()
            return True
        if not self._why_full:
            self._file.close()  # an I/O error leaves SQLite's own view in doubt
        # a full disk shows as SQLITE_FULL, but also as an I/O error of the log or its index
        if (self._why_full or self._short()) and self._file.ballast.give_back():
            log.warning("journal.ballast_given_back", left_bytes=self._file.ballast.left)
            return True
        return False

    def _recovered(self) -> None:
        self._file.sound()
        if self._why is not None:
            log.info("journal.store_recovered")
            self._file.note_numbers(exact=False)
        self._why = None
        self._why_full = False

    # -- telling ------------------------------------------------------------------------------------------------

    def _degraded(self) -> str | None:
        if self._why is not None:
            return f"the journal takes nothing ({self._why}); readings are held in memory"
        if self._ledger.reading_fails is not None:
            return f"the journal cannot be read ({self._ledger.reading_fails})"
        return self._file.note

    def _oldest_waiting(self) -> float | None:
        starts = [self._start_of(sensor, seq) for sensor, seq in self._ledger.first_waiting().items()]
        return min((s for s in starts if s is not None), default=None)

    def _start_of(self, sensor: str, seq: int) -> float | None:
        """Start of the reading that stands for a number; looked up once a number."""
        if self._oldest.get(sensor, (0, None))[0] == seq:
            return self._oldest[sensor][1]
        held = self._ledger.held_between(sensor, seq, seq)
        if held:
            return held[0].start
        row = self._one("SELECT start FROM readings WHERE seq >= ? AND sensor = ? ORDER BY seq LIMIT 1", (seq, sensor))
        start = None if row is None else float(row[0])
        self._oldest[sensor] = (seq, start)
        return start

    def _one(self, sql: str, values: tuple[object, ...]) -> tuple | None:  # type: ignore[type-arg]  # columns vary
        """The first row, None without one or when the file cannot be read."""
        if self._file.connection is None:
            return None
        try:
            row: tuple | None = self._file.connection.execute(sql, values).fetchone()  # type: ignore[type-arg]
            return row
        except sqlite3.Error as error:
            self._failed(error)
            return None


def _write_changes(db: sqlite3.Connection, changes: Changes) -> None:
    """Inside a transaction: what memory knows and the file does not."""
    db.executemany(
        "INSERT INTO sensors (sensor, last_seq, waiting, sent) VALUES (?, ?, ?, ?) ON CONFLICT (sensor) DO UPDATE"
        " SET last_seq = excluded.last_seq, waiting = excluded.waiting, sent = excluded.sent",
        [(line.sensor, line.last_seq, line.waiting, line.sent) for line in changes.sensors],
    )
    db.executemany(
        "INSERT INTO kept (name, value) VALUES (?, ?) ON CONFLICT (name) DO UPDATE SET value = excluded.value",
        list(changes.kept.items()),
    )
    for kind, number in changes.lost.items():
        count_lost(db, kind, number)
    db.executemany("DELETE FROM notices WHERE id = ?", [(id_,) for id_ in changes.notices_done])


def _write_services(db: sqlite3.Connection, services: Sequence[NewService]) -> int:
    """Inside a transaction; how many had to go for them. OR IGNORE: a record that is told twice is one."""
    if not services:
        return 0
    db.executemany(
        "INSERT OR IGNORE INTO services (id, sensor, at, kind, body) VALUES (?, ?, ?, ?, ?)",
        [(s.id, s.sensor, s.at, s.kind, s.body) for s in services],
    )
    over = max(int(db.execute("SELECT count(*) FROM services").fetchone()[0]) - MAX_SERVICES, 0)
    if over:
        db.execute("DELETE FROM services WHERE id IN (SELECT id FROM services ORDER BY at LIMIT ?)", (over,))
        count_lost(db, "services", over)
    return over


def _limit_notices(db: sqlite3.Connection, over: int) -> int:
    """Inside a transaction: delete the oldest notices beyond the limit; how many."""
    if over <= 0:
        return 0
    db.execute("DELETE FROM notices WHERE id IN (SELECT id FROM notices ORDER BY id LIMIT ?)", (over,))
    count_lost(db, "notices", over)
    return over
