"""A damaged journal: carry over what can be read, set the file aside, go on.

Owns the order of steps, so that a power cut at any moment leaves either the damaged file or the whole new one in place;
which rows of a damaged file are believed; and the numbers that go on. Must not know who writes or reads the journal.

Steps: read the damaged file page by page into `<journal>.rescue-part`; make that durable and call it
`<journal>.rescued`; rename the damaged file (with its log) to `<journal>.damaged-<time>`; rename the new one into its
place. `finish` does the last two again after a cut. At most `KEEP_DAMAGED` damaged files are kept, the newest ones:
each is as large as the journal.
"""

import json
import os
import sqlite3
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import structlog

from motekeep.edges.journal_pages import Pages, Value
from motekeep.edges.journal_room import count_lost
from motekeep.edges.journal_schema import (
    FULL,
    PAGE_BYTES,
    Sizes,
    beside,
    code_of,
    digest,
    open_writer,
    sync_folder,
    transaction,
)
from motekeep.edges.sequence_file import STRIDE, Used
from motekeep.edges.spans import Spans
from motekeep.instant import Instant, rfc3339

log = structlog.get_logger()

KEEP_DAMAGED = 2
ROWS_A_TRANSACTION = 1000
NOTE = "journal.rescued"  # under which name the new journal keeps the sentence about its rescue
SIDES = ("", "-wal")

NUMBER, MAYBE_NUMBER = (int, float), (int, float, type(None))
# The kinds of columns of each table (journal_schema); an INTEGER PRIMARY KEY is stored as null, its value is the rowid.
SHAPES: dict[str, tuple[type | tuple[type, ...], ...]] = {
    "readings": (type(None), str, int, int, int, NUMBER, NUMBER, NUMBER, str, int, int, str),
    "sensors": (str, int, str, str),
    "boots": (type(None), str, NUMBER, MAYBE_NUMBER),
    "notices": (type(None), str, str),
    "kept": (str, str),
    "lost": (str, int),
    "services": (str, str, NUMBER, str, str),
}
INSERT = {
    name: f"INSERT OR REPLACE INTO {name} VALUES ({', '.join('?' * len(shape))})"  # noqa: S608 (names from above)
    for name, shape in SHAPES.items()
    if name != "sensors"
}


@dataclass(slots=True)
class _Found:
    """What is known of one sensor: its row, if one was found, and its readings."""

    last: int | None = None
    waiting: Spans = field(default_factory=Spans)
    sent: Spans = field(default_factory=Spans)
    covered: Spans = field(default_factory=Spans)


@dataclass(frozen=True, slots=True)
class Rescued:
    """What came of it. `covered`: the numbers that the new file has readings for, by sensor."""

    carried: int
    lost: int
    covered: dict[str, Spans]
    sentence: str


def rescue(
    path: Path, used: Used, at: Instant, give_room: Callable[[], bool], progress: Callable[[], None] | None = None
) -> Rescued:
    """Replace the damaged journal at `path` by a new one with everything that can still be read.

    `give_room` is asked once when the disk is full. Raises OSError or sqlite3.Error when no new file can be written:
    then the damaged one is where it was.
    """
    part = beside(path, ".rescue-part")
    _remove(part)
    # its own limit is for the next opening: what was carried over must not be cut by it
    target = open_writer(part, Sizes(1 << 40))
    try:
        target.execute("PRAGMA synchronous = OFF")  # made durable as a whole below
        found, whole = _carry(path, target, give_room, progress)
        aside_name = _aside_name(path, at)
        rescued = _conclude(target, found, used, at, aside_name, whole)
        target.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    finally:
        target.close()
    _sync(part)
    part.rename(beside(path, ".rescued"))
    sync_folder(path)
    _put_in_place(path, aside_name)
    log.critical("journal.rescued", carried=rescued.carried, lost=rescued.lost, aside=aside_name)
    return rescued


def finish(path: Path, at: Instant) -> None:
    """Complete a rescue that a power cut interrupted after the new file was whole. Raises OSError."""
    if beside(path, ".rescued").exists():
        _put_in_place(path, _aside_name(path, at))


def set_aside(path: Path) -> list[Path]:
    """The damaged journals that are kept beside this one, oldest first."""
    names = {p.name for p in path.parent.glob(f"{path.name}.damaged-*")}
    return [path.with_name(name) for name in sorted({n.removesuffix("-wal") for n in names})]


def _carry(
    path: Path, target: sqlite3.Connection, give_room: Callable[[], bool], progress: Callable[[], None] | None
) -> tuple[dict[str, _Found], bool]:
    """Copy every row that is believed; whether there was room for all."""
    found: dict[str, _Found] = {}
    pages = Pages(path, PAGE_BYTES)
    try:
        chunk: list[tuple[str, tuple[Value, ...]]] = []
        for rowid, values in pages.rows():
            table = _table_of(values)
            if table is None:
                continue
            if table == "sensors":
                _note_sensor(found, values)
                continue
            chunk.append((table, (rowid, *values[1:]) if values[0] is None else tuple(values)))
            if len(chunk) >= ROWS_A_TRANSACTION:
                if progress is not None:
                    progress()
                if not _insert(target, chunk, give_room):
                    return found, False
                chunk = []
        return found, _insert(target, chunk, give_room)
    finally:
        pages.close()


def _table_of(values: list[Value]) -> str | None:
    """Whose row this is; None for one that is of no table, or a reading whose text is not what was stored."""
    for table, shape in SHAPES.items():
        if len(values) == len(shape) and all(isinstance(v, kind) for v, kind in zip(values, shape, strict=True)):
            return None if table == "readings" and not _sound(values) else table
    return None


def _sound(values: list[Value]) -> bool:
    _, sensor, seq, from_seq, _, _, _, _, clock, _, crc, body = values
    return digest(str(sensor), int(str(seq)), int(str(from_seq)), str(clock), str(body)) == crc


def _note_sensor(found: dict[str, _Found], values: list[Value]) -> None:
    name, last, waiting, sent = values
    if not (isinstance(name, str) and isinstance(last, int)):
        return
    known = found.setdefault(name, _Found())
    try:
        parsed = Spans.from_text(str(waiting)), Spans.from_text(str(sent))
    except ValueError:
        return
    if known.last is None or last >= known.last:
        known.last, (known.waiting, known.sent) = last, parsed


def _insert(
    target: sqlite3.Connection, chunk: Sequence[tuple[str, tuple[Value, ...]]], give_room: Callable[[], bool]
) -> bool:
    """One transaction; whether there was room for it."""
    while True:
        try:
            with transaction(target):
                for table, values in chunk:
                    target.execute(INSERT[table], values)
        except sqlite3.Error as error:
            if code_of(error) != FULL:
                raise
            if not give_room():
                return False
        else:
            return True


def _conclude(
    target: sqlite3.Connection, found: dict[str, _Found], used: Used, at: Instant, aside: str, whole: bool
) -> Rescued:
    """Sensors, boots, losses and the note, once all rows are in."""
    with transaction(target):
        merged = "SELECT sensor, from_seq, seq FROM readings WHERE from_seq < seq"
        for sensor, from_seq, seq in target.execute(merged).fetchall():
            # minutes from before a merge, off a page that was free
            target.execute("DELETE FROM readings WHERE seq >= ? AND seq < ? AND sensor = ?", (from_seq, seq, sensor))
        for sensor, from_seq, seq in target.execute("SELECT sensor, from_seq, seq FROM readings ORDER BY seq"):
            found.setdefault(sensor, _Found()).covered.add(from_seq, seq)
        for sensor in used.last:
            found.setdefault(sensor, _Found())
        lost = sum(_conclude_sensor(target, sensor, known, used) for sensor, known in found.items())
        if lost:
            count_lost(target, "damaged", lost)
        _name_boots(target)
        carried = target.execute("SELECT count(*) FROM readings").fetchone()[0]
        sentence = (
            f"the journal was found damaged at {rfc3339(at.utc)}: {carried} readings carried over, {lost} waiting lost"
            f"{'' if whole else ', the disk had no room for the rest'}; the damaged file is kept as {aside}"
        )
        target.execute(INSERT["kept"], (NOTE, sentence))
    return Rescued(carried, lost, {name: known.covered for name, known in found.items()}, sentence)


def _conclude_sensor(target: sqlite3.Connection, sensor: str, known: _Found, used: Used) -> int:
    """Write the row of a sensor; how many of its waiting readings are lost.

    Its own row knows the last number. Without it, or when the side file has seen a later one, numbers that may have
    been used are skipped: a hole is honest, a number used twice is not.
    """
    newest = max((high for _, high in known.covered), default=0)
    if known.last is not None and known.last >= used.last.get(sensor, 0):
        last = max(known.last, newest)
    else:
        last = max(known.last or 0, used.beyond(sensor), newest + STRIDE)
    if known.last is None:
        oldest = known.covered.first
        waiting = Spans([(oldest, newest)]) if oldest is not None else Spans()
    else:
        waiting = known.waiting
        if newest > known.last:
            waiting.add(known.last + 1, newest)
    missing = waiting.union(known.sent).without(known.covered)
    target.execute(
        "INSERT OR REPLACE INTO sensors VALUES (?, ?, ?, ?)",
        (sensor, last, str(waiting.without(missing)), str(known.sent.without(missing))),
    )
    return len(missing)


def _name_boots(target: sqlite3.Connection) -> None:
    """Boots whose row was lost get their name from a reading of theirs."""
    nameless = "SELECT boot, max(body) FROM readings WHERE boot NOT IN (SELECT number FROM boots) GROUP BY boot"
    for number, body in target.execute(nameless).fetchall():
        target.execute(INSERT["boots"], (number, json.loads(body)["boot"], 0.0, None))


def _put_in_place(path: Path, aside_name: str) -> None:
    for side in SIDES:
        if beside(path, side).exists():
            beside(path, side).rename(path.with_name(aside_name + side))
    beside(path, "-shm").unlink(missing_ok=True)  # says nothing: the index of the log, made anew by whoever opens it
    beside(path, ".rescued").rename(path)
    sync_folder(path)
    for old in set_aside(path)[:-KEEP_DAMAGED]:
        _remove(old)


def _aside_name(path: Path, at: Instant) -> str:
    stamp = rfc3339(int(at.utc)).replace("-", "").replace(":", "")
    name = f"{path.name}.damaged-{stamp}"
    taken = {p.name for p in set_aside(path)}
    return next(n for n in (name, *(f"{name}.{i}" for i in range(1, 1000))) if n not in taken)


def _remove(path: Path) -> None:
    for side in (*SIDES, "-shm"):
        beside(path, side).unlink(missing_ok=True)


def _sync(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
