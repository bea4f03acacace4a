"""Rows out of the raw pages of an SQLite file, whatever state its tree is in.

Owns the page and record format (sqlite.org, "Database File Format", sections 1.6, 2 and 4), read only and read
suspiciously: whatever does not parse is skipped. Must not know what a row means. Every leaf page of a table says by
itself what it holds, so a lost header, a broken inner page or a cut-off end costs only the rows that were on the lost
pages. The write-ahead log is laid over the file, up to its last whole commit.
"""

import struct
from collections.abc import Iterator
from itertools import chain
from pathlib import Path

Value = int | float | str | bytes | None
WAL_HEADER, FRAME_HEADER = 32, 24
TABLE_LEAF = 0x0D


class Pages:
    """The pages of a database file with its log over it. Raises OSError when the file cannot be read at all."""

    def __init__(self, path: Path, page_bytes: int) -> None:
        self._file = path.open("rb")
        self._size = page_bytes
        self._count = path.stat().st_size // page_bytes
        self._log = log_frames(path.with_name(path.name + "-wal"), page_bytes)
        self._log_file = path.with_name(path.name + "-wal").open("rb") if self._log else None

    def close(self) -> None:
        self._file.close()
        if self._log_file is not None:
            self._log_file.close()

    @property
    def count(self) -> int:
        return max(self._count, max(self._log, default=0))

    def page(self, number: int) -> bytes:
        """Page `number` (from 1) as last committed; empty when it cannot be read."""
        try:
            if self._log_file is not None and number in self._log:
                self._log_file.seek(self._log[number])
                return self._log_file.read(self._size)
            self._file.seek((number - 1) * self._size)
            return self._file.read(self._size)
        except OSError:  # a bad sector: the rest of the file may be sound
            return b""

    def rows(self) -> Iterator[tuple[int, list[Value]]]:
        """Every row of every table leaf: rowid and values. Free pages are left out where the free list can be read.

        Of two versions of a row the newer one comes later: pages of the log are the last ones written.
        """
        free = self.free_pages()
        settled = (n for n in range(1, self.count + 1) if n not in self._log)
        for number in chain(settled, sorted(self._log)):
            if number in free:
                continue
            page = self.page(number)
            at = 100 if number == 1 else 0
            if len(page) < self._size or page[at] != TABLE_LEAF:
                continue
            cells = int.from_bytes(page[at + 3 : at + 5], "big")
            for index in range(min(cells, (self._size - at - 8) // 2)):
                offset = int.from_bytes(page[at + 8 + 2 * index : at + 10 + 2 * index], "big")
                try:
                    yield self._cell(page, offset)
                except (IndexError, ValueError, struct.error, OverflowError):
                    continue

    def free_pages(self) -> set[int]:
        """Pages on the free list: what they still hold was deleted. Empty when the list cannot be followed."""
        first = self.page(1)
        if not first.startswith(b"SQLite format 3\0"):
            return set()
        free: set[int] = set()
        trunk, total = struct.unpack(">II", first[32:40])
        while trunk and trunk not in free and len(free) <= total:
            page = self.page(trunk)
            if len(page) < self._size:
                return set()
            free.add(trunk)
            trunk, leaves = struct.unpack(">II", page[:8])
            if leaves > self._size // 4 - 2:
                return set()
            free |= set(struct.unpack(f">{leaves}I", page[8 : 8 + 4 * leaves]))
        return free if len(free) == total else set()

    def _cell(self, page: bytes, offset: int) -> tuple[int, list[Value]]:
        length, offset = _varint(page, offset)
        rowid, offset = _varint(page, offset)
        if length > 1 << 20:
            raise ValueError("no row of ours is that long")
        local = length
        most = self._size - 35
        if length > most:
            least = (self._size - 12) * 32 // 255 - 23
            local = least + (length - least) % (self._size - 4)
            local = least if local > most else local
        payload = page[offset : offset + local]
        if length > local:
            payload += self._overflow(int.from_bytes(page[offset + local : offset + local + 4], "big"), length - local)
        if len(payload) != length:
            raise ValueError("row cut off")
        return rowid, _record(payload)

    def _overflow(self, number: int, length: int) -> bytes:
        parts: list[bytes] = []
        while length > 0:
            page = self.page(number) if number else b""
            if len(page) < self._size:
                raise ValueError("overflow page missing")
            parts.append(page[4 : 4 + min(length, self._size - 4)])
            length -= len(parts[-1])
            number = int.from_bytes(page[:4], "big")
        return b"".join(parts)


def log_frames(path: Path, page_bytes: int) -> dict[int, int]:
    """Where in a write-ahead log the newest committed copy of each page is; empty without a usable log."""
    try:
        content = path.read_bytes()
    except OSError:
        return {}
    if len(content) < WAL_HEADER:
        return {}
    magic, _, size = struct.unpack(">III", content[:12])
    if magic not in (0x377F0682, 0x377F0683) or size != page_bytes:
        return {}
    order = ">" if magic & 1 else "<"
    check = _checksum(content[:24], (0, 0), order)
    if check != struct.unpack(">II", content[24:32]):
        return {}
    salt = content[16:24]
    committed: dict[int, int] = {}
    pending: dict[int, int] = {}
    for at in range(WAL_HEADER, len(content) - FRAME_HEADER - page_bytes + 1, FRAME_HEADER + page_bytes):
        header, page = content[at : at + FRAME_HEADER], content[at + FRAME_HEADER : at + FRAME_HEADER + page_bytes]
        check = _checksum(page, _checksum(header[:8], check, order), order)
        if header[8:16] != salt or check != struct.unpack(">II", header[16:24]):
            break
        number, size_after = struct.unpack(">II", header[:8])
        pending[number] = at + FRAME_HEADER
        if size_after:  # a commit
            committed |= pending
            pending = {}
    return committed


def _checksum(data: bytes, start: tuple[int, int], order: str) -> tuple[int, int]:
    one, two = start
    words = struct.unpack(f"{order}{len(data) // 4}I", data)
    for a, b in zip(words[::2], words[1::2], strict=True):
        one = (one + a + two) & 0xFFFFFFFF
        two = (two + b + one) & 0xFFFFFFFF
    return one, two


def _varint(data: bytes, at: int) -> tuple[int, int]:
    """A variable-length integer and the offset after it."""
    value = 0
    for index in range(8):
        byte = data[at + index]
        value = value << 7 | byte & 0x7F
        if byte < 0x80:
            return value, at + index + 1
    value = value << 8 | data[at + 8]
    return value - (1 << 64) if value >= 1 << 63 else value, at + 9


INTEGER_BYTES = {1: 1, 2: 2, 3: 3, 4: 4, 5: 6, 6: 8}


def _record(payload: bytes) -> list[Value]:
    end, at = _varint(payload, 0)
    if end > len(payload):
        raise ValueError("header longer than its record")
    kinds = []
    while at < end:
        kind, at = _varint(payload, at)
        kinds.append(kind)
    values: list[Value] = []
    at = end
    for kind in kinds:
        value, at = _value(payload, kind, at)
        values.append(value)
    if at != len(payload):
        raise ValueError("record of another length")
    return values


def _value(payload: bytes, kind: int, at: int) -> tuple[Value, int]:
    if kind == 0:
        return None, at
    if kind in INTEGER_BYTES:
        size = INTEGER_BYTES[kind]
        return int.from_bytes(payload[at : at + size], "big", signed=True), at + size
    if kind == 7:
        return struct.unpack(">d", payload[at : at + 8])[0], at + 8
    if kind in (8, 9):
        return kind - 8, at
    if kind < 12:
        raise ValueError("a kind of value that no file has")
    size = (kind - 12) // 2
    raw = payload[at : at + size]
    return (raw.decode("utf-8") if kind % 2 else raw), at + size
