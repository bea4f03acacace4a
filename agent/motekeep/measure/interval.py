"""An interval: what one sensor did in one wall-aligned span, as statistics of its observations.

Owns the accumulation. Must not know corrections, quality or messages.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import sqrt

from motekeep.instant import Instant
from motekeep.wire.frame import Frame, Layout


@dataclass(frozen=True, slots=True)
class Channel:
    """Statistics of one channel over one interval, in the channel's own unit.

    `n` counts the numbers averaged; censored ones (`censored` of them, at the top of the field) are never among
    them. `sd` is the sample standard deviation. `step` is half the mean square of first differences: the variance
    that neighbouring frames do not share, free of slow changes of the air (von Neumann 1941). `lag1` is the lag-1
    autocorrelation, 0 where it is undefined. An empty channel has n = 0 and NaN-free zeros; test `n` before use.
    """

    n: int
    mean: float
    sd: float
    low: float
    high: float
    step: float
    lag1: float
    censored: int = 0

    @property
    def standard_error(self) -> float:
        """Standard error of the mean with the AR(1) effective sample size n (1 - phi) / (1 + phi)."""
        if self.n < 2:
            return self.sd
        phi = min(max(self.lag1, 0.0), 0.99)
        effective = max(self.n * (1.0 - phi) / (1.0 + phi), 1.0)
        return self.sd / sqrt(effective)


EMPTY = Channel(0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0)


@dataclass(frozen=True, slots=True)
class FrameCount:
    """Frames of an interval: decoded, damaged, and expected by the cadence but never seen."""

    good: int = 0
    bad: int = 0
    missing: int = 0


@dataclass(frozen=True, slots=True)
class Climate:
    """Air at the sensor: relative humidity in %, temperature in degC, where from, and how old when used (s)."""

    rh_pct: float
    temperature_c: float | None
    source: str
    age_s: float = 0.0


@dataclass(frozen=True, slots=True)
class Interval:
    """What one sensor did in one span. `start` is its first moment; `seconds` its true length by the boot clock.

    `mass`, `mass_ambient` and `counts` follow the order of `layout`, which is None when no frame came. `asleep_s`
    counts the seconds that the sensor was asleep by duty, in which no frame is missed; `warming_frames` the frames
    of warm-up, which are left out of the statistics. `revision` is what the unit last said of itself.
    """

    sensor: str
    start: Instant
    seconds: float
    frames: FrameCount
    layout: Layout | None
    mass: tuple[Channel, ...]
    mass_ambient: tuple[Channel, ...]
    counts: tuple[Channel, ...]
    climate: Climate | None
    asleep_s: float = 0.0
    warming_frames: int = 0
    revision: int | None = None

    @property
    def completeness(self) -> float:
        """Share of the frames due in this span that were good and not of warm-up, 0..1."""
        due = self.frames.good + self.frames.bad + self.frames.missing + self.warming_frames
        return self.frames.good / due if due else 0.0


def channel(values: Sequence[float], top: float | None = None) -> Channel:
    """Statistics of one channel; values at or above `top` are censored and left out."""
    kept = values if top is None else [v for v in values if v < top]
    n = len(kept)
    censored = len(values) - n
    if n == 0:
        return Channel(0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, censored)
    low, high = min(kept), max(kept)
    if low == high:
        return Channel(n, low, 0.0, low, high, 0.0, 0.0, censored)
    mean = sum(kept) / n
    deviations = [v - mean for v in kept]
    squares = sum([d * d for d in deviations])
    if squares == 0.0:  # differences too small to square: as good as constant
        return Channel(n, mean, 0.0, low, high, 0.0, 0.0, censored)
    products = sum([a * b for a, b in pairwise(deviations)])
    ends = deviations[0] ** 2 + deviations[-1] ** 2
    # sum of (d[i+1] - d[i])^2 = 2 squares - ends - 2 products: one pass less over the values
    step = (2.0 * squares - ends - 2.0 * products) / (2.0 * (n - 1))
    return Channel(n, mean, sqrt(squares / (n - 1)), low, high, max(step, 0.0), products / squares, censored)


class Accumulator:
    """Gathers the frames of one sensor over one span. Frames of one layout are averaged; a frame of another is bad."""

    __slots__ = ("_frames", "bad", "missing", "warming_frames")

    def __init__(self) -> None:
        self._frames: list[Frame] = []
        self.bad = 0
        self.missing = 0
        self.warming_frames = 0

    def add(self, frame: Frame) -> None:
        if self._frames and frame.layout is not self._frames[0].layout:
            self.bad += 1
            return
        self._frames.append(frame)

    @property
    def frames(self) -> Sequence[Frame]:
        """The good frames so far, oldest first."""
        return self._frames

    def close(
        self,
        sensor: str,
        start: Instant,
        seconds: float,
        *,
        climate: Climate | None,
        asleep_s: float = 0.0,
    ) -> Interval:
        """The interval of all that was added. Without a good frame every tuple is empty and `layout` is None."""
        frames = self._frames
        layout = frames[0].layout if frames else None
        top = layout.count_top if layout else None
        return Interval(
            sensor=sensor,
            start=start,
            seconds=seconds,
            frames=FrameCount(len(frames), self.bad, self.missing),
            layout=layout,
            mass=tuple([channel(values) for values in zip(*[f.mass for f in frames], strict=True)]),
            mass_ambient=tuple([channel(values) for values in zip(*[f.mass_ambient for f in frames], strict=True)]),
            counts=tuple([channel(values, top) for values in zip(*[f.counts for f in frames], strict=True)]),
            climate=climate,
            asleep_s=asleep_s,
            warming_frames=self.warming_frames,
            revision=frames[-1].revision if frames else None,
        )


def frame_climate(frames: Sequence[Frame]) -> Climate | None:
    """Mean climate of the frames that carry one, None without any."""
    humid = [f.rh_pct for f in frames if f.rh_pct is not None]
    if not humid:
        return None
    warm = [f.temperature_c for f in frames if f.temperature_c is not None]
    return Climate(sum(humid) / len(humid), sum(warm) / len(warm) if warm else None, "frame")


class Cadence:
    """Counts the frames that should have come and did not, exact across interval borders.

    Rule: after something came at t, frames are due at t + k * period (k = 1, 2, ...); one is missing once its due
    time has passed by half a period and nothing, good or bad, came for it.
    """

    __slots__ = ("_counted", "_last", "_period")

    def __init__(self, period_s: float, start_s: float) -> None:
        self._period = period_s
        self._last = start_s
        self._counted = 0

    def arrived(self, boot_s: float) -> int:
        """Something came: the number of slots newly known to have been missed before it."""
        missing = self.due(boot_s)
        self.restart(boot_s)
        return missing

    def due(self, boot_s: float) -> int:
        """The number of slots that newly ran out by `boot_s`; each is counted once."""
        lapsed = int(max((boot_s - self._last) / self._period - 0.5, 0.0))
        new = max(lapsed - self._counted, 0)
        self._counted += new
        return new

    def restart(self, boot_s: float) -> None:
        """Forget what was due: after sleep, wake or a clock of another boot."""
        self._last = boot_s
        self._counted = 0
