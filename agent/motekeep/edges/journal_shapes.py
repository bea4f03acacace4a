"""What passes between the files of the journal: one sensor's state, what is held back, what one transaction writes.

Owns shapes, no behaviour.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field

from motekeep.edges.ports import NewReading, NewService, NoticeRow, Row
from motekeep.edges.spans import Spans

# What a row takes beside its body: its other columns, its entry in the index.
ROW_BYTES = 160


@dataclass(slots=True)
class SensorState:
    """One sensor. `used`: the last number given out; `stored`: the last one in the file; `offered`: the last one shown
    to the publisher while `unsynced`; `inherited`: the last one of earlier processes, which may have been shown too."""

    used: int = 0
    stored: int = 0
    waiting: Spans = field(default_factory=Spans)
    sent: Spans = field(default_factory=Spans)
    offered: int = 0
    inherited: int = 0
    changes: int = 0
    saved: int = 0


@dataclass(frozen=True, slots=True)
class SensorLine:
    """What is to be written of one sensor; `changes` says which state that was."""

    sensor: str
    last_seq: int
    waiting: str
    sent: str
    changes: int


@dataclass(frozen=True, slots=True)
class Changes:
    """All that memory knows and the file does not, for one transaction."""

    sensors: tuple[SensorLine, ...]
    kept: Mapping[str, str]
    lost: Mapping[str, int]
    notices_done: frozenset[int]
    marks: int

    def __bool__(self) -> bool:
        return bool(self.sensors or self.kept or self.lost or self.notices_done)


@dataclass(frozen=True, slots=True)
class Held:
    """What one commit wanted to store."""

    readings: tuple[NewReading, ...]
    notices: tuple[NoticeRow, ...]
    services: tuple[NewService, ...] = ()

    @property
    def bytes(self) -> int:
        """About what it takes in the file."""
        bodies = [r.body for r in self.readings] + [n.body for n in self.notices] + [s.body for s in self.services]
        return sum(map(len, bodies)) + ROW_BYTES * len(bodies)


@dataclass(frozen=True, slots=True)
class Glance:
    """What waits of one sensor at one moment: ranges in the file, then readings that only memory has."""

    ranges: tuple[tuple[int, int], ...]
    held: tuple[NewReading, ...]


def as_row(reading: NewReading) -> Row:
    """A reading that only memory has, as the publisher sees it."""
    return Row(
        reading.sensor,
        reading.seq,
        reading.seq,
        reading.boot_id,
        reading.boot_s,
        reading.seconds,
        reading.clock,
        reading.body,
    )
