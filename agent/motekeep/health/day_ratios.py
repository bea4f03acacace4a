"""Ratios between channels, day by day: where a loss of light shows.

Owns the three ratios of a day and what a loss of light does to them. Must not know when that is a finding.

A pulse that lost the share 1 - G of its light reaches a threshold only from a particle that is larger by G^(-1/p), p
the local exponent of the scattered signal against size. For the side-scattered signal of latex at 650 nm (Mie theory)
p is some 4 at 0.3 um, falls to almost nothing between 0.4 and 0.5, is 2.6 above 0.5, 1.5 at 1, 2.4 at 2.5 and 1.6 at
5: so 0.5 moves further than 0.3, 1 further than 2.5, 5 further than 2.5. Counts fall steeply with size, whatever the
air, therefore

    N(>0.5)/N(>0.3) falls,    N(>2.5)/N(>1) mostly rises,    N(>5)/N(>2.5) mostly falls.

Where exactly a unit's thresholds sit decides on the last two: a unit whose gain is high has its 2.5 um on the flat part
below, and there both turn round. So their quotient, the twist, counts in either direction; air leaves it alone.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import log
from statistics import median

from motekeep.health.memory import is_number
from motekeep.health.shape import DAY_S, Block, growth_of
from motekeep.health.trend import spread

DRY_GROWTH = growth_of(75.0)  # the ratios are not freed from growth, so only fairly dry blocks count
_LEAST_BLOCKS = 2
_NOTHING = 0.05  # per dL, added to counts that may be none in a block: less than one pulse in three hours


@dataclass(frozen=True, slots=True)
class DayRatios:
    """ln of the three ratios of one UTC day that began at `utc`; two where nothing is printed above 5 um."""

    utc: float
    ratios: tuple[float, ...]


class DayBuilder:
    """Makes days of blocks."""

    def __init__(self) -> None:
        self._utc = 0.0
        self._blocks: list[Block] = []  # at most eight

    def add(self, block: Block) -> DayRatios | None:
        """One more block; the day before it, when it is the first of another and there was enough in that."""
        utc = block.utc // DAY_S * DAY_S
        finished = None
        if utc != self._utc:
            finished = self._finish()
            self._utc, self._blocks = utc, []
        if block.growth <= DRY_GROWTH:
            self._blocks.append(block)
        return finished

    def _finish(self) -> DayRatios | None:
        blocks = self._blocks
        if len(blocks) < _LEAST_BLOCKS:
            return None
        fine = median([log(b.n05 / b.n03) for b in blocks])
        middle = median([log((b.n25 + _NOTHING) / (b.n1 + _NOTHING)) for b in blocks])
        largest = [b.n5 for b in blocks if b.n5 is not None]
        if len(largest) < len(blocks):
            return DayRatios(self._utc, (fine, middle))
        # of sums, as single blocks of clean air hold a handful of such particles
        coarse = log((sum(largest) + _NOTHING) / (sum([b.n25 for b in blocks]) + _NOTHING))
        return DayRatios(self._utc, (fine, middle, coarse))


@dataclass(frozen=True, slots=True)
class UsualRatios:
    """What a unit's ratios are in its first weeks: medians of so many days. `twist` is that of the second over the
    third ratio, with its spread from day to day; 0 where the third is not printed."""

    medians: tuple[float, ...]
    twist: float
    twist_spread: float
    days: int


def usual_of(days: Sequence[DayRatios]) -> UsualRatios:
    """Of days that all have as many ratios."""
    columns = list(zip(*[day.ratios for day in days], strict=True))
    twists = [day.ratios[1] - day.ratios[2] for day in days] if len(columns) == 3 else [0.0]
    return UsualRatios(tuple([median(column) for column in columns]), median(twists), spread(twists), len(days))


def packed_days(days: Sequence[DayRatios]) -> list[float]:
    """For a memory: how many ratios a day has, then each day's utc and ratios. All days must have as many."""
    out: list[float] = [float(len(days[0].ratios))] if days else []
    for day in days:
        out += [day.utc, *[round(value, 4) for value in day.ratios]]
    return out


def unpacked_days(values: object) -> list[DayRatios]:
    """What `packed_days` gave, as far as it can be read."""
    if not isinstance(values, list | tuple) or not values or not all(is_number(value) for value in values):
        return []
    if values[0] not in {2, 3}:
        return []
    step = int(values[0]) + 1
    rows = [values[i : i + step] for i in range(1, len(values), step)]
    return [DayRatios(row[0], tuple(row[1:])) for row in rows if len(row) == step]
