"""The lesson `shape`: how a unit's channels go together in its first two weeks.

Owns what is gathered, and what physics allows to be learnt. Must not know what a later change means.
"""

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median
from typing import ClassVar, TypeGuard

from motekeep.health.baseline import Lesson, Notes
from motekeep.health.day_ratios import DayBuilder, DayRatios, UsualRatios, packed_days, unpacked_days, usual_of
from motekeep.health.daylight import daylight_excess
from motekeep.health.hour import Hour
from motekeep.health.memory import is_number
from motekeep.health.shape import BLOCKS_A_DAY, DAY_S, Block, BlockBuilder, Plane, fit_plane, packed, unpacked
from motekeep.measure.dose import ServiceKind

DAYS = 14  # weather holds for two to three days; so long it takes to see several of its kinds
_LEAST_BLOCKS, _LEAST_DAYS = 60, 9
# ln N(>0.5)/N(>0.3) of any air: a power law of -1 (fresh desert dust is steeper) to -6 (a narrow mode below 0.2 um).
STEEPEST, FLATTEST = -3.1, -0.1
LEAST_FALSE, LEAST_SHARE = 350.0, 0.05


@dataclass(frozen=True, slots=True)
class Shape:
    """What is learnt: the relation of the smallest three channels, and the usual ratios."""

    plane: Plane
    usual: UsualRatios


def false_floor(plane: Plane, level: float) -> bool:
    """Whether the floor of this fit is more than any sound unit has. `level` is the median N(>0.3).

    Sound units show some tens of false counts per dL (ISO 21501-4 asks the maker to state them; the number is common
    practice, no source). The fit may be wrong by a few per cent of the level where smoke or dust bend it.
    """
    return plane.a - 3.0 * plane.a_error > max(LEAST_FALSE, LEAST_SHARE * level)


class ShapeLesson(Lesson):
    """Learns `shape` from two weeks of sound hours. A unit whose channels no air explains is not learnt as normal: a
    floor that no sound unit has, an excess that follows daylight, a ratio outside of any size distribution. Then the
    lesson waits, with the latest two weeks in hand, until it can be true."""

    name: ClassVar[str] = "shape"
    begun_again_by: ClassVar[frozenset[ServiceKind]] = frozenset(
        {ServiceKind.CLEANED, ServiceKind.FAN_REPLACED, ServiceKind.UNIT_REPLACED, ServiceKind.MOVED}
    )

    def __init__(self) -> None:
        self.forget()

    def forget(self) -> None:
        self._builder, self._day_builder = BlockBuilder(), DayBuilder()
        self._blocks: deque[Block] = deque(maxlen=DAYS * BLOCKS_A_DAY)
        self._days: deque[DayRatios] = deque(maxlen=DAYS)
        self._part: Shape | None = None

    def hour(self, hour: Hour) -> None:
        if self._part is not None or not hour.sound:
            return
        block = self._builder.add(hour)
        if block is None:
            return
        self._blocks.append(block)
        day = self._day_builder.add(block)
        if day is None:
            return
        if self._days and len(day.ratios) != len(self._days[-1].ratios):
            self._days.clear()
        self._days.append(day)
        if self._blocks[-1].utc - self._blocks[0].utc >= (DAYS - 1) * DAY_S or len(self._blocks) >= 100:
            self._part = self._learn()

    def _learn(self) -> Shape | None:
        blocks, days = self._blocks, self._days
        if len(blocks) < _LEAST_BLOCKS or len(days) < _LEAST_DAYS:
            return None
        usual = usual_of(list(days))
        plane = fit_plane(blocks)
        level = median([block.n03 for block in blocks])
        if not STEEPEST < usual.medians[0] < FLATTEST or false_floor(plane, level):
            return None
        if daylight_excess([(b.utc, plane.excess(b) - plane.a) for b in blocks], level) is not None:
            return None
        return Shape(plane, usual)

    def part(self) -> Shape | None:
        return self._part

    def notes(self) -> Notes:
        if self._part is not None:
            plane, usual = self._part.plane, self._part.usual
            return {
                "plane": [plane.a, plane.a_error, plane.b, plane.d, plane.k, plane.scatter, plane.ratio],
                "medians": list(usual.medians),
                "twist": [usual.twist, usual.twist_spread, float(usual.days)],
            }
        return {"blocks": packed(self._blocks), "ratios": packed_days(list(self._days))}

    def recall(self, notes: Notes) -> None:
        self.forget()
        plane, medians, twist = [notes.get(name) for name in ("plane", "medians", "twist")]
        if _numbers(plane, 7) and _numbers(medians) and _numbers(twist, 3):
            if len(medians) in {2, 3} and plane[6] > 0.0 and twist[1] >= 0.0 and twist[2] >= 1.0:
                usual = UsualRatios(tuple(medians), twist[0], twist[1], int(twist[2]))
                self._part = Shape(Plane(*plane), usual)
            return
        self._blocks.extend(unpacked(notes.get("blocks")))
        self._days.extend(unpacked_days(notes.get("ratios")))


def _numbers(values: object, count: int | None = None) -> TypeGuard[Sequence[float]]:
    if not isinstance(values, list | tuple) or not all(is_number(value) for value in values):
        return False
    return count is None or len(values) == count
