"""The register: one SQLite file that knows every roll, its waves and events, every document, and who had which when.

Owns the tables and their transactions. One row an event, never changed afterwards; where a roll stands is what its
events say. Must not know a broker.

`offered` is written before the offer is sent, with how its target was then: after a kill at any point the roll goes on
with the same document under the same issue, and is judged against the same state before.
"""

import fcntl
import os
import sqlite3
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Self

from moteferry.roll.offer import Offer, RollError, Target, offer_of

APPLICATION_ID = 0x666572 + 0x79000000
VERSION = 1
BUSY_S = 10.0

# `found`: in force as the device says, by no act of ours in this register.
HAS = ("found", "accepted")
FAILED = ("refused", "withdrawn", "worse", "silent")
# Events that say where a target stands in its roll; the last of them counts.
STANDS = ("planned", "offered", "taken-back", "accepted", "passed", *FAILED)
SCHEMA = (
    """CREATE TABLE documents (
         digest TEXT PRIMARY KEY, site TEXT NOT NULL, gateway TEXT NOT NULL, sensor TEXT NOT NULL,
         issue INTEGER NOT NULL, document TEXT NOT NULL, signature TEXT NOT NULL)""",
    "CREATE INDEX documents_of ON documents (site, gateway, sensor, issue)",
    """CREATE TABLE rolls (
         id INTEGER PRIMARY KEY, kind TEXT NOT NULL, fingerprint TEXT NOT NULL, waves TEXT NOT NULL,
         began_at REAL NOT NULL, ended_at REAL, outcome TEXT)""",
    """CREATE TABLE places (
         roll INTEGER NOT NULL REFERENCES rolls, site TEXT NOT NULL, gateway TEXT NOT NULL, sensor TEXT NOT NULL,
         digest TEXT NOT NULL REFERENCES documents, wave INTEGER NOT NULL,
         PRIMARY KEY (roll, site, gateway, sensor)) WITHOUT ROWID""",
    """CREATE TABLE events (
         id INTEGER PRIMARY KEY, at REAL NOT NULL, roll INTEGER REFERENCES rolls, site TEXT NOT NULL,
         gateway TEXT NOT NULL, sensor TEXT NOT NULL, event TEXT NOT NULL, issue INTEGER, digest TEXT, signer TEXT,
         why TEXT NOT NULL DEFAULT '', before TEXT)""",
    "CREATE INDEX events_of ON events (site, gateway, sensor, id)",
    "CREATE INDEX events_in ON events (roll, id)",
    # which document is the way back from which: an undo that was killed must not make another issue of it
    "CREATE TABLE ways_back (digest TEXT PRIMARY KEY, back TEXT NOT NULL REFERENCES documents)",
)


@dataclass(frozen=True, slots=True)
class Event:
    """`at` is when it became so, Unix seconds; `before` (of `offered`) is JSON."""

    target: Target
    event: str
    at: float
    issue: int | None = None
    digest: str | None = None
    signer: str | None = None
    why: str = ""
    before: str | None = None
    roll: int | None = None


@dataclass(frozen=True, slots=True)
class Tenure:
    """A document in force on a sensor from `since` to `until` (None: as far as is known, still). No digest: none."""

    target: Target
    since: float
    until: float | None
    issue: int | None
    digest: str | None
    signer: str | None


class Register:
    """One process writes at a time; it holds a lock beside the file for as long as it is open."""

    def __init__(self, path: Path, *, write: bool = True) -> None:
        self.path = path
        self._lock: IO[str] | None = None
        if not write and not path.exists():
            raise RollError(f"opening the register {path}", "there is none", "roll something first, or see --register")
        path.parent.mkdir(parents=True, exist_ok=True)
        if write:
            self._lock = _locked(path)
        self._db = sqlite3.connect(path, timeout=BUSY_S, isolation_level=None)
        try:
            self._open()
        except sqlite3.DatabaseError as error:
            raise RollError(f"opening the register {path}", str(error), "is it a register of moteferry?") from error

    def _open(self) -> None:
        (version,) = self._db.execute("PRAGMA user_version").fetchone()
        (application,) = self._db.execute("PRAGMA application_id").fetchone()
        (tables,) = self._db.execute("SELECT count(*) FROM sqlite_master").fetchone()
        if tables and (application != APPLICATION_ID or version != VERSION):
            raise RollError(f"opening the register {self.path}", "is not one of this version", "see --register")
        self._db.execute("PRAGMA journal_mode = WAL")
        self._db.execute("PRAGMA synchronous = FULL")
        if not tables:
            with self.transaction():
                for statement in SCHEMA:
                    self._db.execute(statement)
                self._db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
                self._db.execute(f"PRAGMA user_version = {VERSION}")

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        self._db.close()
        if self._lock is not None:
            self._lock.close()

    @contextmanager
    def transaction(self) -> Iterator[None]:
        self._db.execute("BEGIN IMMEDIATE")
        try:
            yield
        except BaseException:
            self._db.execute("ROLLBACK")
            raise
        self._db.execute("COMMIT")

    # -- documents ----------------------------------------------------------------------------------------------

    def keep(self, offers: Iterable[Offer]) -> None:
        """A document that is known keeps its first signature, unless it comes with another: then the newer one."""
        self._db.executemany(
            """INSERT INTO documents VALUES (?, ?, ?, ?, ?, ?, ?)
               ON CONFLICT (digest) DO UPDATE SET signature = excluded.signature""",
            [(o.digest, *o.target, o.issue, o.document, o.signature) for o in offers],
        )

    def document(self, digest: str) -> Offer | None:
        row = self._db.execute("SELECT document, signature FROM documents WHERE digest = ?", (digest,)).fetchone()
        return offer_of(row[0].encode(), row[1]) if row is not None else None

    def has(self, offer: Offer) -> bool:
        """Whether exactly this document with exactly this signature has been here before."""
        row = self._db.execute("SELECT signature FROM documents WHERE digest = ?", (offer.digest,)).fetchone()
        return row is not None and row[0] == offer.signature

    def highest_issue(self, target: Target) -> int:
        """Of all documents and events of a sensor; 0 when there are none."""
        rows = self._db.execute(
            """SELECT max(issue) FROM documents WHERE (site, gateway, sensor) = (?, ?, ?)
               UNION ALL SELECT max(issue) FROM events WHERE (site, gateway, sensor) = (?, ?, ?)""",
            (*target, *target),
        )
        return max(row[0] or 0 for row in rows)

    def way_back(self, digest: str) -> Offer | None:
        """The document that was made to undo this one, if that has begun."""
        row = self._db.execute("SELECT back FROM ways_back WHERE digest = ?", (digest,)).fetchone()
        return self.document(row[0]) if row is not None else None

    def keep_way_back(self, digest: str, back: Offer) -> None:
        with self.transaction():
            self.keep([back])
            self._db.execute("INSERT OR REPLACE INTO ways_back VALUES (?, ?)", (digest, back.digest))

    # -- rolls --------------------------------------------------------------------------------------------------

    def roll(self, kind: str, fingerprint: str, waves: str, now: float) -> int:
        """The roll of exactly these documents: the one that was begun before, or a new one."""
        row = self._db.execute(
            "SELECT id FROM rolls WHERE (kind, fingerprint) = (?, ?) ORDER BY id DESC", (kind, fingerprint)
        ).fetchone()
        if row is not None:
            self._db.execute(
                "UPDATE rolls SET waves = ?, ended_at = NULL, outcome = NULL WHERE id = ?", (waves, row[0])
            )
            return int(row[0])
        new = self._db.execute(
            "INSERT INTO rolls (kind, fingerprint, waves, began_at) VALUES (?, ?, ?, ?)",
            (kind, fingerprint, waves, now),
        )
        return int(new.lastrowid or 0)

    def end(self, roll: int, outcome: str, now: float) -> None:
        self._db.execute("UPDATE rolls SET ended_at = ?, outcome = ? WHERE id = ?", (now, outcome, roll))

    def last_roll(self) -> int | None:
        """The last one that was no undo."""
        row = self._db.execute("SELECT max(id) FROM rolls WHERE kind = 'roll'").fetchone()
        return int(row[0]) if row[0] is not None else None

    def places(self, roll: int) -> dict[Target, int]:
        rows = self._db.execute("SELECT site, gateway, sensor, wave FROM places WHERE roll = ?", (roll,))
        return {Target(*row[:3]): int(row[3]) for row in rows}

    def place(self, roll: int, places: Iterable[tuple[Offer, int]]) -> None:
        self._db.executemany(
            "INSERT OR REPLACE INTO places VALUES (?, ?, ?, ?, ?, ?)",
            [(roll, *offer.target, offer.digest, wave) for offer, wave in places],
        )

    # -- events -------------------------------------------------------------------------------------------------

    def add(self, events: Sequence[Event]) -> None:
        self._db.executemany(
            """INSERT INTO events (at, roll, site, gateway, sensor, event, issue, digest, signer, why, before)
               VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)""",
            [(e.at, e.roll, *e.target, e.event, e.issue, e.digest, e.signer, e.why, e.before) for e in events],
        )

    def events(self, *, roll: int | None = None, target: Target | None = None) -> list[Event]:
        """Oldest first, of a roll, of a sensor, or all."""
        where: list[str] = ["1"]
        values: list[int | str] = []
        if roll is not None:
            where.append("roll = ?")
            values.append(roll)
        if target is not None:
            where.append("(site, gateway, sensor) = (?, ?, ?)")
            values += target
        rows = self._db.execute(
            f"""SELECT site, gateway, sensor, event, at, issue, digest, signer, why, before, roll
                FROM events WHERE {" AND ".join(where)} ORDER BY id""",  # noqa: S608 (words of ours only)
            values,
        )
        return [Event(Target(*row[:3]), *row[3:]) for row in rows]

    def tenures(self) -> list[Tenure]:
        """Who had which calibration when, by sensor and time."""
        rows = self._db.execute(
            """SELECT site, gateway, sensor, at,
                      lead(at) OVER (PARTITION BY site, gateway, sensor ORDER BY id), issue, digest, signer
               FROM events WHERE event IN (?, ?) ORDER BY site, gateway, sensor, id""",
            HAS,
        )
        return [Tenure(Target(*row[:3]), *row[3:]) for row in rows]

    def in_force(self) -> dict[Target, Tenure]:
        """What each sensor has, as far as is known."""
        return {tenure.target: tenure for tenure in self.tenures() if tenure.until is None}


def _locked(path: Path) -> IO[str]:
    file = path.with_name(path.name + ".lock").open("a+")
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError as error:
        file.seek(0)
        holder = file.read(20).strip() or "unknown"
        file.close()
        raise RollError(
            f"opening the register {path}", f"process {holder} is rolling with it", "wait for it, or stop it first"
        ) from error
    file.truncate(0)
    file.write(str(os.getpid()))
    file.flush()
    return file
