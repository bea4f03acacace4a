"""Room in the journal: how much there is, and what goes first when there is none.

Owns the order in which detail is given up, and counts each loss in the same transaction. Must not know why room is
wanted. The rule:

1. delivered readings, the oldest first (kind `history`, as they were to be kept `keep_days` longer);
2. the oldest undelivered minutes of a sensor become one reading an hour, oldest hour first (kind `merged`);
3. those hours become days;
4. then there is no room, and whoever asked must hold what it has.

The newest reading of a sensor is never merged, nor what is being merged across a boot, a kind of clock or a
calibration.
"""

import sqlite3
from collections.abc import Callable, Iterator, Sequence
from itertools import groupby

import structlog
from pydantic import ValidationError

from motekeep.edges.journal_ledger import Ledger
from motekeep.edges.journal_schema import PAGE_BYTES, digest, transaction
from motekeep.instant import from_rfc3339
from motekeep.message.documents import ReadingDocument
from motekeep.message.merge import mergeable, merged

log = structlog.get_logger()

HISTORY_BATCH = 100
LEVELS_S = (3600.0, 86400.0)
# Pages that a transaction may need beside its bodies: tree nodes that split, the free list, the small tables.
SPARE_PAGES = 24
# Rows looked at for one merge: more than an hour of readings every 10 s; a day is merged from hours.
LOOK_ROWS = 500


class Room:
    """Works on the writer's connection, each step in a transaction of its own."""

    def __init__(self, ledger: Ledger) -> None:
        self._ledger = ledger
        # where each sensor's next merge of a level starts: what lies before has nothing left to merge
        self._merged_through: dict[tuple[str, float], int] = {}
        # whether what waits was merged lately, and there has been no delivered reading to give up since
        self.merging = False

    def make(self, connection: sqlite3.Connection, bytes_: int, save_marks: Callable[[], None]) -> bool:
        """Give up detail until about `bytes_` of new rows fit; whether they do. Raises sqlite3.Error.

        `save_marks` makes durable what was delivered, before any of it is deleted: a number that the file says is
        waiting must have its reading."""
        needed = bytes_ * 3 // (2 * PAGE_BYTES) + SPARE_PAGES
        if _free_pages(connection) >= needed:
            if self.merging and any(self._delivered(connection, s, 1) for s in self._ledger.sensors()):
                self.merging = False
            return True
        save_marks()
        # beyond what is needed now, so that this is not the business of every commit
        while _free_pages(connection) < 2 * needed:
            if self._drop_history(connection):
                continue
            if not self._merge(connection):
                return _free_pages(connection) >= needed
            self.merging = True
        return True

    def expire(self, connection: sqlite3.Connection, before_utc: float, batches: int) -> int:
        """Delete delivered readings that started before a moment, oldest first; how many. No loss: they were kept
        their time.
        """
        gone = 0
        for sensor in self._ledger.sensors():
            for _ in range(batches):
                rows = [r for r in self._delivered(connection, sensor, HISTORY_BATCH) if r[3] != "unsynced"]
                old = [r for r in rows if r[2] < before_utc]
                if not old:
                    break
                with transaction(connection):
                    _delete(connection, [r[0] for r in old])
                gone += len(old)
        return gone

    # -- delivered history --------------------------------------------------------------------------------------

    def _drop_history(self, connection: sqlite3.Connection) -> int:
        """Delete a batch of the sensor whose delivered readings are the oldest."""
        heads = [rows for s in self._ledger.sensors() if (rows := self._delivered(connection, s, HISTORY_BATCH))]
        if not heads:
            return 0
        oldest = min(heads, key=lambda rows: rows[0][0])
        ids = [row[0] for row in oldest]
        with transaction(connection):
            _delete(connection, ids)
            count_lost(connection, "history", len(ids))
        self._ledger.counted_lost("history", len(ids))
        self.merging = False
        return len(ids)

    def _delivered(self, connection: sqlite3.Connection, sensor: str, limit: int) -> list[tuple[int, int, float, str]]:
        """The oldest delivered readings of a sensor: id, seq, start, clock."""
        undelivered = self._ledger.undelivered(sensor)
        last = self._ledger.state_of(sensor).stored
        rows: list[tuple[int, int, float, str]] = []
        for low, high in undelivered.gaps(1, last):
            found = connection.execute(
                "SELECT id, seq, start, clock, from_seq FROM readings WHERE seq BETWEEN ? AND ? AND sensor = ?"
                " ORDER BY seq LIMIT ?",
                (low, high, sensor, limit - len(rows)),
            ).fetchall()
            # a merged reading of which a part still waits has not been delivered
            rows += [row[:4] for row in found if not undelivered.overlaps(row[4], row[1])]
            if len(rows) >= limit:
                break
        return rows

    # -- merging ------------------------------------------------------------------------------------------------

    def _merge(self, connection: sqlite3.Connection) -> bool:
        """Merge one group of the oldest undelivered readings, hours before days; whether there was one."""
        for level_s in LEVELS_S:
            heads = []
            for sensor in self._ledger.sensors():
                group = self._group(connection, sensor, level_s)
                if group:
                    heads.append((group[0][0], sensor, group))
            if heads:
                _, sensor, group = min(heads)
                self._merge_group(connection, sensor, group)
                self._merged_through[sensor, level_s] = group[-1][1].seq
                return True
        return False

    def _group(self, connection: sqlite3.Connection, sensor: str, level_s: float) -> list[tuple[int, ReadingDocument]]:
        """The oldest two or more readings of a sensor that belong in one of that level: id and document."""
        after = self._merged_through.get((sensor, level_s), 0)
        state = self._ledger.state_of(sensor)
        # each by itself: a reading merged of both would have to go out again
        for low, high in sorted([*state.waiting, *state.sent]):
            if high <= after:
                continue
            rows = connection.execute(
                "SELECT id, sensor, seq, from_seq, clock, body, crc FROM readings"
                " WHERE seq BETWEEN ? AND ? AND sensor = ? ORDER BY seq LIMIT ?",
                (max(low, after + 1), high, sensor, LOOK_ROWS),
            ).fetchall()
            if high == state.stored:
                rows = rows[:-1]
            documents = [
                (id_, document)
                for id_, *columns, crc in rows
                if (document := readable(digest(*columns), crc, columns[-1])) is not None
            ]
            for group in _groups(documents, level_s):
                if len(group) > 1:
                    return group
            if documents:
                self._merged_through[sensor, level_s] = max(documents[-1][1].seq, after)
        return []

    def _merge_group(
        self, connection: sqlite3.Connection, sensor: str, group: Sequence[tuple[int, ReadingDocument]]
    ) -> None:
        ids = [id_ for id_, _ in group]
        one = merged([document for _, document in group])
        body = one.json_text()
        crc = digest(sensor, one.seq, one.from_seq or one.seq, one.clock, body)
        with transaction(connection):
            first = connection.execute("SELECT boot_s, start FROM readings WHERE id = ?", (ids[0],)).fetchone()
            _delete(connection, ids[:-1])
            connection.execute(
                "UPDATE readings SET from_seq = ?, boot_s = ?, start = ?, seconds = ?, flag = ?, crc = ?, body = ?"
                " WHERE id = ?",
                (one.from_seq, *first, one.seconds, one.flag, crc, body, ids[-1]),
            )
            count_lost(connection, "merged", len(ids))
        self._ledger.counted_lost("merged", len(ids))
        log.info("journal.readings_merged", sensor=sensor, from_seq=one.from_seq, seq=one.seq, readings=len(ids))


def _groups(
    documents: Sequence[tuple[int, ReadingDocument]], level_s: float
) -> Iterator[list[tuple[int, ReadingDocument]]]:
    """Neighbours that start in the same hour or day and may be merged, in order."""
    for _, same in groupby(documents, key=lambda d: from_rfc3339(d[1].start) // level_s):
        group: list[tuple[int, ReadingDocument]] = []
        for item in same:
            if group and not mergeable(group[-1][1], item[1]):
                yield group
                group = []
            group.append(item)
        yield group


def readable(computed: int, stored: int, body: str) -> ReadingDocument | None:
    """The document of a stored reading; None when its row is not what was stored."""
    if computed != stored:
        return None
    try:
        return ReadingDocument.model_validate_json(body)
    except ValidationError:
        return None


def count_lost(connection: sqlite3.Connection, kind: str, number: int) -> None:
    """Inside a transaction."""
    connection.execute(
        "INSERT INTO lost (kind, count) VALUES (?, ?) ON CONFLICT (kind) DO UPDATE SET count = count + excluded.count",
        (kind, number),
    )


def _delete(connection: sqlite3.Connection, ids: Sequence[int]) -> None:
    connection.executemany("DELETE FROM readings WHERE id = ?", [(id_,) for id_ in ids])


def _free_pages(connection: sqlite3.Connection) -> int:
    """Pages that can still be filled: on the free list, and up to the limit."""
    limit, used, free = (
        connection.execute(f"PRAGMA {name}").fetchone()[0]
        for name in ("max_page_count", "page_count", "freelist_count")
    )
    return int(limit - used + free)
