"""False counts in the smallest channel, told from a pair: how many there are by night and by day.

Owns the additive part of a departure and its course through the day. Must not know when it is a finding.

Stray light and dirt that glows in the beam add the same counts to clean air and to smoke, and only to the smallest
channel, as their pulses are small (service notes of liquid counters say the same: excess counts in the first channel
only). So they are seen best in clean air, which is why blocks are weighted by how well they know a count, not a ratio.
Daylight adds them by day: nothing at night, and about half a sine wave from sunrise to sunset. No place is known here,
so neither the hour of noon nor the length of the day is: both are fitted, in steps of two hours.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import cos, exp, hypot, pi, sqrt

from motekeep.health.lessons.twin_ratio import TwinRatio
from motekeep.health.twin_block import BLOCK_S, Comparison

_DAY_S = 86_400.0
_SLOTS = int(_DAY_S / BLOCK_S)
_NOONS_H = tuple(range(0, 24, 2))
_DAYS_H = (8.0, 12.0, 16.0)  # shortest to longest day that people live with, up to 57 degrees of latitude
# Between the two smallest channels of a healthy pair, what is left when both follow the same air. Ours.
_SPREAD = 0.02
# What the second channel says of the first by their slopes is known to so much of itself: not all that moves it is a
# shift of size, and what fouls optics moves the first less. Ours.
_SHARED = 0.4
_ALIKE = 3.0  # neighbouring blocks share their weather: so many of them count as one


@dataclass(frozen=True, slots=True)
class Excess:
    """False counts per 0.1 L: `night` all day long, `day` at noon on top. `gain` is by how much daylight explains the
    blocks better than the same number all day, in -2 ln likelihood; `noon_utc_h` when it is highest."""

    night: float
    night_sd: float
    day: float
    day_sd: float
    gain: float
    noon_utc_h: float


@dataclass(frozen=True, slots=True)
class FalseCounts:
    """What one block says: the excess in counts per 0.1 L, its variance, and how much of the channel's ratio was taken
    from the channel above, in the same counts."""

    slot: int
    excess: float
    variance: float
    shared: float


def false_counts(ratio: TwinRatio, start_utc: float, compared: Sequence[Comparison]) -> FalseCounts:
    """What the smallest channel has over what the twin and the channel above it let expect, in the block of the slot at
    `start_utc`, compared channel by channel."""
    smallest, above = ratio.channels[:2]
    first, second = compared[:2]
    # what shifts sizes of both (unlike warmth of the cells) shows in each by its slope
    shared = min(max(first.slope / max(second.slope, 1e-9), 0.0), 1.0) * above.residual(second)
    residual = smallest.residual(first) - shared
    expected = first.expected * exp(first.log_ratio - residual)
    known = smallest.level_sd**2 + above.level_sd**2
    variance = (first.variance + second.variance + _SPREAD**2 + known) * expected**2 + 1.0
    slot = int(start_utc % _DAY_S // BLOCK_S)
    return FalseCounts(slot, expected * (exp(residual) - 1.0), variance, shared * expected)


def excess_of(seen: Sequence[FalseCounts]) -> Excess:
    """The course through the day of what these blocks say; at least three blocks."""
    weights = [0.0] * _SLOTS
    means = [0.0] * _SLOTS
    shared = [0.0] * _SLOTS
    squares = 0.0
    for one in seen:
        w = 1.0 / one.variance
        weights[one.slot] += w
        means[one.slot] += w * one.excess
        squares += w * one.excess**2
        shared[one.slot] += w * one.shared
    flat = _line(weights, means, squares, _FLAT)
    best, noon, course = flat, 0, _FLAT
    for (noon_h, _), shape in _SHAPES.items():
        fitted = _line(weights, means, squares, shape)
        if fitted.misfit < best.misfit and fitted.slope > 0.0:
            best, noon, course = fitted, noon_h, shape
    # noise that is larger than thought widens all, as in any fit of unknown noise; smaller noise is not believed
    widening = sqrt(max(best.misfit / max(len(seen) - 2, 1), 1.0))
    doubt = _line(weights, shared, 0.0, course)
    night_sd = hypot(best.level_sd * widening, _SHARED * doubt.level)
    day_sd = hypot(best.slope_sd * widening, _SHARED * doubt.slope)
    gain = (flat.misfit - best.misfit) / widening**2
    return Excess(best.level, night_sd, best.slope, day_sd, gain, float(noon))


@dataclass(frozen=True, slots=True)
class _Line:
    """excess = level + slope shape."""

    level: float
    level_sd: float
    slope: float
    slope_sd: float
    misfit: float


def _line(weights: Sequence[float], sums: Sequence[float], squares: float, shape: Sequence[float]) -> _Line:
    """Weighted least squares from the sums of each slot."""
    w, wy = sum(weights), sum(sums)
    x = sum([a * s for a, s in zip(weights, shape, strict=True)]) / w
    xx = sum([a * (s - x) ** 2 for a, s in zip(weights, shape, strict=True)])
    xy = sum([b * (s - x) for b, s in zip(sums, shape, strict=True)])
    slope = xy / xx if xx > 0.0 else 0.0
    misfit = squares - wy * wy / w - slope * xy
    level_sd = sqrt(_ALIKE * (1.0 / w + (x * x / xx if xx > 0.0 else 0.0)))
    return _Line(wy / w - slope * x, level_sd, slope, sqrt(_ALIKE / xx) if xx > 0.0 else 0.0, max(misfit, 0.0))


def _daylight(slot: int, noon_h: float, day_h: float) -> float:
    """The mean over a block of half a sine wave of `day_h` hours about noon, 0 at night."""
    hours = int(BLOCK_S / 3600.0)
    total = 0.0
    for part in range(hours):
        away = abs((slot * hours + part + 0.5 - noon_h + 12.0) % 24.0 - 12.0)
        total += cos(pi * away / day_h) if away < day_h / 2.0 else 0.0
    return total / hours


_FLAT = [0.0] * _SLOTS
_SHAPES = {(noon, day): [_daylight(slot, noon, day) for slot in range(_SLOTS)] for noon in _NOONS_H for day in _DAYS_H}
