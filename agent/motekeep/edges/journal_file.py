"""The journal's file as an open thing: claimed, opened, checked, rescued, reopened, and its numbers remembered.

Owns the writing connection and the two small files beside the journal. Must not know what is written: that is
`journal`. What the file says at the first opening goes into the ledger; after that memory knows better.
"""

import sqlite3
from collections.abc import Callable
from pathlib import Path

import structlog

from motekeep.edges.ballast import Ballast, free_bytes
from motekeep.edges.journal_boots import Boots
from motekeep.edges.journal_ledger import Ledger
from motekeep.edges.journal_rescue import NOTE, finish, rescue, set_aside
from motekeep.edges.journal_schema import DamagedError, Sizes, beside, is_damage, open_reader, open_writer
from motekeep.edges.sequence_file import STRIDE, SequenceFile, Used
from motekeep.edges.spans import Spans
from motekeep.errors import StoreError
from motekeep.instant import Instant

log = structlog.get_logger()

LIFE = "journal.life"
# After this many errors of damage in a row the file is rescued even if SQLite's own check finds nothing.
SUSPICIONS = 2


class JournalFile:
    """`ready` gives the connection, whatever it takes. `note` says in a sentence what befell the file, None if
    nothing.
    """

    def __init__(
        self, path: Path, sizes: Sizes, ledger: Ledger, boots: Boots, progress: Callable[[], None] | None
    ) -> None:
        self.path = path
        self.sizes = sizes
        self.ballast = Ballast(beside(path, ".ballast"), sizes.ballast_bytes)
        self.connection: sqlite3.Connection | None = None
        self.loaded = False
        self.life = 0
        self.notices = 0
        self.note: str | None = None
        self._ledger = ledger
        self._boots = boots
        self._progress = progress
        self._numbers = SequenceFile(beside(path, ".seq"))
        self._noted: set[str] = set()
        self._since_noted = 0
        self._suspicions = 0

    @property
    def _attempted(self) -> str:
        return f"opening the journal {self.path}"

    # -- opening ------------------------------------------------------------------------------------------------

    def claim(self) -> None:
        """Be the only process that writes this journal. Raises StoreError."""
        try:
            if not self._numbers.claim():
                raise StoreError(self._attempted, "another process writes it", "stop that one: one daemon a journal")
        except FileNotFoundError as error:
            raise StoreError(self._attempted, str(error), "make that folder, or mount its disk") from error
        except OSError as error:
            # a read-only disk without a side file: the journal itself may still be readable
            log.warning("journal.not_claimed", error=str(error))

    def ready(self, at: Instant) -> sqlite3.Connection:
        """The connection, opened if need be. Raises sqlite3.Error, StoreError or OSError."""
        if self._ledger.damage_seen:
            self._ledger.damage_seen = False
            self.suspect()
        if self.connection is not None:
            return self.connection
        finish(self.path, at)
        used = self._used()
        known = bool(used.last) or self.loaded
        missing = known and not self.path.exists()
        self.connection = self._open(used, known, at)
        self._ledger.generation += 1
        if missing:
            self.note = "the journal file was missing; its numbers go on from the side file"
            log.critical("journal.missing", path=str(self.path))
        if self.loaded:
            self._reload(self.connection)
        else:
            self._load(self.connection, used)
            self._live()
        self._boots.begin(self.connection, at)
        self.ballast.restore(free_bytes(self.path.parent))
        return self.connection

    def start_in_memory(self, why: str | None, at: Instant) -> None:
        """The file cannot be written. Learn from whatever can be read which numbers were used.

        Without any knowledge of them nothing may be numbered: raises StoreError.
        """
        used = self._used()
        try:
            connection = open_reader(self.path)
            try:
                self._load(connection, used)
                self._live()
            finally:
                connection.close()
        except (sqlite3.Error, StoreError):
            if not used.last:
                raise StoreError(self._attempted, why or "it cannot be read", "mend that; it is tried again") from None
            for sensor in used.last:
                self._ledger.skip_to(sensor, used.beyond(sensor))
        self._boots.begin(None, at)

    def _open(self, used: Used, known: bool, at: Instant) -> sqlite3.Connection:
        try:
            if self._suspicions >= SUSPICIONS:
                raise DamagedError(self._attempted, "SQLite keeps finding damage in it", "")
            if known and self.path.exists() and not self.path.stat().st_size:
                # SQLite would take it for a new database
                raise DamagedError(self._attempted, "the file is empty", "")
            # after a mere I/O error the whole check is left out: it would come with every commit, from a failing card
            whole = not self.loaded or self._suspicions > 0
            return open_writer(self.path, self.sizes, self._progress, ours=known, whole=whole)
        except (DamagedError, sqlite3.Error) as error:
            if isinstance(error, sqlite3.Error) and not is_damage(error):
                raise
            log.critical("journal.damaged", error=str(error))
        if self.loaded:
            used = Used(self._ledger.all_used())
        rescued = rescue(self.path, used, at, self.ballast.give_back, self._progress)
        if self.loaded:
            self._ledger.restrict(rescued.covered)
        self.note = rescued.sentence
        self._suspicions = 0
        return open_writer(self.path, self.sizes, self._progress)

    def _load(self, db: sqlite3.Connection, used: Used) -> None:
        """Take over what the file says, at the first opening."""
        sensors = {
            str(name): (int(last), Spans.from_text(waiting), Spans.from_text(sent))
            for name, last, waiting, sent in db.execute("SELECT sensor, last_seq, waiting, sent FROM sensors")
        }
        lost = {str(kind): int(count) for kind, count in db.execute("SELECT kind, count FROM lost")}
        self.notices, newest = db.execute("SELECT count(*), max(id) FROM notices").fetchone()
        started = bool(self._ledger.sensors())
        self._ledger.load(sensors, lost, (newest or 0) + 1)
        self._boots.load(db)
        self.life = int((db.execute("SELECT value FROM kept WHERE name = ?", (LIFE,)).fetchone() or ("0",))[0])
        if any(damaged.exists() for damaged in set_aside(self.path)):
            note = db.execute("SELECT value FROM kept WHERE name = ?", (NOTE,)).fetchone()
            self.note = str(note[0]) if note else "a damaged journal file lies beside this one"
        for sensor, last in () if started else used.last.items():
            stored = sensors[sensor][0] if sensor in sensors else 0
            if last > stored:
                # used by a process that could not store them, or lost with the end of the log
                self._ledger.skip_to(sensor, used.beyond(sensor))
                self._ledger.count_lost("unstored", last - stored)
                log.warning("journal.numbers_skipped", sensor=sensor, stored=stored, used=used.beyond(sensor))
        self.loaded = True

    def _live(self) -> None:
        self.life += 1
        self._ledger.keep({LIFE: str(self.life)})

    def _reload(self, db: sqlite3.Connection) -> None:
        """Memory knows better, but for a commit that became durable though it seemed to fail."""
        stored = {str(s): int(n) for s, n in db.execute("SELECT sensor, max(seq) FROM readings GROUP BY sensor")}
        self._ledger.stored_after_all(stored)
        self.notices = db.execute("SELECT count(*) FROM notices").fetchone()[0]

    # -- using --------------------------------------------------------------------------------------------------

    def suspect(self) -> None:
        """SQLite found damage: check the file at the next opening, which is soon."""
        self._suspicions += 1
        self.close()

    def sound(self) -> None:
        """A transaction went through."""
        self._suspicions = 0

    def free(self) -> int | None:
        return free_bytes(self.path.parent)

    def bytes(self) -> int:
        """On the disk, the log included."""
        return sum(_size(beside(self.path, side)) for side in ("", "-wal"))

    def stored(self, sensors: set[str]) -> None:
        """Readings of these sensors became durable: now and then the side file hears of it."""
        self._since_noted += bool(sensors)
        if self._since_noted >= STRIDE or not sensors <= self._noted:
            self.note_numbers(exact=False)

    def note_numbers(self, *, exact: bool) -> None:
        """Write the side file. `exact` promises that no number is given out before the next writing."""
        used = self._ledger.all_used()
        try:
            self._numbers.write(Used(used, exact))
        except OSError as error:
            log.warning("journal.numbers_not_written", error=str(error))
            return
        self._noted = {sensor for sensor, last in used.items() if last}
        self._since_noted = 0

    def close(self) -> None:
        """Close the connection; `ready` opens it again."""
        if self.connection is not None:
            try:
                self.connection.close()
            except sqlite3.Error as error:
                log.warning("journal.close_failed", error=str(error))
            self.connection = None

    def release(self) -> None:
        self._numbers.release()

    def _used(self) -> Used:
        try:
            return self._numbers.read() or Used()
        except OSError as error:
            log.warning("journal.numbers_unreadable", error=str(error))
            return Used()


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except OSError:
        return 0
