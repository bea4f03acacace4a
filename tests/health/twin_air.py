"""Hours of two units in one air, made from the physics in a few lines: for the tests of what a twin tells.

Independent of the code under test: thresholds move on the whole Mie curve, counts come from lognormal populations.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import pairwise
from math import cos, erfc, exp, log, pi, sqrt
from random import Random

from motekeep.health.hour import Hour, Pair
from motekeep.instant import Instant

SIZES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)
PERIOD_S = 6.0
FLOW_L_MIN = 0.1
START = 1_803_859_200.0  # midnight UTC
DAY_S = 86_400.0

# Light scattered into 60 to 120 degrees by latex at 650 nm, um2 (Mie theory; computed with miepython 3.3.0).
_MIE = (
    (0.1, 5.417e-5),
    (0.15, 6.181e-4),
    (0.2, 3.266e-3),
    (0.3, 0.02312),
    (0.4, 0.07735),
    (0.5, 0.09377),
    (0.7, 0.2254),
    (1.0, 0.4389),
    (1.5, 0.797),
    (2.5, 1.247),
    (5.0, 6.694),
    (10.0, 19.87),
    (100.0, 995.8),  # on with the exponent of the last sizes
)


@dataclass(frozen=True, slots=True)
class Sickness:
    """What is wrong at a moment: flow and light as parts of before, false counts per 0.1 L, `coarse` as a factor on
    the largest channels only, which nothing known does."""

    flow: float = 1.0
    light: float = 1.0
    floor: float = 0.0
    coarse: float = 1.0


WELL = Sickness()


@dataclass(frozen=True, slots=True)
class Make:
    """How a unit was made: flow over nominal, thresholds over nominal."""

    flow: float = 1.0
    thresholds: tuple[float, ...] = (1.0,) * 6


OWN = Make(1.04, (1.03, 0.98, 1.02, 0.97, 1.03, 1.0))
TWIN = Make(0.97, (0.99, 1.02, 0.98, 1.01, 0.99, 1.02))


def hours(
    days: float,
    sick: Callable[[float], Sickness] = lambda _day: WELL,
    *,
    seed: int = 1,
    level: float = 0.2,
    own: Make = OWN,
    sound: bool = True,
    trusted: bool = True,
    first_day: float = 0.0,
) -> Iterator[Hour]:
    """The hours of `days`. `sick` is asked with the day since START; `level` scales the average urban aerosol."""
    random = Random(seed)
    haze, dust = random.gauss(0.0, 1.0), random.gauss(0.0, 1.0)
    for hour in range(round(days * 24)):
        day = first_day + hour / 24.0
        haze = 0.97 * haze + sqrt(1.0 - 0.97**2) * random.gauss(0.0, 1.0)
        dust = 0.9 * dust + sqrt(1.0 - 0.9**2) * random.gauss(0.0, 1.0)
        # Whitby 1978: accumulation and coarse mode of an average urban aerosol; nights are humid and particles grow
        growth = 1.1 + 0.1 * cos(2.0 * pi * day)
        modes = (
            (32_000.0 * level * exp(0.5 * haze), 0.054 * growth, 2.16),
            (5.4 * level * exp(0.3 * haze + 0.5 * dust), 0.86, 2.21),
        )
        means = [_counts(modes, make, s, random) for make, s in ((own, sick(day)), (TWIN, WELL))]
        utc = START + day * DAY_S
        at = Instant(utc, utc - START + 5000.0, "boot", trusted)
        pair = Pair(SIZES_UM, means[0], means[1], 3600.0, 600, 600)
        yield Hour(at, 3600.0, 600, None, (), pair, None, None, sound)


def _counts(
    modes: tuple[tuple[float, float, float], ...], make: Make, sick: Sickness, random: Random
) -> tuple[float, ...]:
    means = []
    for i, (size, spread) in enumerate(zip(SIZES_UM, make.thresholds, strict=True)):
        edge = size_giving(signal(size * spread) / sick.light)
        number = sum(n / 2.0 * erfc(log(edge / middle) / (sqrt(2.0) * log(sg))) for n, middle, sg in modes)
        settled = 0.06 * size * size  # lost in the cell on the way, as a part of what is flushed
        per_dl = 100.0 * number * make.flow * sick.flow * (1.0 + settled) / (1.0 + settled / sick.flow)
        per_dl = per_dl * (sick.coarse if size >= 1.0 else 1.0) + (sick.floor if i == 0 else 0.0)
        pulse = 8.0 / (FLOW_L_MIN * 3600.0)
        means.append(max(per_dl + sqrt(per_dl * pulse) * random.gauss(0.0, 1.0), 0.0))
    return tuple(means)


def signal(size_um: float) -> float:
    """Scattered light of a particle of this size."""
    for (small, low), (large, high) in pairwise(_MIE):
        if size_um <= large:
            return exp(log(low) + log(high / low) * log(size_um / small) / log(large / small))
    raise ValueError("larger than the table")


def size_giving(light: float) -> float:
    """Size of a particle that scatters this much."""
    for (small, low), (large, high) in pairwise(_MIE):
        if light <= high:
            return exp(log(small) + log(large / small) * log(light / low) / log(high / low))
    raise ValueError("brighter than the table")


def daylight(day: float, noon_h: float = 12.0) -> float:
    """0 at night, 1 at noon: half a sine wave of twelve hours."""
    return max(cos(2.0 * pi * (day % 1.0 - noon_h / 24.0)), 0.0)
