"""Looking into the journal from a command, while the daemon runs or not. Writes nothing.

Owns a read-only connection and the questions that `status` and `export` ask. Must not be imported by the daemon:
sqlite-utils, which makes it short, costs 3 MB there. Opened in mode=ro it never checkpoints, so that it cannot
disturb the daemon's log.
"""

import sqlite3
from array import array
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Self
from urllib.parse import quote

from sqlite_utils import Database

from motekeep.edges.journal_file import LIFE
from motekeep.edges.journal_schema import APPLICATION_ID, DamagedError, beside, digest, open_reader
from motekeep.edges.spans import Spans
from motekeep.errors import StoreError

# Readings fetched at once: some 400 kB. Between fetches nothing is held open that would keep the daemon's log from
# starting anew.
PAGE_ROWS = 500
CANNOT_OPEN = 14


@dataclass(frozen=True, slots=True)
class StoredReading:
    """A reading as stored. `start` is Unix seconds, `body` its document; `from_seq` differs from `seq` when merged."""

    sensor: str
    seq: int
    from_seq: int
    start: float
    seconds: float
    clock: str
    flag: int
    body: str


@dataclass(frozen=True, slots=True)
class SensorStore:
    """What the journal has of one sensor: rows, the numbers that wait and were sent, first and last start (Unix s)."""

    sensor: str
    last_seq: int
    readings: int
    waiting: int
    sent: int
    first: float | None
    last: float | None


class JournalView:
    """A context manager. Every method raises StoreError when the file cannot be read."""

    def __init__(self, path: Path) -> None:
        self._path = path
        try:
            self._connection = _open(path)
        except (sqlite3.Error, DamagedError) as error:
            raise self._error(error) from error
        self._database = Database(self._connection, execute_plugins=False)
        if next(iter(self._rows("PRAGMA application_id", {})), {}).get("application_id") != APPLICATION_ID:
            self.close()
            raise StoreError(f"reading {path}", "it is no journal", "check [store] path")

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        self._connection.close()

    def readings(
        self, from_utc: float | None = None, to_utc: float | None = None, sensor: str | None = None
    ) -> Iterator[StoredReading]:
        """Readings that start in [from_utc, to_utc), of one sensor or all, by start, then sensor and number.

        Memory: 8 bytes a reading of the range, and a page of them. One that is deleted or merged meanwhile is left
        out, and so is one whose text rotted."""
        bounds = {"from": from_utc, "to": to_utc, "sensor": sensor}
        conditions = [
            text
            for text, value in (
                ("start >= :from", from_utc),
                ("start < :to", to_utc),
                ("sensor = :sensor", sensor),
            )
            if value is not None
        ]
        where = f"WHERE {' AND '.join(conditions)}" if conditions else ""
        order = f"SELECT id FROM readings {where} ORDER BY start, sensor, seq"  # noqa: S608 (the texts above)
        ids = array("q", (int(str(row["id"])) for row in self._rows(order, bounds)))
        for at in range(0, len(ids), PAGE_ROWS):
            yield from self._page(ids[at : at + PAGE_ROWS])

    def _page(self, ids: "array[int]") -> Iterator[StoredReading]:
        marks = ",".join("?" * len(ids))
        sql = (
            "SELECT id, sensor, seq, from_seq, start, seconds, clock, flag, body, crc"  # noqa: S608 (question marks only)
            f" FROM readings WHERE id IN ({marks})"
        )
        try:
            found = {row[0]: row[1:] for row in self._connection.execute(sql, list(ids)).fetchall()}
        except sqlite3.Error as error:
            raise self._error(error) from error
        for id_ in ids:
            if id_ in found:
                *columns, crc = found[id_]
                reading = StoredReading(*columns)
                if digest(reading.sensor, reading.seq, reading.from_seq, reading.clock, reading.body) == crc:
                    yield reading

    def sensors(self) -> list[SensorStore]:
        """By name."""
        sql = (
            "SELECT s.sensor, s.last_seq, s.waiting, s.sent, count(r.id) AS readings, min(r.start) AS first,"
            " max(r.start) AS last FROM sensors AS s LEFT JOIN readings AS r ON r.sensor = s.sensor"
            " GROUP BY s.sensor ORDER BY s.sensor"
        )
        return [
            SensorStore(
                sensor=str(row["sensor"]),
                last_seq=int(str(row["last_seq"])),
                readings=int(str(row["readings"])),
                waiting=len(Spans.from_text(str(row["waiting"]))),
                sent=len(Spans.from_text(str(row["sent"]))),
                first=None if row["first"] is None else float(str(row["first"])),
                last=None if row["last"] is None else float(str(row["last"])),
            )
            for row in self._rows(sql, {})
        ]

    def kept(self, name: str) -> str | None:
        """What the daemon last committed under this name."""
        rows = self._rows("SELECT value FROM kept WHERE name = :name", {"name": name})
        return next((str(row["value"]) for row in rows), None)

    def lost(self) -> dict[str, int]:
        """Each loss of detail, counted since the journal began, by its kind."""
        rows = self._rows("SELECT kind, count FROM lost ORDER BY kind", {})
        return {str(row["kind"]): int(str(row["count"])) for row in rows if row["count"]}

    def notices(self) -> int:
        """Findings and amendments that wait for the broker."""
        return next(int(str(row["n"])) for row in self._rows("SELECT count(*) AS n FROM notices", {}))

    def services(self, sensor: str | None = None) -> list[str]:
        """The service records as published, by the time of what was done; none in a journal from before them."""
        if not list(self._rows("SELECT 1 FROM sqlite_master WHERE name = 'services'", {})):
            return []
        where = "" if sensor is None else "WHERE sensor = :sensor"
        sql = f"SELECT body FROM services {where} ORDER BY at, id"  # noqa: S608 (the text above)
        return [str(row["body"]) for row in self._rows(sql, {"sensor": sensor} if sensor else {})]

    def life(self) -> int:
        """How many times the daemon has started with this journal."""
        return int(self.kept(LIFE) or 0)

    def _rows(self, sql: str, values: Mapping[str, object]) -> Iterator[Mapping[str, object]]:
        try:
            yield from self._database.query(sql, dict(values))
        except sqlite3.Error as error:
            raise self._error(error) from error

    def _error(self, error: Exception) -> StoreError:
        mend = "run as root or as the user of the daemon" if self._path.exists() else "check [store] path"
        return StoreError(f"reading {self._path}", str(error), mend)


def _open(path: Path) -> sqlite3.Connection:
    try:
        return open_reader(path)
    except sqlite3.OperationalError as error:
        # A user who may read the file but not write beside it cannot join the log. Without a log, nobody writes.
        log = beside(path, "-wal")
        if error.sqlite_errorcode & 0xFF != CANNOT_OPEN or not path.exists() or (log.exists() and log.stat().st_size):
            raise
        return sqlite3.connect(f"file:{quote(str(path))}?mode=ro&immutable=1", uri=True, isolation_level=None)
