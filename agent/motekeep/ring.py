"""The last two minutes of a sensor's line, kept in memory for the moment when something fails.

Owns the bound on it, and its text in the capture format. Pure; opens no file.
"""

from collections import deque

from motekeep.capture import FrameRecord, LineRecord, format_record
from motekeep.health.check import LineState
from motekeep.instant import Instant

SECONDS = 120.0
# Two minutes of the fastest dialect, polled once a second, are some 8 kB. More is rubbish on the line, of which the
# last 32 KiB say enough: half a MiB for sixteen sensors. A burst of one byte costs a hundred, hence the second limit.
MOST_BYTES = 32 << 10
MOST_BURSTS = 2000


class Ring:
    """Everything that came in the last two minutes, as it came, and when the sensor was put to sleep or woken."""

    __slots__ = ("_bytes", "_items")

    def __init__(self) -> None:
        self._items: deque[tuple[float, bytes | LineState]] = deque()
        self._bytes = 0

    def add(self, data: bytes, at: Instant) -> None:
        if not data:
            return
        data = data[-MOST_BYTES:]
        self._items.append((at.boot_s, data))
        self._bytes += len(data)
        self._drop(at.boot_s)

    def line(self, state: LineState, at: Instant) -> None:
        if state in (LineState.ASLEEP, LineState.AWAKE):
            self._items.append((at.boot_s, state))
            self._drop(at.boot_s)

    def _drop(self, now_s: float) -> None:
        items = self._items
        while items and (items[0][0] < now_s - SECONDS or self._bytes > MOST_BYTES or len(items) > MOST_BURSTS):
            _, gone = items.popleft()
            if isinstance(gone, bytes):
                self._bytes -= len(gone)

    def text(self, sensor: str, about: str, at: Instant) -> str | None:
        """A capture of what is in it, on the clock of `at`, with one line of comment; None when nothing is."""
        self._drop(at.boot_s)
        if not self._items:
            return None
        lines = [f"# {' '.join(about.split())}".encode("ascii", "replace").decode("ascii")]
        for boot_s, item in self._items:
            t = boot_s + at.offset
            record = FrameRecord(t, sensor, item) if isinstance(item, bytes) else None
            lines.append(format_record(record or LineRecord(t, sensor, item is LineState.ASLEEP)))
        return "\n".join(lines) + "\n"
