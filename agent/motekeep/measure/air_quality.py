"""NowCast and air quality index of the US EPA, and the rules of completeness they rest on. For information only.

Owns the published tables and formulas. Must not know where hourly means come from.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import floor

from motekeep.measure.reading import COMPLETENESS

NOWCAST_HOURS = 12
DAY_HOURS = 24
# 40 CFR 50 App. N 3.0 (from memory): three quarters of the hours of a day.
DAY_LEAST = round(DAY_HOURS * COMPLETENESS)

CATEGORIES = (
    "good",
    "moderate",
    "unhealthy for sensitive groups",
    "unhealthy",
    "very unhealthy",
    "hazardous",
)


@dataclass(frozen=True, slots=True)
class Band:
    """One line of a table of breakpoints: concentrations in ug/m3 and the index at both of its ends."""

    low: float
    high: float
    index_low: int
    index_high: int


@dataclass(frozen=True, slots=True)
class BreakpointTable:
    """Breakpoints of one pollutant; concentrations are cut, not rounded, to `step` before they are looked up."""

    step: float
    bands: tuple[Band, ...]


@dataclass(frozen=True, slots=True)
class Index:
    """An air quality index with its category. Above 500 the last line goes on; it is hazardous all the same."""

    index: int
    category: str


def _table(step: float, tops: Sequence[float], indices: Sequence[int]) -> BreakpointTable:
    bands, low, index_low = [], 0.0, 0
    for high, index_high in zip(tops, indices, strict=True):
        bands.append(Band(low, high, index_low, index_high))
        low, index_low = round(high + step, 1), index_high + 1
    return BreakpointTable(step, tuple(bands))


# 40 CFR 58 App. G as of 89 FR 16202, in force since 6 May 2024. That PM10 has one band from 425 to 604 is from memory.
PM2_5_2024 = _table(0.1, (9.0, 35.4, 55.4, 125.4, 225.4, 325.4), (50, 100, 150, 200, 300, 500))
PM10_2024 = _table(1.0, (54, 154, 254, 354, 424, 604), (50, 100, 150, 200, 300, 500))
# Earlier tables, to check against what was published in their time.
PM2_5_2012 = _table(0.1, (12.0, 35.4, 55.4, 150.4, 250.4, 350.4, 500.4), (50, 100, 150, 200, 300, 400, 500))
PM2_5_1999 = _table(0.1, (15.4, 40.4, 65.4, 150.4, 250.4, 350.4, 500.4), (50, 100, 150, 200, 300, 400, 500))

# What an hourly document states an index for, and by which table.
TABLES = {"pm2_5": PM2_5_2024, "pm10": PM10_2024}


def cut(concentration: float, step: float) -> float:
    """Truncated to a multiple of `step`, as the EPA wants it. 9.1 must not become 9.0 by a binary rounding error."""
    return round(floor(concentration / step + 1e-6) * step, 1)


def air_quality_index(concentration: float, table: BreakpointTable) -> Index:
    """The index of a concentration in ug/m3: linear between breakpoints, rounded half up. Below zero counts as zero."""
    c = max(cut(concentration, table.step), 0.0)
    band = next((b for b in table.bands if c <= b.high), table.bands[-1])
    slope = (band.index_high - band.index_low) / (band.high - band.low)
    place = min(table.bands.index(band), len(CATEGORIES) - 1)
    return Index(floor(slope * (c - band.low) + band.index_low + 0.5), CATEGORIES[place])


def nowcast(newest_first: Sequence[float | None]) -> float | None:
    """The PM NowCast of up to twelve hourly means in ug/m3, newest first, None where an hour is missing.

    Weight w = max(1 - range / maximum, 1/2); sum of w^age c over sum of w^age, age 0 for the newest; a missing hour is
    left out of both sums while the others keep their age. None without two of the three newest hours. Hours below zero
    count as zero first, else a single one would set the weight (the published method leaves them open: derived here).
    US EPA NowCast fact sheet.
    """
    hours = [(age, max(c, 0.0)) for age, c in enumerate(newest_first[:NOWCAST_HOURS]) if c is not None]
    if sum(age < 3 for age, _ in hours) < 2:
        return None
    most, least = max(c for _, c in hours), min(c for _, c in hours)
    weight = max(least / most, 0.5) if most > 0.0 else 1.0
    return sum(weight**age * c for age, c in hours) / sum(weight**age for age, _ in hours)


def complete(measured: float, due: float) -> bool:
    """Whether what was measured stands for what was due: three quarters of it, in any unit."""
    return due > 0.0 and measured >= COMPLETENESS * due - 1e-9


def day_mean(hours: Sequence[float | None]) -> float | None:
    """Mean of the hours of a day that are there; None with fewer than 18 of 24 (40 CFR 50 App. N 3.0, from memory)."""
    there = [c for c in hours[:DAY_HOURS] if c is not None]
    return sum(there) / len(there) if len(there) >= DAY_LEAST else None
