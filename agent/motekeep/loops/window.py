"""How much may be on its way to the broker at once, and how fast the backlog may follow.

Owns the messages in flight, the share of the backlog in them, its rate and its pace, and the watch on progress. Pure
but for its own state; seconds are boot seconds and come in with the calls.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from enum import Enum

from motekeep.edges.ports import NoticeRow, Row
from motekeep.loops.lanes import LATE_MOST

# Late messages leave at least a quarter of the window to the rest, so that a live reading finds room at once.
LATE_SHARE = 0.75
# A live reading queues behind the bytes of the backlog that are already on the way. Answers slower than SLOW_S shrink
# that, down to one reading at a time; on answers faster than FAST_S it grows. On a link of 20 kbit/s one full late
# message takes half a minute, on a fast one a few milliseconds.
FAST_S, SLOW_S = 1.0, 2.0


class Way(Enum):
    """What a message in flight is."""

    LIVE = "live"
    LATE = "late"
    AGAIN = "again"  # rows asked for by a resend request
    NOTICE = "notice"
    RETAINED = "retained"


BACKLOG = (Way.LATE, Way.AGAIN)


@dataclass(frozen=True, slots=True)
class Flight:
    """A message that the broker has not answered yet."""

    way: Way
    topic: str
    sent_s: float
    sensor: str = ""
    rows: Sequence[Row] = ()
    notice: NoticeRow | None = None


@dataclass(slots=True)
class Pace:
    """What the backlog may have in flight, by how fast the broker answers (additive increase, multiplicative
    decrease: Chiu and Jain, 1989)."""

    messages: int = 1
    rows: int = LATE_MOST
    slowed_s: float = 0.0

    def answered(self, sent_s: float, now_s: float, most: int) -> None:
        took_s = now_s - sent_s
        if took_s < FAST_S:
            if self.rows < LATE_MOST:
                self.rows = min(self.rows * 2, LATE_MOST)
            else:
                self.messages = min(self.messages + 1, most)
        elif took_s > SLOW_S and sent_s >= self.slowed_s:  # what was sent before the last slowing says nothing of it
            self.slowed_s = now_s
            if self.messages > 1:
                self.messages //= 2
            else:
                self.rows = max(self.rows // 2, 1)


@dataclass(slots=True)
class Allowance:
    """At most `rate` late messages a second, the unused of up to one second saved; 0 means no limit."""

    rate: float
    left: float = field(init=False)
    at_s: float = 0.0

    def __post_init__(self) -> None:
        self.left = max(self.rate, 1.0)

    def wait_s(self, now_s: float) -> float:
        """Seconds until one more may go; 0 when it may now."""
        if self.rate <= 0:
            return 0.0
        self.left = min(self.left + max(now_s - self.at_s, 0.0) * self.rate, max(self.rate, 1.0))
        self.at_s = now_s
        lacks = 1.0 - self.left
        return lacks / self.rate if lacks > 1e-6 else 0.0  # rounding must not make a wait too short to end

    def take(self) -> None:
        self.left -= 1.0 if self.rate > 0 else 0.0


class Window:
    """The messages in flight on one connection, oldest first."""

    def __init__(self, most: int) -> None:
        self.most = most
        self.answers = 0
        self.last_was_refusal = False
        self._flights: dict[int, Flight] = {}
        self._backlog = 0
        self._progress_s = 0.0

    def __len__(self) -> int:
        return len(self._flights)

    @property
    def full(self) -> bool:
        return len(self._flights) >= self.most

    @property
    def backlog_most(self) -> int:
        return max(int(self.most * LATE_SHARE), 1)

    def backlog_full(self, pace: Pace) -> bool:
        return self.full or self._backlog >= min(pace.messages, self.backlog_most)

    def flies(self, way: Way, topic: str) -> bool:
        """Whether anything of this kind is on its way."""
        return any(flight.way is way and flight.topic == topic for flight in self._flights.values())

    def add(self, mid: int, flight: Flight) -> None:
        if not self._flights:
            self._progress_s = flight.sent_s
        self._flights[mid] = flight
        self._backlog += flight.way in BACKLOG

    def answered(self, mid: int, now_s: float, *, refused: bool = False) -> Flight | None:
        flight = self._flights.pop(mid, None)
        if flight is not None:
            self.answers += 1
            self.last_was_refusal = refused
            self._progress_s = now_s
            self._backlog -= flight.way in BACKLOG
        return flight

    def oldest(self) -> Flight | None:
        return next(iter(self._flights.values()), None)

    def owed_s(self, now_s: float) -> float:
        """Seconds without any answer while one is owed."""
        return now_s - self._progress_s if self._flights else 0.0
