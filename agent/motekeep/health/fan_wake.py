"""A fan that stands still after a wake: fan-stopped for sensors that sleep, without a twin.

Owns the comparison of a wake's plateau with what was there before. Must not know how a wake is looked at.
"""

from collections import deque
from dataclasses import dataclass
from math import exp
from typing import ClassVar

from motekeep.health.chance import poisson_at_most
from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.memory import Memory, is_number
from motekeep.health.wake import Wake
from motekeep.health.wake_watch import EARLY_S
from motekeep.instant import Instant
from motekeep.measure.interval import Interval

Levels = tuple[float, ...]
HOUR_S = 3600.0


@dataclass(slots=True)
class _Silence:
    """Wakes in a row that were as still as a stopped fan leaves them: levels before, pulses of the second channel that
    came and that would have come had the air fallen to AIR_FALLS_TO. `sealed`: what was in the cell never came out."""

    since: float
    before: Levels
    left: Levels
    sealed: bool = False
    seen: float = 0.0
    due: float = 0.0
    wakes: int = 0


class FanStoppedByWakes(Check):
    """fan-stopped: after waking no air comes in.

    A fan that does not start leaves a draught of warmth, a hundredth of the flow or less, through a cell in which most
    has settled: under a hundredth of the particles above 0.5 um, besides the false counts of the smallest channel. Air
    may have changed while the sensor slept, so level alone tells nothing, and this much is asked:

    1. The smallest channel is at most DEPTH of what it was when the sensor was last awake, and clearly under the lowest
       of the last 24 hours: a plume that went, or a night as clean as the last one, is no fault.
    2. Above 0.5 um, where no false counts hold it up, fewer pulses came than air that had fallen to AIR_FALLS_TO could
       bring by chance, added up over wakes in a row.
    3. One of two. Either what was left in the cell did not come out: air that was cleaned while the sensor slept
       leaves the old air in the cell, of which settling and draught take some 0.4 % a second at the most, and a fan
       that runs blows it through the beam in the first seconds (below 0.5 um, where no dust is stirred up). That tells
       at the first wake after a sleep of ten minutes; after half an hour nothing is left to come out. Or it stays so
       for a day: an air cleaner, rain or a clean front can do as much for some hours.

    At 10,000 /dL and sleeps of ten minutes the first wake tells, at 5,000 mostly; below some 2,000, and after long
    sleeps, it takes the day. Then it holds until air is back: the smallest channel at a quarter of before, or a tenth
    above 0.5 um. Needs counts, and an hour of levels first. Of a sensor that never sleeps it hears nothing.
    """

    code: ClassVar[str] = "fan-stopped"
    clear_s: ClassVar[float] = 60.0
    again_s: ClassVar[float] = 4.0 * HOUR_S  # a wake must come first

    DEPTH = 0.06
    BELOW_LOWEST = 0.35
    AIR_FALLS_TO = 0.02
    CHANCE = 1e-5
    CHANCE_SEALED = 1e-3  # beside the other
    HOURS = 24
    LEAST_HOURS = 2  # begun, so an hour at the least
    LEAST_FRAMES = 3
    FADES_PER_S = 4e-3  # of the small particles in a still cell: a large draught, and settling
    FLUSH_S = 2.0  # of a small cell, as far as a slow cadence sees it
    LASTS_S = 24.0 * HOUR_S
    BACK, BACK_LARGER, BACK_PULSES = 0.25, 0.1, 8.0

    def __init__(self, flow_l_min: float, period_s: float) -> None:
        self._per_pulse = 6.0 / (flow_l_min * period_s)  # per dL, of one frame that looks at all of the flow
        self._lowest: deque[tuple[float, Levels]] = deque(maxlen=self.HOURS)  # by hours of the boot
        self._last: Levels = ()
        self._silence: _Silence | None = None
        self._holds = False

    def interval(self, interval: Interval) -> None:
        counts = interval.counts
        if interval.frames.good < self.LEAST_FRAMES or len(counts) < 2 or any(not c.n for c in counts):
            return
        levels = tuple([c.mean for c in counts])
        if self._silence is None:
            self._note(interval.start.boot_s, levels)
        elif self._is_back(self._silence, levels, interval.frames.good):
            self._silence, self._holds = None, False

    def _note(self, boot_s: float, levels: Levels) -> None:
        hour = boot_s // HOUR_S
        if self._lowest and len(self._lowest[-1][1]) != len(levels):
            self._lowest.clear()
        self._last = levels
        if self._lowest and self._lowest[-1][0] == hour:
            self._lowest[-1] = hour, tuple(map(min, self._lowest[-1][1], levels))
        else:
            self._lowest.append((hour, levels))

    def wake(self, wake: Wake) -> None:
        levels, boot_s = wake.levels, wake.at.boot_s
        if len(wake.layout.sizes_um) < 2:
            return
        if self._holds and self._silence is not None:
            if self._is_back(self._silence, levels, wake.frames):
                self._silence, self._holds = None, False
            return
        if not self._is_still(levels):
            self._silence = None
            self._note(boot_s, levels)
            return
        if self._silence is None:
            self._silence = _Silence(boot_s, self._last, levels, sealed=self._is_sealed(wake))
        silence = self._silence
        silence.wakes += 1
        silence.seen += levels[1] * wake.frames / self._per_pulse
        silence.due += self.AIR_FALLS_TO * silence.before[1] * wake.frames / self._per_pulse
        lasting = boot_s - silence.since >= self.LASTS_S
        few = poisson_at_most(round(silence.seen), silence.due) < self.CHANCE
        self._holds = few and (silence.sealed or lasting)

    def _is_sealed(self, wake: Wake) -> bool:
        """Whether the air that was in the cell when the sensor fell asleep did not come out of it."""
        one = self._per_pulse / wake.early_frames
        old = (self._last[0] - self._last[1]) * exp(-self.FADES_PER_S * wake.asleep_s) * self.FLUSH_S / EARLY_S
        return (
            poisson_at_most(round(wake.early / one), (wake.levels[0] - wake.levels[1] + old) / one) < self.CHANCE_SEALED
        )

    def _is_still(self, levels: Levels) -> bool:
        before = self._silence.before if self._silence is not None else self._last
        if len(self._lowest) < self.LEAST_HOURS or len(before) != len(levels):
            return False
        lowest = [min(column) for column in zip(*[low for _, low in self._lowest], strict=True)]
        return levels[0] <= self.DEPTH * before[0] and all(
            level <= self.BELOW_LOWEST * low for level, low in zip(levels[:2], lowest, strict=False)
        )

    def _is_back(self, silence: _Silence, levels: Levels, frames: int) -> bool:
        before = silence.before
        if len(levels) != len(before):
            return False
        larger = levels[1] >= self.BACK_LARGER * before[1]
        return levels[0] >= self.BACK * before[0] or (
            larger and levels[1] * frames / self._per_pulse >= self.BACK_PULSES
        )

    def judge(self, at: Instant) -> Suspicion | None:
        silence = self._silence
        if silence is None or not self._holds:
            return None
        (small, larger), (small_left, larger_left) = silence.before[:2], silence.left[:2]
        evidence = (
            f"after waking no air comes in: smallest channel {small:.4g} before the sleep, {small_left:.3g} /dL after, "
            f"the next {larger:.4g} to {larger_left:.3g} /dL; {silence.seen:.0f} pulses in {silence.wakes} wakes where "
            f"air a fiftieth as dense would bring {silence.due:.0f}"
        )
        if silence.sealed:
            evidence += "; nothing of the old air in the cell came out"
        return Suspicion(silence.since, 0.95 if silence.sealed else 0.9, evidence)

    # -- across a restart ---------------------------------------------------------------------------------------

    def memory(self) -> Memory | None:
        silence = self._silence
        if silence is None or not self._holds:
            return None
        return {"before": silence.before, "left": silence.left, "seen": silence.seen, "due": silence.due}

    def recall(self, memory: Memory, at: Instant) -> None:
        before, left, seen, due = (memory.get(key) for key in ("before", "left", "seen", "due"))
        if not isinstance(before, list) or not isinstance(left, list) or not is_number(seen) or not is_number(due):
            return
        if len(before) != len(left) or len(before) < 2 or not all(is_number(x) for x in (*before, *left)):
            return
        self._silence = _Silence(at.boot_s, tuple(before), tuple(left), seen=seen, due=due, wakes=1)
        self._holds = True
