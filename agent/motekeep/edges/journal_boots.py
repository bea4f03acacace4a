"""The boots of this gateway in their order, as the journal knows them.

Owns the table of boots in memory: how long each lasted, and its clock's offset where that became known. Reads and
writes its rows on the writer's connection; other threads only ask how long a reading has waited.
"""

import sqlite3
from dataclasses import dataclass, replace
from threading import Lock

from motekeep.instant import Instant
from motekeep.message.restamp import BootSpan

# Boots that hold no reading any more are forgotten past this many; they are only needed to bound older readings.
MAX_EMPTY_BOOTS = 1000
# A difference of offsets beyond this is worth a write: slewing stays below, a clock that was set anew does not.
STEP_S = 1.0


@dataclass(frozen=True, slots=True)
class Boot:
    number: int
    boot_id: str
    seconds: float
    offset: float | None


class Boots:
    """All boots that the file knows, oldest first; the last one is this boot once `begin` was called."""

    def __init__(self) -> None:
        self._lock = Lock()
        self._boots: list[Boot] = []
        self._unsaved = False
        self._names: dict[int, str] = {}

    def load(self, connection: sqlite3.Connection) -> None:
        rows = connection.execute("SELECT number, boot_id, seconds, clock_offset FROM boots ORDER BY number").fetchall()
        with self._lock:
            self._boots = [Boot(*row) for row in rows]
            self._names = {b.number: b.boot_id for b in self._boots}

    def begin(self, connection: sqlite3.Connection | None, at: Instant) -> None:
        """Make this boot the newest one, unless it is; how long the one before lasted is read off its readings."""
        if connection is not None:
            self._measure(connection)
        with self._lock:
            if not self._boots or self._boots[-1].boot_id != at.boot_id:
                number = self._boots[-1].number + 1 if self._boots else 1
                self._boots.append(Boot(number, at.boot_id, 0.0, None))
                self._names = {**self._names, number: at.boot_id}
            self._unsaved = True

    def _measure(self, connection: sqlite3.Connection) -> None:
        with self._lock:
            last = self._boots[-1] if self._boots else None
        if last is None:
            return
        newest = connection.execute("SELECT id FROM readings ORDER BY id DESC LIMIT 1").fetchone()
        if newest is None:
            return
        # readings are stored in the order of time: the longest of the newest few is the end of that boot
        seconds = connection.execute(
            "SELECT max(boot_s + seconds) FROM readings WHERE id > ? AND boot = ?", (newest[0] - 64, last.number)
        ).fetchone()[0]
        if seconds is not None and seconds > last.seconds:
            with self._lock:
                self._boots[-1] = replace(last, seconds=seconds)
                self._unsaved = True

    def trust(self, at: Instant) -> None:
        """The clock is trusted: from now on the offset of this boot is known."""
        if not at.trusted:
            return
        with self._lock:
            boot = self._boots[-1]
            if boot.offset is None or abs(boot.offset - at.offset) > STEP_S:
                self._boots[-1] = replace(boot, offset=at.offset)
                self._unsaved = True

    def save(self, connection: sqlite3.Connection) -> None:
        """Inside the writer's transaction, when anything changed. Call `saved` once that is durable."""
        with self._lock:
            if not self._unsaved:
                return
            boots = list(self._boots)
        first = connection.execute("SELECT boot FROM readings ORDER BY id LIMIT 1").fetchone()
        keep_from = (first[0] if first else boots[-1].number) - MAX_EMPTY_BOOTS
        connection.execute("DELETE FROM boots WHERE number < ?", (keep_from,))
        connection.executemany(
            "INSERT INTO boots (number, boot_id, seconds, clock_offset) VALUES (?, ?, ?, ?)"
            " ON CONFLICT (number) DO UPDATE SET seconds = excluded.seconds, clock_offset = excluded.clock_offset",
            [(b.number, b.boot_id, b.seconds, b.offset) for b in boots[-2:]],
        )

    @property
    def unsaved(self) -> bool:
        with self._lock:
            return self._unsaved

    def saved(self) -> None:
        with self._lock:
            self._unsaved = False

    @property
    def current(self) -> Boot:
        with self._lock:
            return self._boots[-1]

    def spans(self) -> tuple[list[Boot], list[BootSpan]]:
        """All boots, and the same as the arithmetic of `message/restamp.py` wants them."""
        with self._lock:
            boots = list(self._boots)
        return boots, [BootSpan(b.seconds, b.offset) for b in boots]

    def name_of(self, number: int) -> str:
        """The boot id of a number; empty for one never heard of."""
        return self._names.get(number, "")

    def number_of(self, boot_id: str) -> int:
        """Raises KeyError for a boot never begun."""
        with self._lock:
            for boot in reversed(self._boots):
                if boot.boot_id == boot_id:
                    return boot.number
        raise KeyError(boot_id)

    def waited_s(self, boot_id: str, at: Instant) -> float:
        """How long a clock has been waited for since that boot began, in boot seconds through the boots since; endless
        for an unknown one. Counted from the boot and not from a reading: a gateway that never finds a clock is to be
        late once, not with every reading for ever.
        """
        with self._lock:
            waited = at.boot_s
            for boot in reversed(self._boots):
                if boot.boot_id == boot_id:
                    return waited + (boot.seconds if boot is not self._boots[-1] else 0.0)
                if boot is not self._boots[-1]:
                    waited += boot.seconds
        return float("inf")
