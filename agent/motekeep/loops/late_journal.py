"""The journal as the publisher sees it while there may be none yet: a disk that is missing at the start.

Until one is attached every call is a StoreError, which the publisher meets with its usual backoff; retained documents
go out all the same.
"""

from collections.abc import Sequence

from motekeep.edges.ports import JournalReader, NoticeRow, Row
from motekeep.errors import StoreError


class LateJournal:
    """A `JournalReader` that is attached later, once, from another thread."""

    def __init__(self, path: str) -> None:
        self._path = path
        self._reader: JournalReader | None = None

    def attach(self, reader: JournalReader) -> None:
        self._reader = reader

    def _attached(self) -> JournalReader:
        if self._reader is None:
            raise StoreError(f"reading {self._path}", "the journal is not open yet", "check disk and [store] path")
        return self._reader

    def waiting(self, sensor: str, after_seq: int, limit: int) -> list[Row]:
        return self._attached().waiting(sensor, after_seq, limit)

    def notices(self, after_id: int, limit: int) -> list[NoticeRow]:
        return self._attached().notices(after_id, limit)

    def stored(self, sensor: str, from_seq: int, to_seq: int, limit: int) -> list[Row]:
        return self._attached().stored(sensor, from_seq, to_seq, limit)

    def mark_delivered(self, rows: Sequence[Row]) -> None:
        self._attached().mark_delivered(rows)

    def mark_sent(self, rows: Sequence[Row]) -> None:
        self._attached().mark_sent(rows)

    def mark_aside(self, rows: Sequence[Row]) -> None:
        self._attached().mark_aside(rows)

    def mark_taken(self, sensor: str, through_seq: int) -> None:
        self._attached().mark_taken(sensor, through_seq)

    def mark_notices(self, rows: Sequence[NoticeRow]) -> None:
        self._attached().mark_notices(rows)
