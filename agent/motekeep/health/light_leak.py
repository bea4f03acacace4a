"""light-leak seen by a sensor alone: false counts that come with the sun and go with it.

Owns the judgement over days. Must not know how channels go together (`shape`) nor how daylight runs (`daylight`).
"""

from collections import deque
from collections.abc import Mapping
from statistics import median
from typing import Any, ClassVar

from motekeep.health.check import Check
from motekeep.health.daylight import Daylight, daylight_excess
from motekeep.health.finding import Suspicion
from motekeep.health.hour import Hour
from motekeep.health.memory import Memory, is_number
from motekeep.health.shape import (
    BLOCKS_A_DAY,
    DAY_S,
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


class LightLeakAlone(Check):
    """light-leak without a twin: N(>0.3) exceeds what N(>0.5) and N(>1) let expect, and the excess follows daylight.

    The air has a daily course too (traffic, humidity), but in all channels: what the relation between them leaves over
    has none in a sound unit. Its medians over the last eight days, eighth of the day by eighth, must rise over a flat
    night like half a sine wave of some phase and of eight to sixteen hours (`daylight`). And light adds the same number
    to any air: in the brighter half the relative excess grows with 1/N(>0.5), by Theil and Sen's slope, where humidity
    that the relation took wrongly would multiply. Where nothing is learnt the relation is fitted to the same days,
    which makes it less sure: the fit takes a part of the leak for air. Once open it stays until five days have failed
    to show it, or a winter's dull week would close it.
    """

    code: ClassVar[str] = "light-leak"
    clear_s: ClassVar[float] = 3600.0
    slow: ClassVar[bool] = True

    KEPT = 8 * BLOCKS_A_DAY
    LEAST_BLOCKS = 32
    ADDITIVE = 0.65
    LEAST_DARK, BENT = 10, 0.04  # blocks; off in proportion
    LATELY, NIGHT = 3 * BLOCKS_A_DAY, 0.4  # blocks; excess at night over that by day, at most
    MISSED = 5  # days

    def __init__(self) -> None:
        self._plane: Plane | None = None
        self._begin()

    def _begin(self) -> None:
        self._builder = BlockBuilder()
        self._blocks: deque[Block] = deque(maxlen=self.KEPT)
        self._since: float | None = None  # Unix seconds, while it holds
        self._missed = 0  # days in a row without a sign of it
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
        new_day = bool(self._blocks) and block.utc // DAY_S != self._blocks[-1].utc // DAY_S
        # one that is open is asked about once a day, as it counts the days that fail to show it
        if (new_day or (self._since is None and block.slot == BLOCKS_A_DAY // 2)) and len(
            self._blocks
        ) >= self.LEAST_BLOCKS:
            self._look()
        self._blocks.append(block)

    def _look(self) -> None:
        plane = self._plane if self._plane is not None else fit_plane(self._blocks)
        excess = [plane.excess(b) - plane.a for b in self._blocks]
        level = level_of(list(self._blocks))
        pairs = [(b.utc, e) for b, e in zip(self._blocks, excess, strict=True)]
        found = daylight_excess(pairs, level, strict=self._since is None)
        if found is None or (self._since is None and not self._additive(found, excess)):
            self._missed += 1
            if self._missed >= self.MISSED:
                self._since = None
            return
        self._missed = 0
        if self._since is None:
            self._since = self._began(found, excess)
        self._confidence = 0.65 if self._plane is None else 0.8 if found.explained < 0.85 else 0.9
        self._evidence = (
            f"{found.day:.0f} false counts /dL above 0.3 um around {found.noon_utc_h:.1f} h UTC for some "
            f"{found.day_h:.0f} h a day, {found.night:.0f} at night; daylight explains "
            f"{100.0 * found.explained:.0f} % of their course"
        )

    def _additive(self, found: Daylight, excess: list[float]) -> bool:
        """Whether the brighter half of the day has one excess in any air, and night is not off in proportion."""
        bright = [(b.n05, e) for b, e in zip(self._blocks, excess, strict=True) if found.light(b.slot) > 0.5]
        slope = theil_sen([1.0 / n05 for n05, _ in bright], [e / n05 for n05, e in bright])
        dark = [b for b in self._blocks if found.light(b.slot) < 0.1]
        if self._plane is not None and len(dark) >= self.LEAST_DARK and bend_of(self._plane, dark) > self.BENT:
            return False
        # a floor that rose within these days gives medians of two halves, in which slots fall to either by chance
        lately = [(found.light(b.slot), e) for b, e in zip(self._blocks, excess, strict=True)][-self.LATELY :]
        day, night = [e for light, e in lately if light > 0.5], [e for light, e in lately if light < 0.1]
        if not day or not night or median(night) > self.NIGHT * median(day):
            return False
        return slope is not None and slope.value >= self.ADDITIVE * median([e for _, e in bright])

    def _began(self, found: Daylight, excess: list[float]) -> float:
        """The day from which on the brightest block of each day shows it."""
        by_day: dict[float, float] = {}
        for block, value in zip(self._blocks, excess, strict=True):
            day = block.utc // DAY_S * DAY_S
            by_day[day] = max(by_day.get(day, value), value)
        days = list(by_day)
        tops = [by_day[day] - found.night for day in days]
        return days[min(chart_began(tops, found.day / 2.0), len(days) - 1)]

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        return Suspicion(boot_seconds(self._since, at), self._confidence, self._evidence)

    def memory(self) -> Memory:
        kept: dict[str, Any] = {"blocks": packed(self._blocks)}
        if self._since is not None:
            kept |= {"since": self._since, "missed": self._missed}
        return kept

    def recall(self, memory: Memory, at: Instant) -> None:
        self._blocks.extend(unpacked(memory.get("blocks")))
        since = memory.get("since")
        if is_number(since) and self._blocks:
            self._since = since
            missed = memory.get("missed")
            self._missed = int(missed) if is_number(missed) else 0
            self._evidence, self._confidence = "as before the restart", 0.65
