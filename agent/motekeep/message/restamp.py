"""Readings stamped afterwards, when the clock is known at last.

Owns what changes in a reading document, the amendment that says so to whoever has it already, and the bounds in time of
a boot that never knew its clock. Pure: knows no clock and no store.

A boot is a stretch of boot seconds. Where its offset (wall clock minus boot seconds) became known, its readings are
`corrected`: start = boot_s + offset. Where it never did, they are `bounded`: the boot began after the last known moment
before it and ended before the first known moment after it, and boots in between took at least as long as they are known
to have lasted.
"""

from collections.abc import Sequence
from dataclasses import dataclass

from motekeep.instant import rfc3339
from motekeep.message.documents import AmendDocument, Clock, ReadingDocument

# No reading is older than the program that made it: the only known moment before a first boot without a clock.
NOT_BEFORE = 1_796_083_200.0  # 2026-12-01T00:00:00Z


@dataclass(frozen=True, slots=True)
class BootSpan:
    """A boot in the order of boots: seconds it is known to have lasted, and its offset where that became known."""

    seconds: float
    offset: float | None


@dataclass(frozen=True, slots=True)
class Bounds:
    """`boot_s` 0 of a boot lies between these two moments (Unix seconds)."""

    earliest: float
    latest: float

    @property
    def middle(self) -> float:
        """Half-way: the offset whose greatest possible error is smallest."""
        return (self.earliest + self.latest) / 2


def bounds(boots: Sequence[BootSpan], index: int) -> Bounds | None:
    """Between which moments the boot at `index` began; None while no later boot knows its clock.

    When the two contradict each other (a clock that somebody set by hand), both are the later one: what was measured
    before a known moment stays before it.
    """
    latest: float | None = None
    between_s = boots[index].seconds
    for boot in boots[index + 1 :]:
        if boot.offset is not None:
            latest = boot.offset - between_s
            break
        between_s += boot.seconds
    if latest is None:
        return None
    earliest, between_s = NOT_BEFORE, 0.0
    for boot in reversed(boots[:index]):
        if boot.offset is not None:
            earliest = boot.offset + boot.seconds
            break
        between_s += boot.seconds
    return Bounds(min(earliest + between_s, latest), latest)


def restamped(document: ReadingDocument, clock: Clock, offset: float, between: Bounds | None = None) -> ReadingDocument:
    """The same reading with `start` = boot_s + offset; with `between` its start is bracketed too."""
    changed: dict[str, object] = {"clock": clock, "start": rfc3339(document.boot_s + offset)}
    if between is not None:
        changed["start_between"] = (
            rfc3339(document.boot_s + between.earliest),
            rfc3339(document.boot_s + between.latest),
        )
    return document.model_copy(update=changed)


def restamp_amendment(sensor: str, from_seq: int, to_seq: int, clock: Clock, shift_s: float) -> AmendDocument:
    """To whoever received these readings as `unsynced`: their clock from now on, and the seconds to add to `start`."""
    return AmendDocument.model_validate(
        {
            "schema": "motekeep/amend/1",
            "sensor": sensor,
            "reasons": [],
            "from_seq": from_seq,
            "to_seq": to_seq,
            "clock": clock,
            "shift_s": round(shift_s, 3),
        }
    )
