"""Intervals of a counter whose pulses are Poisson, for what is judged by noise: no cell, no weather of its own.

Deliberately not `motesim`, as in `small_air`.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from motekeep.instant import Instant
from motekeep.measure.interval import FrameCount, Interval, channel
from motekeep.wire.bm import BM_28

Floats = NDArray[np.float64]
START = 7200.0
LEVELS = (2000.0, 450.0, 60.0, 8.0, 1.0, 0.1)  # cumulative, per 0.1 L


@dataclass(frozen=True)
class Counter:
    """A pulse is worth `scale` per 0.1 L; a frame prints the mean of the last `averaging` frames."""

    scale: float = 80.0
    averaging: int = 3
    period_s: float = 1.0
    levels: tuple[float, ...] = LEVELS

    @property
    def frames_a_minute(self) -> int:
        return round(60.0 / self.period_s)

    def printed(self, factor: Floats, rng: np.random.Generator) -> Floats:
        """What is printed of air and flow that vary by `factor`, (frames, channels) or (frames, 1)."""
        between = np.array(self.levels) - np.array([*self.levels[1:], 0.0])
        pulses = rng.poisson(between * factor / self.scale)
        above = np.cumsum(pulses[:, ::-1], axis=1)[:, ::-1]
        total = np.cumsum(np.concatenate([np.repeat(above[:1], self.averaging, axis=0), above]), axis=0)
        return np.asarray(
            np.rint((total[self.averaging :] - total[: -self.averaging]) * self.scale / self.averaging),
            dtype=np.float64,
        )

    def minutes(
        self, count: int, rng: np.random.Generator, factor: Floats | None = None, start_s: float = START
    ) -> list[Interval]:
        """So many intervals of a minute."""
        frames = count * self.frames_a_minute
        rows = self.printed(np.ones((frames, 1)) if factor is None else factor, rng)
        return list(intervals(rows, self.frames_a_minute, start_s))


def intervals(rows: Floats, frames: int, start_s: float) -> Iterator[Interval]:
    """Printed rows as intervals of a minute, `frames` each."""
    for number, begin in enumerate(range(0, len(rows), frames)):
        columns = rows[begin : begin + frames].T.tolist()
        at = start_s + 60.0 * number
        yield Interval(
            sensor="north",
            start=Instant(1.8e9 + at, at, "one", trusted=True),
            seconds=60.0,
            frames=FrameCount(frames, 0, 0),
            layout=BM_28,
            mass=(),
            mass_ambient=(),
            counts=tuple([channel(column, 65_535.0) for column in columns]),
            climate=None,
        )


def without_counts(interval: Interval) -> Interval:
    return replace(interval, counts=(), mass=interval.counts[:3])


def flicker(frames: int, sd: float, tau_s: float, period_s: float, rng: np.random.Generator) -> Floats:
    """A lognormal factor of mean 1 that forgets itself with `tau_s`, (frames, 1)."""
    keep = np.exp(-period_s / tau_s)
    x = np.empty(frames)
    last = rng.standard_normal()
    for i, kick in enumerate(rng.standard_normal(frames) * np.sqrt(1.0 - keep**2)):
        last = keep * last + kick
        x[i] = last
    return np.exp(sd * x - sd**2 / 2.0)[:, None]
