"""The journal file: its tables, how versions of them follow each other, and how a connection to it is opened.

Owns the SQL of the schema, the pragmas and their reasons, and which SQLite error means what. Must not know what a
reading means.

Pages of 1 KiB: with one transaction a minute nearly everything that is written is whole pages for a few changed bytes,
and small pages cut the bytes on the card to under half of what 4 KiB pages cost (`tools/bench/wear.py`). Each table has
its own number and kinds of columns: `journal_rescue` tells by them whose row it found on a page of a damaged file.
"""

import os
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import quote

from motekeep.errors import StoreError

APPLICATION_ID = 0x6D6F7465  # "mote"
PAGE_BYTES = 1024

# One entry a version; a file of version n is brought up by the entries from n on, in one transaction.
LADDER: tuple[tuple[str, ...], ...] = (
    (
        # `id` gives the order of commits. `crc` is zlib.crc32 of `body`: SQLite itself checks no content.
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
)
VERSION = len(LADDER)

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
    pages of the database get what log and ballast leave.
    """

    max_bytes: int

    @property
    def ballast_bytes(self) -> int:
        return min(8 << 20, self.max_bytes // 16)

    @property
    def checkpoint_pages(self) -> int:
        return max(16, min(1000, self.max_bytes // PAGE_BYTES // 16))

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


def open_writer(path: Path, sizes: Sizes, progress: Callable[[], None] | None = None) -> sqlite3.Connection:
    """Open or create the journal for writing, checked whole and brought up to this version.

    `progress` is called now and then while the file is checked (some 2 s for 100 MB from a slow card). Raises
    DamagedError, ForeignError, or sqlite3.Error with the store's own complaint.
    """
    new = not path.exists()
    connection = sqlite3.connect(path, isolation_level=None, cached_statements=64)
    try:
        _set_up(connection, sizes)
        _check_identity(connection, path)
        check(connection, path, progress)
        migrate(connection)
        if new:
            sync_folder(path)
    except BaseException:
        connection.close()
        raise
    return connection


def _set_up(connection: sqlite3.Connection, sizes: Sizes) -> None:
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


def _check_identity(connection: sqlite3.Connection, path: Path) -> None:
    application = connection.execute("PRAGMA application_id").fetchone()[0]
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    tables = connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]
    attempted = f"opening the journal {path}"
    if application != APPLICATION_ID and (application != 0 or tables):
        raise ForeignError(attempted, "it is a database of another program", "give [store] path another file name")
    if version > VERSION:
        raise ForeignError(
            attempted, f"a newer version wrote it (format {version}, this one knows {VERSION})", "install that version"
        )


def check(connection: sqlite3.Connection, path: Path, progress: Callable[[], None] | None = None) -> None:
    """SQLite's quick check. Raises DamagedError; a broken page comes as an error or as a row, by its place."""
    attempted, mend = f"checking the journal {path}", "nothing to do: what can be read is carried over"
    if progress is not None:
        connection.set_progress_handler(progress, 100_000)
    try:
        answer = connection.execute("PRAGMA quick_check(1)").fetchone()[0]
    except sqlite3.Error as error:
        if is_damage(error):
            raise DamagedError(attempted, str(error), mend) from error
        raise
    finally:
        connection.set_progress_handler(None, 0)
    if answer != "ok":
        raise DamagedError(attempted, str(answer).replace("\n", " ")[:200], mend)


def migrate(connection: sqlite3.Connection) -> None:
    """Bring the file up to VERSION, all steps in one transaction."""
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if version == VERSION:
        return
    with transaction(connection):
        for statements in LADDER[version:]:
            for statement in statements:
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

    Raises sqlite3.Error.
    """
    connection = sqlite3.connect(f"file:{quote(str(path))}?mode=ro", uri=True, isolation_level=None)
    try:
        connection.execute("PRAGMA busy_timeout = 2000")
        connection.execute("PRAGMA cache_size = -256")
        connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
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
