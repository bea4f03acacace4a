"""A unit that counts otherwise than the one before it: unit-swapped, told by its noise.

Owns the comparison of a few minutes' noise with what was learnt. Must not know revision bytes or records: `visit` does.
"""

from collections import deque
from collections.abc import Mapping, Sequence
from math import exp, log, sqrt
from typing import Any, ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.lessons.noise import PRINT_STEP, Noise
from motekeep.health.memory import Memory, is_number
from motekeep.instant import Instant
from motekeep.measure.interval import Channel, Interval

LEARNT = 0.05  # relative error of what was learnt
LEAST_RATE, LEAST_PULSES = 0.3, 60.0  # of pulses a frame, and in all: with fewer the logarithm is skewed

# Boot seconds of an interval's begin and end, and its counts.
_Row = tuple[float, float, tuple[Channel, ...]]


class BehaviourSwapped(Check):
    """unit-swapped: what neighbouring frames do not share is not what this unit's multiplier and averaging make.

    `Channel.step` over the mean is scale / averaging^2, whatever the air holds: both sit in the firmware, and neither
    age nor dirt nor a weak fan changes them (a weak fan passes fewer pulses, each printed as before). So where it has
    moved, the unit is another one, or its firmware is. Air can only add, and it adds with the square of the mean, most
    in the smallest channel; what another multiplier adds is over the mean the same in every channel. So the rarest
    channel with pulses enough is looked at, and the others must agree with it. An output that freezes has intervals
    without any difference, and says nothing.

    Looked at over the last 3, 10 and 30 minutes, with a bound of six standard errors of the logarithm: half a million
    looks a year allow no fewer. Of 180 frames that is a factor of 2.3; another averaging makes one of 1.4 to 100,
    another multiplier alone at most 2. At a 6 s cadence three minutes hold 30 frames, which tell factors above 7; half
    an hour tells 2. What is nearer is not seen here.

    It holds until the noise is learnt anew, as it is after a record `unit-replaced`, or until it is as it was.
    """

    code: ClassVar[str] = "unit-swapped"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = 3600.0

    LENGTHS_S = (180.0, 600.0, 1800.0)
    BOUND = 6.0
    BACK = 2.0
    ALIKE = 0.2
    GAP_S = 3600.0

    def __init__(self) -> None:
        self._noise: Noise | None = None
        # intervals of half an hour; there are none shorter than 10 s
        self._recent: deque[_Row] = deque(maxlen=180)
        self._since: float | None = None
        self._told = ""

    def learnt(self, parts: Mapping[str, Any]) -> None:
        noise = parts.get("noise")
        if noise != self._noise:
            self._noise, self._since = noise, None
            self._recent.clear()

    def interval(self, interval: Interval) -> None:
        noise, counts = self._noise, interval.counts
        if noise is None or not counts or counts[0].n < 8 or any(c.censored for c in counts):
            return
        start, end = interval.start.boot_s, interval.start.boot_s + interval.seconds
        if self._recent and (len(self._recent[-1][2]) != len(counts) or start - self._recent[-1][1] > self.GAP_S):
            self._recent.clear()
        self._recent.append((start, end, counts))
        while end - self._recent[0][0] > self.LENGTHS_S[-1]:
            self._recent.popleft()
        if self._since is not None:
            self._follow(noise, end)
            return
        for length in self.LENGTHS_S:
            if end % (length / 3.0) >= interval.seconds:
                continue  # thrice in its length is often enough, and a third of the cost
            rows = [row for row in self._recent if end - row[0] <= length + 1.0]
            if sum([e - s for s, e, _ in rows]) >= 0.9 * length and self._differs(noise, rows):
                self._since = rows[0][0]
                return

    def _follow(self, noise: Noise, end: float) -> None:
        """Back to what it was, as far as the last ten minutes tell: the unit was put back."""
        rows = [row for row in self._recent if end - row[0] <= self.LENGTHS_S[1]]
        found = _compare(noise, rows, 0)
        if found is not None and abs(found[0]) < self.BACK * found[1]:
            self._since = None

    def _differs(self, noise: Noise, rows: Sequence[_Row]) -> bool:
        latest = rows[-1][2]
        rarest = max([i for i, c in enumerate(latest) if c.mean >= LEAST_RATE * noise.scale], default=-1)
        found = _compare(noise, rows, rarest) if rarest >= 0 else None
        if found is None or abs(found[0]) < self.BOUND * found[1]:
            return False
        ratio, error = found
        told = [f for c in range(rarest) if (f := _compare(noise, rows, c)) is not None]
        if any(abs(r - ratio) > self.ALIKE + 2.0 * error for r, _ in told):
            return False
        if ratio > 0.0 and (not told or not self._lasting(noise, rows, rarest, ratio)):
            return False
        self._told = (
            f"neighbouring frames differ {exp(ratio / 2.0):.2g} times as much as counting by this unit did "
            f"({noise.averaging:.2g} frames averaged, a pulse worth {noise.scale:.3g} /dL), in {len(told) + 1} "
            "channels; no record `unit-replaced` for it"
        )
        return True

    @staticmethod
    def _lasting(noise: Noise, rows: Sequence[_Row], channel: int, ratio: float) -> bool:
        """Whether three quarters of the intervals (all of three) show at least half of it; a plume is not in all."""
        own = sorted([counts[channel].step for _, _, counts in rows])
        mean = sum([counts[channel].mean for _, _, counts in rows]) / len(rows)
        return own[len(own) // 4] > noise.step * mean * exp(ratio / 2.0)

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        return Suspicion(self._since, 0.8, self._told)

    def memory(self) -> Memory | None:
        return None if self._since is None else {"swapped": 1.0}

    def recall(self, memory: Memory, at: Instant) -> None:
        if is_number(memory.get("swapped")):
            self._since, self._told = at.boot_s, "its noise was that of another unit before the restart"


def _compare(noise: Noise, rows: Sequence[_Row], channel: int) -> tuple[float, float] | None:
    """ln of the noise of neighbouring frames over that expected in this channel, and its standard error; None where
    there are too few pulses to tell or too little is printed.

    The relative variance of half the mean square of `n` differences of Poisson counts of mean r is (3 + 1/r) / n.
    """
    own = [counts[channel] for _, _, counts in rows]
    frames, differences = sum([c.n for c in own]), sum([c.n - 1 for c in own])
    mean = sum([c.n * c.mean for c in own]) / frames
    rate = mean / noise.scale
    if rate < LEAST_RATE or rate * frames < LEAST_PULSES or noise.step * mean < 1.0 or any(c.step <= 0.0 for c in own):
        return None
    step = sum([(c.n - 1) * c.step for c in own]) / differences - PRINT_STEP
    if step <= 0.0:
        return None
    return log(step / (noise.step * mean)), sqrt((3.0 + 1.0 / rate) / differences + LEARNT**2)
