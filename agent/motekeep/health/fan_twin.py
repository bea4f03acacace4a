"""fan-stopped seen beside a twin: the same air, one sensor goes blind within seconds, the other does not.

Owns the comparison of the two. Must not know how a stopped fan looks without a twin: that is `fan`.
"""

from collections import deque
from dataclasses import dataclass
from statistics import median
from typing import ClassVar

from motekeep.health.check import Check, LineState
from motekeep.health.finding import Suspicion
from motekeep.health.memory import Memory
from motekeep.instant import Instant
from motekeep.wire.frame import Frame, Observation


@dataclass(frozen=True, slots=True)
class _Pair:
    """Mean levels of both over one block, from `start` on."""

    start: float
    own: float
    twin: float


class FanStoppedBesideTwin(Check):
    """fan-stopped: within half a minute the unit loses nine tenths of what its twin goes on seeing.

    Air, smoke, rain and a door change both. Dirty optics and a tired fan take weeks. What takes one of two within
    seconds is its flow (the cell empties with V/Q, a few seconds, and settles) or its light, and both mean a visit with
    a spare unit. In blocks of 6 s of the smallest count (mass, without counts):

    - before: the median ratio to the twin over at least 36 s, up to four minutes, that ended at most 24 s earlier;
    - after: four blocks in a row at a tenth of that ratio or less, while the twin keeps half of its own level before;
    - pulses: both what the twin lets expect in those 24 s and what the twin itself sees are at least twenty, each worth
      12/flow per dL at the worst that firmware does: a twin that is blind too says nothing.

    It holds until the ratio is back at half of before, with a twin that sees, for half a minute; the ratio survives a
    restart of the daemon.
    """

    code: ClassVar[str] = "fan-stopped"
    clear_s: ClassVar[float] = 60.0
    settled: ClassVar[bool] = True

    BLOCK_S = 6.0
    BEFORE_LEAST, BEFORE_MOST, FALL, AFTER, BACK = 6, 40, 4, 4, 5
    LEFT, TWIN_HOLDS, IS_BACK = 0.1, 0.5, 0.5
    LEAST_PULSES = 20.0
    GAP_S = 30.0

    def __init__(self, flow_l_min: float, period_s: float) -> None:
        self._block_s = max(self.BLOCK_S, 2.0 * period_s)
        self._frames_a_block = self._block_s / period_s
        self._per_pulse = 12.0 / flow_l_min  # of one frame; without counts 1 ug/m3, see `fan`
        self._own: list[float] = []
        self._twin: list[float] = []
        self._block_end = float("-inf")
        self._pairs: deque[_Pair] = deque(maxlen=self.BEFORE_MOST + self.FALL + self.AFTER)
        self._ratio: float | None = None  # before the collapse, while it holds
        self._since = 0.0
        self._evidence = ""

    def observe(self, observation: Observation) -> None:
        now = observation.at.boot_s
        if now >= self._block_end:
            self._next_block(now)
        self._own.append(_level(observation.frame))
        if not observation.frame.counts:
            self._per_pulse = 1.0

    def twin(self, observation: Observation) -> None:
        self._twin.append(_level(observation.frame))

    def line(self, state: LineState, at: Instant, why: str) -> None:
        self._pairs.clear()

    def _next_block(self, now: float) -> None:
        start = self._block_end - self._block_s
        if now - self._block_end > self.GAP_S:
            self._pairs.clear()
        elif self._own and self._twin:
            self._pairs.append(_Pair(start, _mean(self._own), _mean(self._twin)))
            self._look()
        self._own, self._twin = [], []
        self._block_end = now + self._block_s

    def _look(self) -> None:
        if self._ratio is not None:
            last = list(self._pairs)[-self.BACK :]
            back = all(p.own >= self.IS_BACK * self._ratio * p.twin for p in last)
            if len(last) == self.BACK and back and self._enough([p.twin for p in last]):
                self._ratio = None
                self._pairs.clear()
            return
        pairs = list(self._pairs)
        before, after = pairs[: -self.AFTER - self.FALL], pairs[-self.AFTER :]
        if len(before) < self.BEFORE_LEAST:
            return
        twin_before = median([p.twin for p in before])
        ratio = median([p.own for p in before]) / twin_before if twin_before > 0.0 else 0.0
        expected = [ratio * p.twin for p in after]
        blind = all(p.own <= self.LEFT * e for p, e in zip(after, expected, strict=True))
        holds = all(p.twin >= self.TWIN_HOLDS * twin_before for p in after)
        if not (blind and holds and self._enough(expected) and self._enough([p.twin for p in after])):
            return
        fallen = [p for p in pairs[-self.AFTER - self.FALL :] if p.own < 0.7 * ratio * p.twin]
        self._ratio, self._since = ratio, fallen[0].start
        self._evidence = (
            f"from {_mean([p.own for p in before]):.0f} to {_mean([p.own for p in after]):.0f} within "
            f"{after[-1].start + self._block_s - self._since:.0f} s, while the twin holds at "
            f"{_mean([p.twin for p in after]):.0f}"
        )

    def _enough(self, levels: list[float]) -> bool:
        """Whether blocks of these mean levels rest on pulses enough to be told from none."""
        return sum(levels) * self._frames_a_block >= self.LEAST_PULSES * self._per_pulse

    def judge(self, at: Instant) -> Suspicion | None:
        if self._ratio is None:
            return None
        return Suspicion(self._since, 0.97, self._evidence)

    def memory(self) -> Memory | None:
        return None if self._ratio is None else {"ratio": self._ratio}

    def recall(self, memory: Memory, at: Instant) -> None:
        ratio = memory.get("ratio")
        if isinstance(ratio, float) and ratio > 0.0:
            self._ratio, self._since = ratio, at.boot_s
            self._evidence = f"blind before the daemon restarted; it used to see {ratio:.2f} of its twin"


def _level(frame: Frame) -> float:
    """What is compared: the smallest count, else the finest mass but one, which every dialect has."""
    return frame.counts[0] if frame.counts else frame.mass[min(1, len(frame.mass) - 1)]


def _mean(values: list[float]) -> float:
    return sum(values) / len(values)
