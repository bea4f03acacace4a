"""The journal file: its tables, how versions of them follow each other, and how a connection to it is opened.

Owns the SQL of the schema, the pragmas and their reasons, and which SQLite error means what. Must not know what a
reading means.

Pages of 1 KiB: with one transaction a minute nearly everything that is written is whole pages for a few changed bytes.
Four sensors cost 17 kB a commit on the block device, with pages of 4 KiB 29 kB (`tools/bench/wear.py`). Each table has
its own number and kinds of columns: `journal_rescue` tells by them whose row it found on a page of a damaged file.
"""

import os
import sqlite3
import zlib
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import chain
from pathlib import Path
from urllib.parse import quote

from motekeep.errors import StoreError

APPLICATION_ID = 0x6D6F7465  # "mote"
PAGE_BYTES = 1024

# One entry a version; a file of version n is brought up by the entries from n on, in one transaction.
LADDER: tuple[tuple[str, ...], ...] = (
    (
        # `id` gives the order of commits; `crc` is the `digest` of a row: SQLite itself checks no content
        """CREATE TABLE readings (
             id INTEGER PRIMARY KEY, sensor TEXT NOT NULL, seq INTEGER NOT NULL, from_seq INTEGER NOT NULL,
             boot INTEGER NOT NULL, boot_s REAL NOT NULL, start REAL NOT NULL, seconds REAL NOT NULL,
             clock TEXT NOT NULL, flag INTEGER NOT NULL, crc INTEGER NOT NULL, body TEXT NOT NULL)""",
        # seq first: the newest entries of sensors of one age share a page, so that a commit writes one, not one each
        "CREATE UNIQUE INDEX readings_by_seq ON readings (seq, sensor)",
        "CREATE INDEX readings_unsynced ON readings (boot, id) WHERE clock = 'unsynced'",
        # `waiting` and `sent` are Spans of sequence numbers; a reading that is in neither has been delivered
        """CREATE TABLE sensors (
             sensor TEXT PRIMARY KEY, last_seq INTEGER NOT NULL, waiting TEXT NOT NULL, sent TEXT NOT NULL)""",
        "CREATE TABLE notices (id INTEGER PRIMARY KEY, topic TEXT NOT NULL, body TEXT NOT NULL)",
        "CREATE TABLE kept (name TEXT PRIMARY KEY, value TEXT NOT NULL)",
        "CREATE TABLE lost (kind TEXT PRIMARY KEY, count INTEGER NOT NULL)",
        # `seconds`: how long the boot is known to have lasted; `clock_offset`: wall clock minus boot seconds, once
        # trusted
        """CREATE TABLE boots (
             number INTEGER PRIMARY KEY, boot_id TEXT NOT NULL, seconds REAL NOT NULL, clock_offset REAL)""",
    ),
    (
        # service records: kept for ever, a few a year
        """CREATE TABLE services (
             id TEXT PRIMARY KEY, sensor TEXT NOT NULL, at REAL NOT NULL, kind TEXT NOT NULL, body TEXT NOT NULL)""",
    ),
)
VERSION = len(LADDER)
# A user_version further ahead than this was not written by a newer version: the header is damaged.
FUTURE_VERSIONS = 1000

FULL, CORRUPT, NOT_A_DATABASE = 13, 11, 26
# What a failing card, a full or read-only file system, or a missing folder give: the store's fault, not the program's.
STORE_CODES = frozenset({5, 6, 7, 8, 10, FULL, 14, CORRUPT, NOT_A_DATABASE})


class DamagedError(StoreError):
    """The journal file is damaged: not a database any more, or one with broken pages."""


class ForeignError(StoreError):
    """The file is a sound database, but not a journal that this version can use."""

    retry = False


@dataclass(frozen=True, slots=True)
class Sizes:
    """How `max_bytes` is shared out. Everything that the journal puts on the disk stays within it.

    The write-ahead log may grow to three times its checkpoint mark (one large transaction on top of a full log); the
    pages of the database get what log and ballast leave. From 1 MiB up that holds.
    """

    max_bytes: int

    @property
    def ballast_bytes(self) -> int:
        return min(8 << 20, self.max_bytes // 16)

    @property
    def checkpoint_pages(self) -> int:
        # the lower end: merging an hour of long readings is one transaction of some 200 pages
        return max(100, min(1000, self.max_bytes // PAGE_BYTES // 16))

    @property
    def max_pages(self) -> int:
        room = self.max_bytes - self.ballast_bytes - 3 * self.checkpoint_pages * (PAGE_BYTES + 24)
        return max(room // PAGE_BYTES, 64)


def code_of(error: sqlite3.Error) -> int:
    """The primary SQLite result code, 0 where the binding itself complained."""
    return (getattr(error, "sqlite_errorcode", 0) or 0) & 0xFF


def is_store_fault(error: sqlite3.Error) -> bool:
    """Whether the store is to blame. Anything else is a bug of this program and must not be swallowed."""
    return code_of(error) in STORE_CODES


def is_damage(error: sqlite3.Error) -> bool:
    return code_of(error) in (CORRUPT, NOT_A_DATABASE)


def open_writer(
    path: Path, sizes: Sizes, progress: Callable[[], None] | None = None, *, ours: bool = False, whole: bool = True
) -> sqlite3.Connection:
    """Open or create the journal for writing, checked (page by page when `whole`) and brought up to this version.

    `ours`: it is known to be a journal, so that one without its identity is a damaged one. `progress` is called now
    and then while the file is checked. Raises DamagedError, ForeignError, or sqlite3.Error with the store's own
    complaint.
    """
    new = not path.exists()
    if not new:
        check(path, progress, ours=ours, whole=whole)
    connection = sqlite3.connect(path, isolation_level=None, cached_statements=64)
    try:
        _set_up(connection, sizes)
        migrate(connection)
        if new:
            sync_folder(path)
    except BaseException:
        connection.close()
        raise
    return connection


def _set_up(connection: sqlite3.Connection, sizes: Sizes) -> None:
    connection.text_factory = tolerant_text
    connection.execute("PRAGMA busy_timeout = 5000")
    connection.execute(f"PRAGMA page_size = {PAGE_BYTES}")
    connection.execute("PRAGMA auto_vacuum = NONE")
    connection.execute("PRAGMA cache_size = -512")
    connection.execute("PRAGMA temp_store = MEMORY")  # the only sorts here are of a few hundred rows
    mode = connection.execute("PRAGMA journal_mode = WAL").fetchone()[0]
    # NORMAL loses every commit since the last write-back in a power cut; a build may have its own default for WAL
    connection.execute("PRAGMA synchronous = FULL")
    level = connection.execute("PRAGMA synchronous").fetchone()[0]
    if mode != "wal" or level != 2:
        raise StoreError(
            "opening the journal",
            f"SQLite runs it in mode {mode}, level {level}, not in WAL, FULL",
            "put it on a local file system",
        )
    connection.execute(f"PRAGMA wal_autocheckpoint = {sizes.checkpoint_pages}")
    connection.execute(f"PRAGMA max_page_count = {sizes.max_pages}")


def check(path: Path, progress: Callable[[], None] | None = None, *, ours: bool = False, whole: bool = True) -> None:
    """Whether an existing file is a sound journal of a version known here: identity, then SQLite's check when `whole`.

    The whole check: the quick one, as dear on a cold file, misses an index entry that is gone, and with it a reading.

    On a connection that cannot write, so that nothing of a damaged file is changed. Raises DamagedError, ForeignError,
    or sqlite3.Error with the store's own complaint.
    """
    attempted, mend = f"checking the journal {path}", "nothing to do: what can be read is carried over"
    connection: sqlite3.Connection | None = None
    try:
        connection = open_reader(path)
        if progress is not None:
            connection.set_progress_handler(progress, 100_000)
        fault = _foreign_or_damaged(connection, path, ours)
        answer = fault or (connection.execute("PRAGMA integrity_check(1)").fetchone()[0] if whole else "ok")
    except sqlite3.Error as error:
        # a damaged header gives SQLITE_ERROR too ("unsupported file format"): these statements cannot fail otherwise
        if is_damage(error) or not is_store_fault(error):
            raise DamagedError(attempted, str(error), mend) from error
        raise
    finally:
        if connection is not None:
            connection.close()
    if answer != "ok":
        raise DamagedError(attempted, str(answer).replace("\n", " ")[:200], mend)


def _foreign_or_damaged(connection: sqlite3.Connection, path: Path, known: bool) -> str | None:
    """What contradicts itself in the header of a journal, None when nothing does. Raises ForeignError."""
    application = connection.execute("PRAGMA application_id").fetchone()[0]
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    tables = {name for (name,) in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
    ours = {"readings", "sensors"} <= tables
    attempted = f"opening the journal {path}"
    if application != APPLICATION_ID:
        if ours or known:
            return "its application id is lost"
        if tables or application:
            raise ForeignError(attempted, "it is a database of another program", "give [store] path another file name")
    if ours != (version > 0):
        return f"its version says {version}"
    if version > VERSION + FUTURE_VERSIONS:
        return f"its version says {version}"
    if version > VERSION:
        raise ForeignError(
            attempted, f"a newer version wrote it (format {version}, this one knows {VERSION})", "install that version"
        )
    return "the text of its tables has changed" if _tables(connection) != _tables_of(version) else None


def _tables(connection: sqlite3.Connection) -> set[tuple[str, str | None]]:
    return set(connection.execute("SELECT name, sql FROM sqlite_master"))


def _tables_of(version: int) -> set[tuple[str, str | None]]:
    """What a file of that version has: SQLite parses the text of its tables anew at each opening, rotten or not."""
    connection = sqlite3.connect(":memory:", isolation_level=None)
    for statement in chain.from_iterable(LADDER[:version]):
        connection.execute(statement)
    tables = _tables(connection)
    connection.close()
    return tables


def tolerant_text(raw: bytes) -> str:
    """A text factory for what may have rotted: it is still text, its digest tells."""
    return raw.decode("utf-8", "replace")


def digest(sensor: str, seq: int, from_seq: int, clock: str, body: str) -> int:
    """What tells a row that is still what was stored from one that rotted. The other columns only repeat `body`."""
    return zlib.crc32(f"{sensor}|{seq}|{from_seq}|{clock}|{body}".encode())


def migrate(connection: sqlite3.Connection) -> None:
    """Bring the file up to VERSION, all steps in one transaction."""
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if version == VERSION:
        return
    with transaction(connection):
        for statement in chain.from_iterable(LADDER[version:]):
            connection.execute(statement)
        connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        connection.execute(f"PRAGMA user_version = {VERSION}")


@contextmanager
def transaction(connection: sqlite3.Connection) -> Iterator[None]:
    """One transaction: committed and durable at the end, or gone."""
    connection.execute("BEGIN IMMEDIATE")
    try:
        yield
        connection.execute("COMMIT")
    except BaseException:
        if connection.in_transaction:  # SQLite may have rolled back by itself, on a full disk for one
            connection.execute("ROLLBACK")
        raise


def open_reader(path: Path) -> sqlite3.Connection:
    """A connection that cannot write and so never checkpoints: two that do can damage a WAL file before SQLite 3.51.3.

    Raises sqlite3.Error or DamagedError.
    """
    connection = sqlite3.connect(f"file:{quote(str(path))}?mode=ro", uri=True, isolation_level=None)
    try:
        connection.execute("PRAGMA busy_timeout = 2000")
        connection.execute("PRAGMA cache_size = -256")
        connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except UnicodeDecodeError as error:
        # SQLite quotes the damaged schema in its message, and Python cannot read that
        connection.close()
        raise DamagedError(f"opening {path}", "its tables are damaged", "") from error
    except BaseException:
        connection.close()
        raise
    return connection


def sync_folder(path: Path) -> None:
    """Make the names in the folder of `path` durable; a file that was synced can else vanish in a power cut."""
    descriptor = os.open(path.parent, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def beside(path: Path, suffix: str) -> Path:
    """The file next to the journal that has its name plus `suffix`."""
    return path.with_name(path.name + suffix)
