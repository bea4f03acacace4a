"""Robust trend and change of a short series: what slow checks reckon with.

Owns the statistics in plain Python: medians, Theil and Sen's slope, Mann and Kendall's test, Page's chart. Must not
know what the numbers stand for. Nothing here allows for autocorrelation by itself, which ruins a chart's rate of false
alarms: feed means of blocks longer than the decorrelation time, or tell the test by `effective_number` how many
independent values there are.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import sqrt
from statistics import median

MAD_TO_SIGMA = 1.4826  # of a normal distribution: 1 / Phi^-1(3/4) (Hampel 1974)


def spread(values: Sequence[float]) -> float:
    """Median absolute deviation, scaled to the standard deviation of a normal distribution."""
    middle = median(values)
    return MAD_TO_SIGMA * median([abs(value - middle) for value in values])


@dataclass(frozen=True, slots=True)
class Slope:
    """Theil and Sen's slope with its intercept, the median of y - slope x; `low` and `high` bound it at some 95 %."""

    value: float
    intercept: float
    low: float
    high: float


def theil_sen(x: Sequence[float], y: Sequence[float], *, alike: bool = False) -> Slope | None:
    """The median slope of all pairs (Theil 1950, Sen 1968); up to 29 % of the values may be anything. None when no
    two x differ. The bounds are Sen's, from Kendall's variance; pairs of one x are left out. `alike` widens them
    by the autocorrelation of what the line leaves over. O(n^2): for n below 100.
    """
    n = len(x)
    slopes = sorted([(y[j] - y[i]) / (x[j] - x[i]) for i in range(n) for j in range(i + 1, n) if x[i] != x[j]])
    if not slopes:
        return None
    value = median(slopes)
    intercept = median(y) - value * median(x)
    half = 1.959964 * sqrt(kendall_variance(y))
    if alike:
        half *= sqrt(n / effective_number([b - intercept - value * a for a, b in zip(x, y, strict=True)]))
    pairs = len(slopes)
    below = max(round((pairs - half) / 2.0) - 1, 0)
    above = min(round((pairs + half) / 2.0), pairs - 1)
    return Slope(value, intercept, slopes[below], slopes[above])


def kendall_variance(values: Sequence[float]) -> float:
    """Variance of Kendall's S without trend, less for ties (Kendall 1975)."""
    n = len(values)
    ties = [values.count(value) for value in set(values)]
    return (n * (n - 1) * (2 * n + 5) - sum([t * (t - 1) * (2 * t + 5) for t in ties])) / 18.0


@dataclass(frozen=True, slots=True)
class Kendall:
    """S: rises less falls over all pairs; its variance without trend; the standardised statistic z."""

    s: int
    variance: float
    z: float


def mann_kendall(values: Sequence[float], effective: float | None = None) -> Kendall:
    """Test for a monotonic trend (Mann 1945, Kendall 1975), with correction for ties and continuity.

    `effective`: how many of the values are independent; z then shrinks by the root of their share.
    """
    s = sum([(b > a) - (b < a) for i, a in enumerate(values) for b in values[i + 1 :]])
    variance = kendall_variance(values)
    z = 0.0 if variance <= 0.0 else (s - (s > 0) + (s < 0)) / sqrt(variance)
    if effective is not None and values:
        z *= sqrt(min(effective / len(values), 1.0))
    return Kendall(s, variance, z)


def effective_number(values: Sequence[float]) -> float:
    """How many independent values tell as much of the mean as these: n (1 - r)/(1 + r), r the lag-1 autocorrelation
    held to 0 to 0.9 (a short series knows it badly)."""
    n = len(values)
    middle = sum(values) / n
    rest = [value - middle for value in values]
    power = sum([value * value for value in rest])
    if power <= 0.0:
        return float(n)
    r = sum([a * b for a, b in pairwise(rest)]) / power
    r = min(max(r, 0.0), 0.9)
    return n * (1.0 - r) / (1.0 + r)


def chart_up(values: Sequence[float], allowance: float) -> list[float]:
    """Page's upper chart, max(0, C + value - allowance) from value to value (Page 1954)."""
    total = 0.0
    out = []
    for value in values:
        total = max(0.0, total + value - allowance)
        out.append(total)
    return out


def chart_began(values: Sequence[float], allowance: float) -> int:
    """Where the rise began that the chart shows at its end: the index after its last zero; len(values) without."""
    chart = chart_up(values, allowance)
    zeros = [i for i, total in enumerate(chart) if total == 0.0]
    return zeros[-1] + 1 if zeros else 0
