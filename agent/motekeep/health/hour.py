"""One hour of a sensor, beside its twin where it has one: what the slow checks and the lessons look at.

Owns the gathering of intervals into hours. Must not know any check, nor what is learnt of a unit.
"""

from collections.abc import Sequence
from dataclasses import dataclass

from motekeep.instant import Instant
from motekeep.measure.interval import Channel, Interval

HOUR_S = 3600.0
LEAST_FRAMES = 8  # of an interval: with fewer it says nothing of its own mean


@dataclass(frozen=True, slots=True)
class Levels:
    """Mean levels over the same frames: counts per 0.1 L above each of `sizes_um`, or masses where that is empty."""

    sizes_um: tuple[float, ...]
    means: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Pair:
    """Mean levels of a sensor and of its twin over the intervals in which both could be compared.

    Only the channels that both have. `seconds` is what the intervals last together, `frames` and `twin_frames` what was
    averaged.
    """

    sizes_um: tuple[float, ...]
    own: tuple[float, ...]
    twin: tuple[float, ...]
    seconds: float
    frames: int
    twin_frames: int


@dataclass(frozen=True, slots=True)
class Hour:
    """One hour. `start` is that of its first interval.

    `levels` are means over its frames and `lowest` the lowest interval mean of each channel, None without sound frames.
    Intervals with a censored count are in none of these. `sound` says that nothing was wrong with the sensor in it,
    as far as anybody knew then; `pair` holds only intervals in which nothing was wrong with either, but what the twin
    itself tells of the sensor: that could not be seen to end otherwise. `rh_pct` and `temperature_c` are means where
    climate is known.
    """

    start: Instant
    seconds: float
    frames: int
    levels: Levels | None
    lowest: tuple[float, ...]
    pair: Pair | None
    rh_pct: float | None
    temperature_c: float | None
    sound: bool


class _Sum:
    """Means weighted by frames."""

    def __init__(self) -> None:
        self.sizes: tuple[float, ...] | None = None
        self.totals: list[float] = []
        self.frames = 0

    def add(self, levels: Levels, frames: int) -> None:
        if self.sizes != levels.sizes_um or len(self.totals) != len(levels.means):
            self.sizes, self.totals, self.frames = levels.sizes_um, [0.0] * len(levels.means), 0
        self.totals = [total + frames * mean for total, mean in zip(self.totals, levels.means, strict=True)]
        self.frames += frames

    @property
    def means(self) -> tuple[float, ...]:
        return tuple([total / self.frames for total in self.totals])


class HourBuilder:
    """Gathers the intervals of a sensor and of its twin; gives each hour when the next one begins."""

    def __init__(self) -> None:
        self._own_last: tuple[Interval, bool] | None = None
        self._twin_last: tuple[Interval, bool] | None = None
        self._begin(None)

    def _begin(self, start: Instant | None) -> None:
        self._start = start
        self._seconds = 0.0
        self._sound = True
        self._sum = _Sum()
        self._lowest: tuple[float, ...] = ()
        self._own, self._twin, self._pair_s = _Sum(), _Sum(), 0.0
        self._rh: list[float] = []  # at most one an interval, so 360 an hour; the same below
        self._warm: list[float] = []

    def add(self, interval: Interval, *, sound: bool, comparable: bool | None = None) -> Hour | None:
        """One more interval of the sensor; the hour before it, when it is the first of another. `comparable`: whether
        it may stand beside the twin's; when it is sound, unless said otherwise."""
        finished = None
        if self._start is None or not _same_hour(self._start, interval.start):
            finished = self._finish()
            self._begin(interval.start)
        self._seconds += interval.seconds
        self._sound = self._sound and sound
        levels = levels_of(interval)
        if levels is not None:
            self._sum.add(levels, interval.frames.good)
            same = len(self._lowest) == len(levels.means)
            self._lowest = tuple(map(min, self._lowest, levels.means)) if same else levels.means
        if interval.climate is not None:
            self._rh.append(interval.climate.rh_pct)
            if interval.climate.temperature_c is not None:
                self._warm.append(interval.climate.temperature_c)
        self._own_last = interval, sound if comparable is None else comparable
        self._match()
        return finished

    def add_twin(self, interval: Interval, *, sound: bool) -> None:
        """One more interval of the twin, and whether it can be relied on; comes before or after the sensor's own of the
        same span."""
        self._twin_last = interval, sound
        self._match()

    def _match(self) -> None:
        if self._own_last is None or self._twin_last is None:
            return
        (own, own_sound), (twin, twin_sound) = self._own_last, self._twin_last
        if own.start.boot_s != twin.start.boot_s:
            return
        self._own_last = self._twin_last = None
        a, b = levels_of(own), levels_of(twin)
        if not (own_sound and twin_sound) or a is None or b is None:
            return
        a, b = _shared(a, b)
        if a.means:
            self._own.add(a, own.frames.good)
            self._twin.add(b, twin.frames.good)
            self._pair_s += own.seconds

    def _finish(self) -> Hour | None:
        if self._start is None:
            return None
        levels = Levels(self._sum.sizes or (), self._sum.means) if self._sum.frames else None
        pair = None
        if self._own.frames and self._twin.frames:
            sizes = self._own.sizes or ()
            pair = Pair(sizes, self._own.means, self._twin.means, self._pair_s, self._own.frames, self._twin.frames)
        return Hour(
            start=self._start,
            seconds=self._seconds,
            frames=self._sum.frames,
            levels=levels,
            lowest=self._lowest if levels is not None else (),
            pair=pair,
            rh_pct=_mean(self._rh),
            temperature_c=_mean(self._warm),
            sound=self._sound,
        )


def levels_of(interval: Interval) -> Levels | None:
    """What an interval says of its levels; None when it says nothing: too few frames, or a censored count."""
    layout = interval.layout
    if layout is None or interval.frames.good < LEAST_FRAMES:
        return None
    channels: Sequence[Channel] = interval.counts or interval.mass
    if any(c.censored or not c.n for c in channels):
        return None
    return Levels(layout.sizes_um if interval.counts else (), tuple([c.mean for c in channels]))


def _shared(a: Levels, b: Levels) -> tuple[Levels, Levels]:
    """Both in the channels that they share; nothing in common when one counts and the other does not."""
    if a.sizes_um == b.sizes_um:
        return (a, b) if len(a.means) == len(b.means) else (Levels((), ()), Levels((), ()))
    sizes = tuple([size for size in a.sizes_um if size in b.sizes_um])
    picked = [Levels(sizes, tuple([x.means[x.sizes_um.index(size)] for size in sizes])) for x in (a, b)]
    return picked[0], picked[1]


def _same_hour(a: Instant, b: Instant) -> bool:
    return a.boot_id == b.boot_id and a.utc // HOUR_S == b.utc // HOUR_S and abs(a.offset - b.offset) < 1.0


def _mean(values: list[float]) -> float | None:
    return sum(values) / len(values) if values else None
