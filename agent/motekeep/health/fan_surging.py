"""A fan that speeds up and slows down within seconds: fan-surging.

Owns what such a flow does to the noise of an interval, and how it differs from air that flickers. Must not know how the
unit's own noise was learnt.
"""

from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import accumulate
from math import exp, inf, sqrt
from statistics import median
from typing import Any, ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.lessons.noise import PRINT_STEP, Noise
from motekeep.health.memory import Memory, is_number
from motekeep.instant import Instant
from motekeep.measure.interval import Interval


@dataclass(frozen=True, slots=True)
class Shape:
    """What flicker of unit variance and one time constant adds to the square of a mean: to `step` and to `sd`^2."""

    step: float
    variance: float


@dataclass(slots=True)
class _Group:
    """Sums over the intervals of some five minutes, one entry a channel: the mean, its square, and what `step` and
    `sd`^2 have beyond counting. `frames` were averaged."""

    start: float
    end: float
    intervals: int
    frames: int
    mean: list[float]
    square: list[float]
    step: list[float]
    variance: list[float]


@dataclass(frozen=True, slots=True)
class _Flicker:
    """What a window of groups says of one channel: the variance of ln flow that would explain it, its standard error
    from counting, and that of each group; `share` is the share of the quick in all, 1 for noise from frame to frame,
    with the benefit of one standard error."""

    variance: float
    error: float
    groups: tuple[float, ...]
    share: float


class FanSurging(Check):
    """fan-surging: the flow flickers by 15 % or more within seconds, for most of an hour.

    Pulses come in proportion to the flow, so a flow that flickers adds (m sd(ln flow))^2 to the variance of every
    channel with mean m, beyond the counting noise that this unit was found to have (`lessons.noise`). Air flickers too.
    Four things are asked of the last 45 minutes, in groups of five:

    1. Size. The median of the groups is a flicker of 15 % or more, and their sum six standard errors above nothing.
    2. Persistence. Seven of nine groups have it: a plume lasts minutes, fireworks flare for a group or two.
    3. Quickness. What neighbouring frames do not share is compared with all that varies within an interval. Gusts,
       plumes and flares are eddies over tens of seconds, which the cell smooths further (its volume is flushed in 3 to
       12 s); a dry bearing catches and lets go over seconds (no source). The border is what a time constant of 8 s
       would show through this unit's averaging, and of 6 s while the air is well above the lowest of the last hours:
       fireworks that go on for an hour are the quickest that air does.
    4. Likeness. The second channel flickers as much as the first, where it has pulses enough to say so: sources have
       sizes of their own, a flow has none.

    Which of the two variances gives the size is whichever tells 25 % of a flow of 4 s apart best at this cadence and
    averaging. Without counts, or before the noise is learnt, nothing is said: what one pulse weighs in a mass changes
    with the size of particles. Where counting alone hides 15 % (under some 200 /dL, see the tests) a finding that holds
    goes on, and none opens.
    """

    code: ClassVar[str] = "fan-surging"
    clear_s: ClassVar[float] = 600.0

    GROUP_S = 300.0
    GROUPS = 9
    LASTING = 7
    CHANNELS = 2
    OPENS = 0.15**2  # variance of ln flow
    HOLDS = 0.10**2
    ERRORS = 6.0
    MEANT_S = 4.0
    MEANT = 0.25**2
    SLOWEST_S = 8.0
    SLOWEST_RAISED_S = 6.0
    RAISED = 2.5
    LEVELS = 72  # groups: six hours
    ALIKE = 0.7
    GAP_S = 900.0

    def __init__(self, period_s: float) -> None:
        self._period_s = period_s
        self._noise: Noise | None = None
        self._shapes: dict[tuple[float, int], Shape] = {}
        self._groups: deque[_Group] = deque(maxlen=self.GROUPS)
        self._open: _Group | None = None  # the group under way
        self._levels: deque[float] = deque(maxlen=self.LEVELS)  # of the first channel, a group each
        self._since: float | None = None
        self._until = -inf
        self._told = ""
        self._confidence = 0.0

    def learnt(self, parts: Mapping[str, Any]) -> None:
        noise = parts.get("noise")
        if noise != self._noise:
            self._noise = noise
            self._shapes.clear()
            self._groups.clear()
            self._open = None

    # -- gathering ----------------------------------------------------------------------------------------------

    def interval(self, interval: Interval) -> None:
        noise, counts = self._noise, interval.counts
        if noise is None or not counts or counts[0].n < 8 or any(c.censored for c in counts):
            return
        start, end = interval.start.boot_s, interval.start.boot_s + interval.seconds
        group = self._open
        last = group.end if group is not None else self._groups[-1].end if self._groups else start
        if start - last > self.GAP_S:
            self._groups.clear()
            group = None
        chosen = counts[: self.CHANNELS]
        if group is None or len(group.mean) != len(chosen):
            zeros = [0.0] * len(chosen)
            group = self._open = _Group(start, end, 0, 0, zeros.copy(), zeros.copy(), zeros.copy(), zeros.copy())
        variance = noise.variance(counts[0].n)
        for i, c in enumerate(chosen):
            group.mean[i] += c.mean
            group.square[i] += c.mean**2
            group.step[i] += c.step - noise.step * c.mean - PRINT_STEP
            group.variance[i] += c.sd**2 - variance * c.mean - PRINT_STEP
        group.end = end
        group.intervals += 1
        group.frames += counts[0].n
        if end - group.start >= self.GROUP_S:
            self._open = None
            self._groups.append(group)
            self._levels.append(group.mean[0] / group.intervals)
            self._look(noise)

    # -- judging ------------------------------------------------------------------------------------------------

    def _look(self, noise: Noise) -> None:
        groups = list(self._groups)
        if len(groups) < self.LASTING or len({len(g.mean) for g in groups}) > 1:
            return
        found = [self._flicker(noise, groups, i) for i in range(len(groups[0].mean))]
        first = found[0]
        middle = median(first.groups)
        if self._since is not None:
            telling = first.error * self.ERRORS < self.OPENS
            if telling and middle < self.HOLDS:
                self._since = None
            else:
                self._tell(noise, groups, found)
            return
        if (
            middle >= self.OPENS
            and sum([value >= self.HOLDS for value in first.groups]) >= self.LASTING
            and first.variance >= self.ERRORS * first.error
            and first.share
            >= self._share_of(noise, groups, self.SLOWEST_RAISED_S if self._raised() else self.SLOWEST_S)
            and self._alike(groups, found)
        ):
            self._since = groups[_began(first.groups, middle / 2.0)].start
            self._tell(noise, groups, found)

    def _raised(self) -> bool:
        """Whether the air of the window is well above the lowest of the last hours."""
        levels = list(self._levels)
        return median(levels[-self.GROUPS :]) > self.RAISED * min(levels)

    def _alike(self, groups: Sequence[_Group], found: Sequence[_Flicker]) -> bool:
        """Whether the other channels flicker as the first does. What grows as counting noise does, over the mean, is no
        flow but another unit in the place of the one that was learnt: the border lies half-way to it."""
        means = [sum([g.mean[channel] for g in groups]) for channel in range(len(found))]
        first = found[0].variance
        return all(
            self.ALIKE * first - 2.0 * other.error
            <= other.variance
            <= first * min(1.0 / self.ALIKE, sqrt(means[0] / mean)) + 2.0 * other.error
            for other, mean in zip(found[1:], means[1:], strict=True)
            if 3.0 * other.error < self.ALIKE * first
        )

    def _flicker(self, noise: Noise, groups: Sequence[_Group], channel: int) -> _Flicker:
        frames = self._frames(groups)
        meant, white = self._shape(noise, self.MEANT_S, frames), noise.variance(frames)
        total_mean = sum([g.mean[channel] for g in groups])
        mean = total_mean / sum([g.intervals for g in groups])
        total = sum([g.frames for g in groups])
        # relative standard errors of both under counting alone (chi-square of the frames that are
        # independent; differences of neighbours have 1.5 times the variance of a variance, von Neumann 1941)
        by_step = noise.step / max(mean, 1e-9) * sqrt(3.0 / total) / meant.step
        by_variance = white / max(mean, 1e-9) * sqrt(2.0 * noise.averaging / total) / meant.variance
        quick = by_step < by_variance
        unit = meant.step if quick else meant.variance
        each = [(g.step if quick else g.variance)[channel] / max(g.square[channel], 1e-9) / unit for g in groups]
        squares = max(sum([g.square[channel] for g in groups]), 1e-9)
        step = sum([g.step[channel] for g in groups]) / squares
        variance = sum([g.variance[channel] for g in groups]) / squares
        doubt = noise.step * sqrt(3.0 / total) * total_mean / squares
        share = (step + doubt) / variance * white / noise.step if variance > 0.0 else inf
        return _Flicker((step if quick else variance) / unit, min(by_step, by_variance), tuple(each), share)

    def _share_of(self, noise: Noise, groups: Sequence[_Group], tau_s: float) -> float:
        """`_Flicker.share` of flicker with this time constant."""
        frames = self._frames(groups)
        shape = self._shape(noise, tau_s, frames)
        return shape.step / shape.variance * noise.variance(frames) / noise.step

    @staticmethod
    def _frames(groups: Sequence[_Group]) -> int:
        return round(sum([g.frames for g in groups]) / sum([g.intervals for g in groups]))

    def _shape(self, noise: Noise, tau_s: float, frames: int) -> Shape:
        key = (tau_s, frames)
        if key not in self._shapes:
            if len(self._shapes) > 64:  # intervals that lack some frames; a few lengths are the rule
                self._shapes.clear()
            self._shapes[key] = shape_of(tau_s, self._period_s, round(noise.averaging), frames)
        return self._shapes[key]

    def _tell(self, noise: Noise, groups: Sequence[_Group], found: Sequence[_Flicker]) -> None:
        self._until = groups[-1].end
        sizes = [f"{100.0 * sqrt(max(f.variance, 0.0)):.0f} %" for f in found if 2.0 * f.error < found[0].variance]
        mean = sum([g.mean[0] for g in groups]) / sum([g.intervals for g in groups])
        lasting = sum([value >= self.HOLDS for value in found[0].groups])
        chance = 100.0 * sqrt(noise.scale / noise.averaging / max(mean, 1e-9))
        self._confidence = 0.95 if len(sizes) > 1 else 0.85
        self._told = (
            f"flow flickers within seconds by {' and '.join(sizes)} in the first channels, in {lasting} of "
            f"{len(groups)} spans of 5 minutes; at {mean:.4g} /dL a frame varies by {chance:.0f} % from counting"
        )

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        return Suspicion(self._since, self._confidence, self._told)

    # -- across a restart ---------------------------------------------------------------------------------------

    def memory(self) -> Memory | None:
        return None if self._since is None else {"confidence": self._confidence}

    def recall(self, memory: Memory, at: Instant) -> None:
        confidence = memory.get("confidence")
        if is_number(confidence):
            self._since, self._confidence = at.boot_s, confidence
            self._told = "the flow flickered before the restart"


def _began(values: Sequence[float], border: float) -> int:
    """Where a run above `border` that reaches the end began: what lies above it sums up furthest (Page 1954)."""
    sums = list(accumulate([value - border for value in reversed(values)]))
    return len(values) - 1 - max(range(len(sums)), key=sums.__getitem__)


def shape_of(tau_s: float, period_s: float, averaging: int, frames: int) -> Shape:
    """How a flicker of unit variance shows that forgets itself with `tau_s` (Ornstein-Uhlenbeck), seen once a frame,
    through the running mean of `averaging` frames, in an interval of `frames` frames."""
    frames = min(frames, 240)  # by then an interval holds all of a flicker of seconds
    k = averaging
    correlation = [exp(-j * period_s / tau_s) for j in range(frames + k)]
    weights = [(i, (k - abs(i)) / k**2) for i in range(1 - k, k)]
    covariance = [sum([w * correlation[abs(j + i)] for i, w in weights]) for j in range(frames)]
    of_mean = covariance[0] / frames + 2.0 / frames**2 * sum([(frames - j) * covariance[j] for j in range(1, frames)])
    return Shape(covariance[0] - covariance[1], frames / (frames - 1.0) * (covariance[0] - of_mean))
