"""The lesson `noise`: what one pulse of this unit is worth, and over how many frames its firmware averages.

Owns the reading of both out of whole intervals, and what physics allows of them. Must not know what they are used for.
"""

from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass
from math import sqrt
from statistics import median
from typing import ClassVar

from motekeep.health.baseline import Lesson, Notes
from motekeep.health.memory import is_number
from motekeep.measure.counting import physical_scale
from motekeep.measure.dose import ServiceKind
from motekeep.measure.interval import Channel, Interval

PRINT_STEP = 1.0 / 12.0  # variance of rounding to whole counts


@dataclass(frozen=True, slots=True)
class Noise:
    """The counting noise of one unit. A frame prints the mean of the last `averaging` frames' pulses, each pulse
    multiplied by `scale`; in steady air of the printed mean m the figures below are to be multiplied by m."""

    scale: float
    averaging: float

    @property
    def step(self) -> float:
        """`Channel.step` over mean: neighbours share all but the pulses of one frame at either end."""
        return self.scale / self.averaging**2

    def variance(self, frames: int) -> float:
        """The expected square of `Channel.sd` over mean, within an interval of so many frames."""
        return self.step * within(self.averaging, frames)

    def of_mean(self, frames: int) -> float:
        """Variance of the mean of so many frames over mean."""
        return self.step * of_mean(self.averaging, frames)


def of_mean(averaging: float, frames: int) -> float:
    """Variance of the mean of `frames` frames, each the running mean of `averaging` frames of white noise, in units of
    half the mean square of differences between neighbours.

    A pulse is in as many frames of the interval as the pooling window overlaps it with: the sum of squares of that
    trapezoid over (averaging frames)^2.
    """
    low, high = min(averaging, frames), max(averaging, frames)
    squares = (high - low + 1.0) * low**2 + (low - 1.0) * low * (2.0 * low - 1.0) / 3.0
    return squares / frames**2


def within(averaging: float, frames: int) -> float:
    """The same for the sample variance within the interval: what is left of the variance of a frame."""
    return frames / (frames - 1.0) * (averaging - of_mean(averaging, frames))


class NoiseLesson(Lesson):
    """Learns `Noise` of a sensor that prints counts, from some 24 hours of sound intervals.

    Two figures are taken, each over the mean: that of neighbouring frames (scale / averaging^2) and one in which
    pooling does not hide: with FRAMES or more to an interval the variance within it, else the variance between the
    means of intervals, two intervals apart so that no pulse is in both. Their quotient is a function of the averaging.

    Both come from the rarest channel with pulses enough. There the noise of counting drowns whatever the air and the
    fan do, whose share grows with the mean: 25 % of flicker adds one in 16 to the variance of one pulse. So a fan that
    surges on the first day spoils nothing. Hours are taken one by one and their median counts: a plume spoils one hour.

    Nothing is learnt where masses are all there is: what one pulse is worth there changes with its size. Nor from
    intervals over TOP_S, whose means differ by weather, if they are short of frames.

    Physics: nobody counts more than the flow brings, so no pulse is worth less than 0.1 L over the volume of a frame,
    flow being known to a few per cent; and a counter that looks at less than a sixth of its flow is not known to us (no
    source). An averaging beyond 20 frames is no reading. What lies outside is not given, and the search goes on.
    """

    name: ClassVar[str] = "noise"
    # the multiplier sits in the firmware: neither a new fan nor a clean window changes it
    begun_again_by: ClassVar[frozenset[ServiceKind]] = frozenset({ServiceKind.UNIT_REPLACED})

    HOURS = 24
    HOUR_S = 3600.0
    LEAST_INTERVALS = 8
    FRAMES = 40
    TOP_S = 120.0
    PULSES = 1.5  # in an interval, on average over the hour
    PRINTED = 3.0  # per dL: below, rounding to whole counts is much of the noise
    LEAST_SHARE, MOST_SHARE = 0.75, 6.0  # of the physical scale
    MOST_AVERAGING = 20.0

    def __init__(self, flow_l_min: float, period_s: float) -> None:
        self._period_s = period_s
        self._physical = physical_scale(flow_l_min, period_s)
        self._recent: deque[tuple[float, tuple[Channel, ...]]] = deque(maxlen=2)
        self._hours: deque[tuple[float, float]] = deque(maxlen=self.HOURS)  # (step over mean, quotient)
        self._known: Noise | None = None
        self._begin()

    def _begin(self) -> None:
        self._seconds = 0.0
        self._rows: list[tuple[tuple[Channel, ...], tuple[Channel, ...] | None]] = []  # at most 360, of 10 s

    def interval(self, interval: Interval) -> None:
        if self._known is not None:
            return
        counts = interval.counts
        whole = interval.asleep_s == 0.0 and not interval.warming_frames and interval.completeness >= 0.95
        if not counts or not whole or counts[0].n < 8 or any(c.censored for c in counts):
            return
        start = interval.start.boot_s
        before = next((c for s, c in self._recent if abs(start - s - 2.0 * interval.seconds) < 0.5), None)
        self._recent.append((start, counts))
        if interval.seconds > self.TOP_S or (before is not None and len(before) != len(counts)):
            before = None
        self._rows.append((counts, before))
        self._seconds += interval.seconds
        if self._seconds >= self.HOUR_S and len(self._rows) >= self.LEAST_INTERVALS:
            self._close()
            self._begin()

    def _close(self) -> None:
        """An hour's worth of intervals is together."""
        frames = round(sum([counts[0].n for counts, _ in self._rows]) / len(self._rows))
        least = max(self.PULSES * self._physical / frames, self.PRINTED)
        for channel in range(min([len(counts) for counts, _ in self._rows]) - 1, -1, -1):
            own = [counts[channel] for counts, _ in self._rows]
            mean = sum([c.mean for c in own]) / len(own)
            if mean < least:
                continue
            step = sum([c.step for c in own]) / len(own) - PRINT_STEP
            if step <= 0.0:
                return
            if frames >= self.FRAMES:
                wide = sum([c.sd**2 for c in own]) / len(own) - PRINT_STEP
            else:
                pairs = [(c[channel].mean, b[channel].mean) for c, b in self._rows if b is not None]
                if len(pairs) < self.LEAST_INTERVALS:
                    return
                wide = sum([(a - b) ** 2 for a, b in pairs]) / 2.0 / len(pairs)
            self._hours.append((step / mean, averaging_of(wide / step, frames, within_it=frames >= self.FRAMES)))
            break
        if len(self._hours) == self.HOURS:
            self._known = self._plausible()

    def _plausible(self) -> Noise | None:
        averaging = median([k for _, k in self._hours])
        noise = Noise(median([step for step, _ in self._hours]) * averaging**2, averaging)
        share = noise.scale / self._physical
        fits = self.LEAST_SHARE <= share <= self.MOST_SHARE and averaging <= self.MOST_AVERAGING
        return noise if fits else None

    def part(self) -> Noise | None:
        return self._known

    def notes(self) -> Notes:
        if self._known is not None:
            return {"period_s": self._period_s, "scale": self._known.scale, "averaging": self._known.averaging}
        steps, averagings = [s for s, _ in self._hours], [k for _, k in self._hours]
        return {"period_s": self._period_s, "steps": steps, "averagings": averagings}

    def recall(self, notes: Mapping[str, object]) -> None:
        if notes.get("period_s") != self._period_s:  # one pulse of another cadence is worth another number
            return
        scale, averaging = notes.get("scale"), notes.get("averaging")
        if is_number(scale) and is_number(averaging):
            self._hours.append((scale / max(averaging, 1.0) ** 2, max(averaging, 1.0)))
            self._known = self._plausible()
            self._hours.clear()
            return
        steps, averagings = notes.get("steps"), notes.get("averagings")
        if isinstance(steps, list) and isinstance(averagings, list):
            pairs = [(s, k) for s, k in zip(steps, averagings, strict=False) if is_number(s) and is_number(k)]
            self._hours.extend([(s, k) for s, k in pairs if s > 0.0 and k >= 1.0])

    def forget(self) -> None:
        self._known = None
        self._hours.clear()
        self._recent.clear()
        self._begin()


def averaging_of(quotient: float, frames: int, *, within_it: bool) -> float:
    """The averaging, 1 to 30, at which `within`, or else `of_mean`, has this value; both grow with it. Within an
    interval none beyond half its frames can be told."""
    figure = within if within_it else of_mean
    low, high = 1.0, min(30.0, frames / 2.0) if within_it else 30.0
    for _ in range(40):
        middle = sqrt(low * high)
        if figure(middle, frames) < quotient:
            low = middle
        else:
            high = middle
    return sqrt(low * high)
