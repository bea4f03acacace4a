"""floor-raised seen by a sensor alone: false counts stand beside those of the air, by day and by night.

Owns the judgement over days. Must not know how channels go together: that is `shape`.
"""

from collections import deque
from collections.abc import Mapping, Sequence
from statistics import median
from typing import Any, ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.hour import Hour
from motekeep.health.lessons.shape import false_floor
from motekeep.health.memory import Memory, is_number
from motekeep.health.shape import (
    Block,
    BlockBuilder,
    Plane,
    bend_of,
    boot_seconds,
    fit_plane,
    level_of,
    packed,
    unpacked,
)
from motekeep.health.trend import chart_began, theil_sen
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind


class FloorRaisedAlone(Check):
    """floor-raised without a twin: N(>0.3) exceeds what N(>0.5) and N(>1) let expect, by the same number in clean air
    and in dirty.

    Dirt that glows and noise of the photodiode add pulses to the smallest channel alone (liquid counters' service
    notes say so too), as many at any level of the air. Over the last three days, in blocks of three hours:

    - the median excess is at least `LEAST` per dL, and `LEAST_SHARE` of the level: the relation holds no better;
    - it is additive: the relative excess grows with 1/N(>0.5), by Theil and Sen's slope, which must give about as
      much as the median excess. Lost light, smoke and humidity multiply instead;
    - it is there at all times of the day, or daylight would explain it.

    Once open it stays until four days have shown less than half of that, as smoke can hide it. Where nothing is learnt,
    as the unit was never plausible (or is new), the floor is that of the unit's own fit over four to ten days, which
    must be beyond any sound unit's (`lessons.shape.false_floor`); that is less sure.
    """

    code: ClassVar[str] = "floor-raised"
    clear_s: ClassVar[float] = 3600.0
    slow: ClassVar[bool] = True

    RECENT_S, KEPT, FIRST = 3 * 86_400.0, 80, 30  # blocks: ten days, as a fit of its own needs weather
    LEAST, LEAST_SHARE, CLOSES, EVERY_HOUR = 300.0, 0.035, 0.5, 0.4
    SLOPE_LOW, SLOPE, SLOPE_HIGH = 0.3, 0.65, 1.7  # of the median excess: Sen's lower bound, the slope itself
    BENT = 0.05
    PROVEN = 5  # blocks in a row: fifteen hours, so that one turn of the weather cannot open it
    HOLDS_S = 4 * 86_400.0
    LEAST_BLOCKS = 12

    def __init__(self) -> None:
        self._plane: Plane | None = None
        self._begin()

    def _begin(self) -> None:
        self._builder = BlockBuilder()
        self._blocks: deque[Block] = deque(maxlen=self.KEPT)
        self._since: float | None = None  # Unix seconds, while it holds
        self._holding = 0  # blocks in a row
        self._seen = 0.0  # Unix seconds, when it showed last
        self._confidence = 0.0
        self._evidence = ""

    def learnt(self, parts: Mapping[str, Any]) -> None:
        shape = parts.get("shape")
        self._plane = None if shape is None else shape.plane

    def service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        if kind is not ServiceKind.NOTE:
            self._begin()

    def hour(self, hour: Hour) -> None:
        block = self._builder.add(hour)
        if block is None or (self._blocks and block.utc <= self._blocks[-1].utc):
            return
        self._blocks.append(block)
        if self._plane is not None:
            self._compare(self._plane)
        elif block.slot == 0 and len(self._blocks) >= self.FIRST:
            self._alone()

    def _compare(self, plane: Plane) -> None:
        recent = [b for b in self._blocks if b.utc > self._blocks[-1].utc - self.RECENT_S]
        if len(recent) < self.LEAST_BLOCKS:
            return
        excess = [plane.excess(b) - plane.a for b in recent]
        usual, level = median(excess), median([b.n03 for b in recent])
        least = max(self.LEAST, self.LEAST_SHARE * level)
        if self._since is not None:
            if usual >= self.CLOSES * least:
                self._seen = recent[-1].utc
                self._say(usual, level)
            elif recent[-1].utc - self._seen > self.HOLDS_S:
                self._since = None
            return
        self._holding = self._holding + 1 if self._stands(recent, excess, usual, least) else 0
        if self._holding < self.PROVEN:
            return
        everything = [min(max(plane.excess(b) - plane.a, 0.0), usual) for b in self._blocks]
        began = chart_began(everything, usual / 2.0)
        self._since, self._seen = self._blocks[min(began, len(self._blocks) - 1)].utc, recent[-1].utc
        self._confidence = 0.75 if usual < 2.0 * least else 0.9
        self._say(usual, level)

    def _stands(self, recent: Sequence[Block], excess: Sequence[float], usual: float, least: float) -> bool:
        """Whether the excess is large enough, always there, and additive."""
        if usual < least or not self._always(recent, excess, usual):
            return False
        rest = [e / b.n05 for b, e in zip(recent, excess, strict=True)]
        slope = theil_sen([1.0 / b.n05 for b in recent], rest, alike=True)
        if slope is None or slope.low < self.SLOPE_LOW * usual or self._bent_before(recent[0].utc):
            return False
        return self.SLOPE * usual <= slope.value <= self.SLOPE_HIGH * usual

    def _bent_before(self, utc: float) -> bool:
        """Whether the relation was off in proportion already: what lost light does, and then chance may add up."""
        older = [b for b in self._blocks if b.utc < utc]
        return self._plane is not None and len(older) >= self.LEAST_BLOCKS and bend_of(self._plane, older) > self.BENT

    def _say(self, usual: float, level: float) -> None:
        self._evidence = (
            f"{usual:.0f} false counts /dL above 0.3 um in the last three days, day and night, "
            f"of {level:.0f} in all; 1 um and 0.5 um let expect the rest"
        )

    def _always(self, blocks: Sequence[Block], excess: Sequence[float], usual: float) -> bool:
        quarters: list[list[float]] = [[], [], [], []]
        for block, value in zip(blocks, excess, strict=True):
            quarters[block.slot // 2].append(value)
        heard = [values for values in quarters if len(values) >= 2]
        return len(heard) >= 3 and min([median(values) for values in heard]) >= self.EVERY_HOUR * usual

    def _alone(self) -> None:
        plane, level = fit_plane(self._blocks), median([b.n03 for b in self._blocks])
        excess = [plane.excess(b) for b in self._blocks]
        false = false_floor(plane, level_of(list(self._blocks))) and self._always(list(self._blocks), excess, plane.a)
        if not false:
            self._since = None
            return
        if self._since is None:
            self._since = self._blocks[0].utc
        self._confidence = 0.6
        self._evidence = (
            f"{plane.a:.0f} +- {plane.a_error:.0f} false counts /dL above 0.3 um since the sensor is known, "
            f"of {level:.0f} in all"
        )

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        return Suspicion(boot_seconds(self._since, at), self._confidence, self._evidence)

    def memory(self) -> Memory:
        kept: dict[str, Any] = {"blocks": packed(self._blocks), "confidence": self._confidence}
        if self._since is not None:
            kept |= {"since": self._since, "seen": self._seen}
        return kept

    def recall(self, memory: Memory, at: Instant) -> None:
        self._blocks.extend(unpacked(memory.get("blocks")))
        since, seen, confidence = [memory.get(name) for name in ("since", "seen", "confidence")]
        if is_number(since) and is_number(seen) and is_number(confidence) and self._blocks:
            self._since, self._seen, self._confidence = since, seen, min(max(confidence, 0.0), 1.0)
            self._evidence = "as before the restart"
