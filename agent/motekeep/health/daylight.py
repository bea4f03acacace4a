"""Whether false counts follow daylight, without knowing where the sensor hangs.

Owns the course of daylight through a UTC day and its fit. Must not know channels or findings.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import pi, sin
from statistics import median

from motekeep.health.shape import BLOCK_S, BLOCKS_A_DAY, DAY_S
from motekeep.health.trend import spread

_LEAST_SLOTS, _LEAST_A_SLOT = 7, 4
_DAYS_H = (8.0, 10.0, 12.0, 14.0, 16.0)  # shortest to longest day up to 57 degrees of latitude
_NOONS = 16  # phases tried
LEAST, LEAST_SHARE = 120.0, 0.03  # of an excess that counts: per dL, and of the level
_SIGMAS, _FITS, _NIGHT = 5.0, 0.65, 0.35  # over its own error; share of the course explained; night over day at most


@dataclass(frozen=True, slots=True)
class Daylight:
    """Excess at `noon_utc_h` over that at night, and at night, per dL; `explained` is a share of the daily course."""

    day: float
    night: float
    noon_utc_h: float
    day_h: float
    explained: float

    def light(self, slot: int) -> float:
        """The course, 0 at night to 1 at noon, in the middle of this eighth of the UTC day."""
        return _light((slot + 0.5) * 24.0 / BLOCKS_A_DAY - self.noon_utc_h, self.day_h)


def daylight_excess(excesses: Sequence[tuple[float, float]], level: float, *, strict: bool = True) -> Daylight | None:
    """The course that fits best, or None when there is none worth the name. `excesses` are (utc, per dL), `level` the
    usual N(>0.3) that they were found in: relations between channels hold to a few per cent of it only.

    Medians over the days of each eighth of the day, so that a few days of other air do not count; then half a sine
    wave from sunrise to sunset over a flat night, of every phase and length of day, by least squares. `strict` is for
    one that is not known yet: then there must be little at night too, or it is not light; else less is enough.
    """
    slots: list[list[float]] = [[] for _ in range(BLOCKS_A_DAY)]
    for utc, excess in excesses:
        slots[int(utc % DAY_S // BLOCK_S)].append(excess)
    heard = [(i, values) for i, values in enumerate(slots) if len(values) >= _LEAST_A_SLOT]
    if len(heard) < _LEAST_SLOTS:
        return None
    course = [(i, median(values)) for i, values in heard]
    best = max(
        [_fit(course, noon * 24.0 / _NOONS, day_h) for noon in range(_NOONS) for day_h in _DAYS_H],
        key=lambda fit: fit.explained if fit.day > 0.0 else -1.0,
    )
    error = median([1.25 * spread(values) / len(values) ** 0.5 for _, values in heard])
    if best.explained < (_FITS if strict else _FITS / 2.0):
        return None
    least = max(LEAST, LEAST_SHARE * level, _SIGMAS * error) * (1.0 if strict else 0.4)
    return None if best.day < least or (strict and abs(best.night) > _NIGHT * best.day) else best


def _fit(course: list[tuple[int, float]], noon_h: float, day_h: float) -> Daylight:
    light = [_light((i + 0.5) * 24.0 / BLOCKS_A_DAY - noon_h, day_h) for i, _ in course]
    values = [value for _, value in course]
    n = len(values)
    mean_x, mean_y = sum(light) / n, sum(values) / n
    xx = sum([(x - mean_x) ** 2 for x in light])
    xy = sum([(x - mean_x) * (y - mean_y) for x, y in zip(light, values, strict=True)])
    yy = sum([(y - mean_y) ** 2 for y in values])
    day = xy / xx if xx > 0.0 else 0.0
    return Daylight(day, mean_y - day * mean_x, noon_h, day_h, day * xy / yy if yy > 0.0 else 0.0)


def _light(from_noon_h: float, day_h: float) -> float:
    away = (from_noon_h + 12.0) % 24.0 - 12.0
    return max(sin(pi * (away / day_h + 0.5)), 0.0) if abs(away) < day_h / 2.0 else 0.0
