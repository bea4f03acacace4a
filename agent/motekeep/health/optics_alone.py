"""optics-fouled seen by a sensor alone: light is lost, and every threshold asks for larger particles than it did.

Owns the judgement over weeks. Must not know how channels go together (`shape`, `day_ratios`).
"""

from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import exp, hypot
from statistics import median
from typing import Any, ClassVar

from motekeep.health.check import Check
from motekeep.health.day_ratios import DayBuilder, DayRatios, packed_days, unpacked_days
from motekeep.health.finding import Suspicion
from motekeep.health.hour import Hour
from motekeep.health.lessons.shape import Shape
from motekeep.health.memory import Memory, is_number
from motekeep.health.shape import DAY_S, Block, BlockBuilder, bend_of, boot_seconds, packed, unpacked
from motekeep.health.trend import chart_began, mann_kendall, theil_sen
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind


@dataclass(frozen=True, slots=True)
class _Signs:
    """What ten days say. `bend` is what N(>0.3) exceeds the learnt relation by in proportion, freed of any floor;
    `twist` the ln change of N(>2.5)^2/(N(>1) N(>5)); each with its score in standard deviations. `fall` is the ln
    change of N(>0.5)/N(>0.3)."""

    bend: float
    bend_score: float
    twist: float
    twist_score: float
    fall: float


class OpticsFouledAlone(Check):
    """optics-fouled without a twin: for ten days the channels have not gone together as in the first two weeks, by a
    factor that is the same in clean air and in dirty, in the way that a loss of light parts them.

    Lost light moves each threshold by a factor of its own (`day_ratios` says why), which shows twice:

    - bend: the relation that gives N(>0.3) from N(>0.5) and N(>1) is off in proportion. It is the intercept of Theil
      and Sen's line through relative excess and 1/N(>0.5), so that a floor, which is its slope, does not count.
      A weak fan loses no particles that small.
    - twist: N(>2.5) leaves the middle between N(>1) and N(>5). A weak fan loses large particles in about geometric
      steps, which leaves the middle where it was; more coarse dust does too.

    Each is scored against what air does over weeks (ours: sd `BEND_SD`, `TWIST_SD`, and what the unit's first weeks
    show). It opens when one alone scores `ALONE`, or both `TOGETHER`, and N(>0.5)/N(>0.3) has fallen; it closes when
    both score less than half. The beginning is that of the rise in Page's chart (1954) over means of three days,
    as days are alike and would ruin a chart; that it goes on is said by Mann and Kendall's test over the same means.

    Limits. The first two weeks are taken as right: what fouled before is not seen. Air that becomes another kind for
    weeks (a season of wood smoke) bends the relation too, as seen from here it is a change of the unit; so one sign
    alone has confidence 0.65. By chance of the thresholds some units show little of either.
    """

    code: ClassVar[str] = "optics-fouled"
    clear_s: ClassVar[float] = 3600.0
    slow: ClassVar[bool] = True

    RECENT, KEPT, THIRD = 10, 42, 3  # days
    BEND_SD, TWIST_SD = 0.025, 0.05
    ALIKE = 4.0  # days of weather that count as one
    ALONE, TOGETHER, LEAST_BOTH, LEAST_FALL, MOST = 4.0, 3.5, 1.2, 0.03, 6.0
    STALE_S, LEAST_BLOCKS, LEAST_PART = 16 * DAY_S, 30, 10

    def __init__(self) -> None:
        self._shape: Shape | None = None
        self._begin()

    def _begin(self) -> None:
        self._builder, self._day_builder = BlockBuilder(), DayBuilder()
        self._blocks: deque[Block] = deque(maxlen=80)  # ten days
        self._days: deque[DayRatios] = deque(maxlen=self.KEPT)
        self._bends: deque[tuple[float, float]] = deque(maxlen=self.KEPT)  # utc of a day, its bend with any floor
        self._since: float | None = None  # Unix seconds, while it holds
        self._confidence = 0.0
        self._evidence = ""

    def learnt(self, parts: Mapping[str, Any]) -> None:
        self._shape = parts.get("shape")

    def service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        if kind is not ServiceKind.NOTE:
            self._begin()

    def hour(self, hour: Hour) -> None:
        block = self._builder.add(hour)
        if block is None or (self._blocks and block.utc <= self._blocks[-1].utc):
            return
        day = self._day_builder.add(block)
        if day is not None and self._shape is not None:
            self._days.append(day)
            bends = [self._bend(self._shape, b) for b in self._blocks if b.utc // DAY_S * DAY_S == day.utc]
            self._bends.append((day.utc, median(bends) if bends else 0.0))
            self._look(self._shape)
        self._blocks.append(block)

    def _bend(self, shape: Shape, block: Block) -> float:
        plane = shape.plane
        return (plane.excess(block) - plane.a) / block.n05 / plane.ratio

    def _look(self, shape: Shape) -> None:
        signs = self._signs(shape)
        if signs is None:
            return
        bend, twist = abs(signs.bend_score), abs(signs.twist_score)
        both = min(bend, twist) >= self.LEAST_BOTH and hypot(bend, twist) >= self.TOGETHER
        if self._since is None:
            if not (max(bend, twist) >= self.ALONE or both) or signs.fall > -self.LEAST_FALL:
                return
            self._since = self._began(shape, signs)
        elif max(bend, twist) < self.ALONE / 2.0:
            self._since = None
            return
        self._confidence = 0.65 if not both else 0.9 if min(bend, twist) >= 2.0 else 0.8
        going = ", and it goes on" if mann_kendall(self._thirds(shape, signs)).z > 2.0 else ""
        self._evidence = (
            f"over ten days N(>0.3) is {100.0 * signs.bend:+.0f} % off what N(>0.5) and N(>1) gave in the first weeks "
            f"(score {bend:.1f}), N(>2.5) {50.0 * (exp(signs.twist) - 1.0):+.0f} % off the middle of its neighbours "
            f"({twist:.1f}), N(>0.5)/N(>0.3) {100.0 * (exp(signs.fall) - 1.0):+.0f} %{going}"
        )

    def _signs(self, shape: Shape) -> _Signs | None:
        width = len(shape.usual.medians)
        days = [day for day in self._days if len(day.ratios) == width][-self.RECENT :]
        if len(days) < self.RECENT or days[-1].utc - days[0].utc > self.STALE_S:
            return None
        blocks = [b for b in self._blocks if b.utc >= days[0].utc]
        if len(blocks) < self.LEAST_BLOCKS:
            return None
        x = [1.0 / b.n05 for b in blocks]
        line = theil_sen(x, [self._bend(shape, b) for b in blocks], alike=True)
        if line is None:
            return None
        bend = line.intercept
        for part in _parts(blocks, days[len(days) // 2].utc):
            own = bend_of(shape.plane, part) if len(part) >= self.LEAST_PART else bend
            bend = min(max(2.0 * own, 0.0), bend) if bend > 0.0 else max(min(2.0 * own, 0.0), bend)
        blur = (line.high - line.low) / 4.0 * median(x)
        bend_sd = hypot(self.BEND_SD, shape.plane.scatter, blur)
        twist = twist_sd = 0.0
        if width == 3:
            twist = median([_twist(day) for day in days]) - shape.usual.twist
            alike = self.ALIKE / len(days) + self.ALIKE / shape.usual.days
            twist_sd = hypot(self.TWIST_SD, shape.usual.twist_spread * alike**0.5)
        fall = median([day.ratios[0] for day in days]) - shape.usual.medians[0]
        twist_score = _held(twist / twist_sd, self.MOST) if twist_sd else 0.0
        return _Signs(bend, _held(bend / bend_sd, self.MOST), twist, twist_score, fall)

    def _thirds(self, shape: Shape, signs: _Signs) -> list[float]:
        """The clearer sign as a share of what it is now, in means of three days of which the last ends now."""
        if abs(signs.bend_score) >= abs(signs.twist_score):
            values = [bend / signs.bend for _, bend in self._bends]
        else:
            values = [(_twist(day) - shape.usual.twist) / signs.twist for day in self._days if len(day.ratios) == 3]
        first = len(values) % self.THIRD
        return [median(values[i : i + self.THIRD]) for i in range(first, len(values), self.THIRD)]

    def _began(self, shape: Shape, signs: _Signs) -> float:
        thirds = self._thirds(shape, signs)
        began = chart_began([min(max(value, -1.0), 1.0) for value in thirds], 0.5)
        index = len(self._days) - (len(thirds) - began) * self.THIRD
        return self._days[min(max(index, 0), len(self._days) - 1)].utc

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        return Suspicion(boot_seconds(self._since, at), self._confidence, self._evidence)

    def memory(self) -> Memory:
        kept: dict[str, Any] = {
            "days": packed_days([day for day in self._days if len(day.ratios) == len(self._days[-1].ratios)]),
            "bends": [value for utc, bend in self._bends for value in (utc, round(bend, 4))],
            "blocks": packed(self._blocks),
        }
        if self._since is not None:
            kept |= {"since": self._since, "confidence": self._confidence}
        return kept

    def recall(self, memory: Memory, at: Instant) -> None:
        self._days.extend(unpacked_days(memory.get("days")))
        self._blocks.extend(unpacked(memory.get("blocks")))
        bends = memory.get("bends")
        if isinstance(bends, Sequence) and len(bends) % 2 == 0 and all(is_number(value) for value in bends):
            self._bends.extend(zip(bends[::2], bends[1::2], strict=True))
        since, confidence = memory.get("since"), memory.get("confidence")
        if is_number(since) and is_number(confidence):
            self._since, self._confidence = since, min(max(confidence, 0.0), 1.0)
            self._evidence = "as before the restart"


def _parts(blocks: Sequence[Block], middle_utc: float) -> list[list[Block]]:
    """Both halves of the time, and the four quarters of the day. What is in proportion is in each of them; a floor that
    rose within these days, or daylight, bends the line through all blocks but not that of every part."""
    halves = [[b for b in blocks if b.utc < middle_utc], [b for b in blocks if b.utc >= middle_utc]]
    return halves + [[b for b in blocks if b.slot // 2 == quarter] for quarter in range(4)]


def _twist(day: DayRatios) -> float:
    return day.ratios[1] - day.ratios[2]


def _held(value: float, most: float) -> float:
    return min(max(value, -most), most)
