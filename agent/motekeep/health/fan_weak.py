"""A fan that has grown weak, by the unit's own wakes: fan-weak without a twin.

Owns the comparison of recent wakes with the usual one. Must not know how a wake is looked at, nor when one is due.
"""

from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass
from math import sqrt
from typing import Any, ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.lessons.spin_up import BLOCK_WAKES, DAY_S, WEAK, SpinUp, SpinUpLesson, added
from motekeep.health.memory import Memory, is_number
from motekeep.health.wake import Wake
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind


@dataclass(slots=True)
class _Block:
    """The wakes of a day, or as many as a block holds: when it began and ended (Unix seconds), sum of weights (one over
    variance) and of weights times excess."""

    began: float
    ended: float
    wakes: int
    weight: float
    pull: float


class FanWeakByWakes(Check):
    """fan-weak: after waking, fresh air comes in more slowly than it did in this unit's first days.

    The level tells nothing without a twin: cleaner air looks the same. The time constant V/(q Q) of the cell does not
    know the air. Of each wake the shortfall below its own plateau is taken (`wake_watch`), in channels below 1 um, and
    held against the usual one (`SpinUp`): with q = 0.7 it is some 0.03 larger at 0.3 um and 0.05 at 0.5 um. That change
    is the unit in which it is told. Floor and optics hardly move it: false counts lower it, and a loss of a quarter of
    the signal raises it by some 5 % of its own. Air that changes does so both ways and is averaged out.

    A single wake tells little: at 5,000 /dL (50 pulses a second) its excess has a standard deviation of some 2. So the
    mean over the last days is judged, over whichever of 3 to 14 days is the clearest: at least LEAST and Z standard
    deviations above nothing, those of the lesson and of what does not average out included.

    While nothing is learnt yet, and while the mean is suspicious, it asks for more wakes than the schedule brings.
    """

    code: ClassVar[str] = "fan-weak"
    clear_s: ClassVar[float] = 3600.0
    again_s: ClassVar[float] = 3600.0
    slow: ClassVar[bool] = True

    Z = 3.3
    LEAST = 0.5
    LASTING = 0.1  # size and humidity of the particles change what settles, and that for days
    UNSURE_Z = 1.3
    DAYS = 14.0
    LEAST_WAKES = 12
    LEAST_S = 3.0 * DAY_S  # the wakes of one day share its weather
    EXTRA_WAKES = 160  # that may be asked for beyond the schedule in a row: two weeks at one every two hours
    GIVEN_BACK = 0.25  # of an extra wake, by each wake without suspicion

    def __init__(self) -> None:
        self._usual: SpinUp | None = None
        self._extra = float(self.EXTRA_WAKES)
        self._begin()

    def _begin(self) -> None:
        # of 14 days, at 144 wakes a day the most
        self._blocks: deque[_Block] = deque(maxlen=int(self.DAYS * 150.0 / BLOCK_WAKES))
        self._unsure = False
        self._suspicion: tuple[float, float, str] | None = None  # since (Unix seconds), confidence, evidence

    def learnt(self, parts: Mapping[str, Any]) -> None:
        usual = parts.get(SpinUpLesson.name)
        if usual != self._usual:
            if self._usual is not None:
                self._begin()
            self._usual = usual

    def service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        if kind in SpinUpLesson.begun_again_by:
            self._begin()
            self._extra = float(self.EXTRA_WAKES)

    def wake(self, wake: Wake) -> None:
        if self._usual is None:
            self._extra = max(self._extra - 1.0, 0.0)
            return
        excess = self._usual.excess(wake)
        if excess is None:
            return
        if self._suspicion is None:
            self._extra = min(self._extra + (-1.0 if self._unsure else self.GIVEN_BACK), float(self.EXTRA_WAKES))
        value, variance = excess
        now = wake.at.utc
        last = self._blocks[-1] if self._blocks else None
        if last is None or last.wakes >= BLOCK_WAKES or not 0.0 <= now - last.began < DAY_S:
            last = _Block(now, now, 0, 0.0, 0.0)
            self._blocks.append(last)
        last.ended, last.wakes = now, last.wakes + 1
        last.weight += 1.0 / variance
        last.pull += value / variance
        while self._blocks and not 0.0 <= now - self._blocks[0].began <= self.DAYS * DAY_S:
            self._blocks.popleft()
        self._look(self._usual)

    def _look(self, usual: SpinUp) -> None:
        weight = pull = clearest = mean = since = 0.0
        wakes = told = 0
        for block in reversed(self._blocks):
            weight, pull, wakes = weight + block.weight, pull + block.pull, wakes + block.wakes
            sigma = sqrt(1.0 / weight + usual.u**2 + self.LASTING**2)
            long_enough = wakes >= self.LEAST_WAKES and self._blocks[-1].ended - block.began >= self.LEAST_S
            if long_enough and pull / weight / sigma > clearest:
                clearest, mean, since, told = pull / weight / sigma, pull / weight, block.began, wakes
        self._unsure = clearest >= self.UNSURE_Z
        if clearest >= self.Z and mean >= self.LEAST:
            confidence = 0.95 if clearest >= self.Z + 1.0 else 0.85
            if self._suspicion is not None:
                since = min(since, self._suspicion[0])
            self._suspicion = since, confidence, self._told(usual, mean, clearest, told)
        elif clearest < self.UNSURE_Z:
            self._suspicion = None

    @staticmethod
    def _told(usual: SpinUp, mean: float, z: float, wakes: int) -> str:
        before = 100.0 * usual.shortfalls[0]
        after = before + 100.0 * mean * added(usual.sizes_um[0], usual.asleep_s)
        flow = 1.0 / (1.0 + mean * (1.0 / WEAK - 1.0))
        return (
            f"after waking fresh air comes in at about {flow:.2f} of the usual flow: in the first 20 s the smallest "
            f"channel is {after:.1f} % short of its plateau by {wakes} wakes, {before:.1f} % by the {usual.wakes} of "
            f"its first days ({z:.1f} standard deviations over all channels)"
        )

    def wants_wake(self, at: Instant) -> bool:
        return self._extra >= 1.0 and self._suspicion is None and (self._usual is None or self._unsure)

    def judge(self, at: Instant) -> Suspicion | None:
        if self._suspicion is None:
            return None
        since, confidence, evidence = self._suspicion
        return Suspicion(since - at.offset, confidence, evidence)

    # -- across a restart ---------------------------------------------------------------------------------------

    def memory(self) -> Memory:
        flat = [x for b in self._blocks for x in (b.began, b.ended, b.wakes, b.weight, b.pull)]
        return {"blocks": flat, "extra": self._extra, "open": float(self._suspicion is not None)}

    def recall(self, memory: Memory, at: Instant) -> None:
        flat, extra = memory.get("blocks"), memory.get("extra")
        if is_number(extra):
            self._extra = min(max(extra, 0.0), float(self.EXTRA_WAKES))
        if not isinstance(flat, list) or len(flat) % 5 or not all(is_number(x) for x in flat):
            return
        self._begin()
        for i in range(0, len(flat), 5):
            began, ended, wakes, weight, pull = flat[i : i + 5]
            if weight > 0.0:
                self._blocks.append(_Block(began, ended, int(wakes), weight, pull))
        if self._usual is not None and self._blocks:
            self._look(self._usual)
