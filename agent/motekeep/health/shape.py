"""The shape of what a counter sees: how its channels go together, whatever the air holds.

Owns the three-hour means that solo checks look at, and the relation between channels in them. Must not know what a
change of it means: that is the checks'. Works on counts above 0.3, 0.5 and 1 um; without them it has nothing to say.

The air is taken as two populations, fine and coarse, of which each has its own amount. The counts above three sizes
are then linear in two amounts, so one of them follows from the other two, and a floor of false counts stands beside:

    N(>0.3) = A + B N(>0.5) + D N(>1) + K g N(>0.5),    g = ln(1 + kappa a / (1 - a)) / 3

with g the growth of the fine population by humidity (Petters and Kreidenweis 2007) at the water activity a of the
sensing cell and an ordinary kappa of 0.3; K learns what that does. Divided by N(>0.5) it is a plane in N(>1)/N(>0.5),
g and 1/N(>0.5): the last coefficient is the floor A, told apart by the air's own variation. Smoke, dust, fog and
fireworks are a third population for hours; robust weights leave them out.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from math import log1p
from statistics import median

from motekeep.health.hour import Hour
from motekeep.health.memory import is_number
from motekeep.health.trend import spread, theil_sen
from motekeep.instant import Instant

BLOCK_S = 10_800.0
BLOCKS_A_DAY = 8
DAY_S = 86_400.0
HUMID_PCT = 85.0  # above it growth is steep: +-3 % of the humidity sensor are +-17 % of the mass there
_KAPPA = 0.3
_LEAST_HALF = 3.0  # per dL above 0.5 um: below it the ratios are noise, whatever the air
_ROUNDS = 12


@dataclass(frozen=True, slots=True)
class Block:
    """Means over the hours below `HUMID_PCT` of three hours of the wall clock that began at `utc`.

    Counts in /dL; `n5` above 5 um where that is printed. `growth` is g, 0 without climate."""

    utc: float
    n03: float
    n05: float
    n1: float
    n25: float
    n5: float | None
    growth: float

    @property
    def slot(self) -> int:
        """Which eighth of the UTC day it is."""
        return int(self.utc % DAY_S // BLOCK_S)


class BlockBuilder:
    """Makes blocks of hours. An hour that only repeats the one before is left out: a frozen sensor shows nothing."""

    SIZES = (0.3, 0.5, 1.0, 2.5)

    def __init__(self) -> None:
        self._utc = 0.0
        self._rows: list[tuple[float, ...]] = []  # at most three
        self._last: tuple[float, ...] = ()

    def add(self, hour: Hour) -> Block | None:
        """One more hour; the block before it, when it is the first of another and there was anything in that."""
        utc = hour.start.utc // BLOCK_S * BLOCK_S
        finished = None
        if utc != self._utc:
            finished = self._finish()
            self._utc, self._rows = utc, []
        row = self._row(hour)
        if row is not None:
            self._rows.append(row)
        return finished

    def _row(self, hour: Hour) -> tuple[float, ...] | None:
        levels = hour.levels
        if levels is None or levels.means == self._last:
            return None
        self._last = levels.means
        if (hour.rh_pct is not None and hour.rh_pct > HUMID_PCT) or not set(self.SIZES) <= set(levels.sizes_um):
            return None
        at = dict(zip(levels.sizes_um, levels.means, strict=True))
        if at[0.5] < _LEAST_HALF:
            return None
        growth = 0.0 if hour.rh_pct is None else growth_of(hour.rh_pct)
        return *[at[size] for size in self.SIZES], at.get(5.0, -1.0), growth

    def _finish(self) -> Block | None:
        if not self._rows:
            return None
        n03, n05, n1, n25, n5, growth = [sum(column) / len(self._rows) for column in zip(*self._rows, strict=True)]
        return Block(self._utc, n03, n05, n1, n25, None if n5 < 0.0 else n5, growth)


def growth_of(rh_pct: float) -> float:
    """g of the module's docstring."""
    activity = min(max(rh_pct / 100.0, 0.0), 0.95)
    return log1p(_KAPPA * activity / (1.0 - activity)) / 3.0


@dataclass(frozen=True, slots=True)
class Plane:
    """The relation of a unit: floor `a` in /dL with its standard error, `b`, `d`, `k` of the module's docstring.

    `scatter` is what the relation leaves over of N(>0.3)/N(>0.5), relative; `ratio` is the median of that ratio.
    """

    a: float
    a_error: float
    b: float
    d: float
    k: float
    scatter: float
    ratio: float

    def excess(self, block: Block) -> float:
        """N(>0.3) beyond what the other channels let expect without a floor, per dL."""
        return block.n03 - block.n05 * (self.b + self.k * block.growth) - self.d * block.n1


# Rows of the fit are scaled to a spread near one. Ridge in their units, as a number of blocks: slight where the air
# tells, decisive where it does not vary; growth is held tightest, as its part is small and its span in a fortnight is.
_RIDGE = (1e-6, 1e-2, 1e-1, 1e-2)
_LEAST_SPAN = 0.02  # of g and of N(>1)/N(>0.5)


def fit_plane(blocks: Sequence[Block]) -> Plane:
    """Fit the relation to at least a dozen blocks, by iterated reweighting with Cauchy's weights (Holland and Welsch
    1977): half of the weight is gone at two scatters."""
    y = [b.n03 / b.n05 for b in blocks]
    columns = [[b.n1 / b.n05 for b in blocks], [b.growth for b in blocks], [1.0 / b.n05 for b in blocks]]
    least = (_LEAST_SPAN * median(columns[0]) + 1e-9, _LEAST_SPAN, _LEAST_SPAN * median(columns[2]))
    middles = [median(column) for column in columns]
    spans = [max(2.0 * spread(column), floor) for column, floor in zip(columns, least, strict=True)]
    ratio = median(y)
    rows = [
        [1.0, *[(column[i] - m) / s for column, m, s in zip(columns, middles, spans, strict=True)]]
        for i in range(len(y))
    ]
    target = [value / ratio for value in y]
    weights = [1.0] * len(y)
    found, scatter, inverse_a = [1.0, 0.0, 0.0, 0.0], 0.0, 0.0
    for _ in range(_ROUNDS):
        found, inverse_a = _solve(rows, target, weights)
        rest = [t - sum([f * r for f, r in zip(found, row, strict=True)]) for t, row in zip(target, rows, strict=True)]
        scatter = max(1.4826 * median([abs(value) for value in rest]), 1e-6)
        weights = [1.0 / (1.0 + (value / scatter / 2.0) ** 2) for value in rest]
    d, k, a = [found[i + 1] * ratio / spans[i] for i in range(3)]
    b = found[0] * ratio - d * middles[0] - k * middles[1] - a * middles[2]
    return Plane(a, scatter * inverse_a**0.5 * ratio / spans[2], b, d, k, scatter, ratio)


def _solve(rows: list[list[float]], target: list[float], weights: list[float]) -> tuple[list[float], float]:
    """Weighted ridge regression by Gauss and Jordan; the coefficients, and the last diagonal of the inverse."""
    n = len(_RIDGE)
    system = [
        [sum([w * r[i] * r[j] for w, r in zip(weights, rows, strict=True)]) for j in range(n)]
        + [sum([w * r[i] * t for w, r, t in zip(weights, rows, target, strict=True)]), float(i == n - 1)]
        for i in range(n)
    ]
    for i in range(n):
        system[i][i] += _RIDGE[i]
    for i in range(n):
        pivot = system[i][i]  # positive: the matrix is positive definite by the ridge
        system[i] = [value / pivot for value in system[i]]
        for j in range(n):
            if j != i:
                factor = system[j][i]
                system[j] = [v - factor * p for v, p in zip(system[j], system[i], strict=True)]
    return [row[n] for row in system], system[n - 1][n + 1]


def level_of(blocks: Sequence[Block]) -> float:
    """The median N(>0.3), of which the relation holds to a few per cent; four times that where humidity is not known,
    as its daily course then stays in the relation (measured on emulated years)."""
    known = any(b.growth > 0.0 for b in blocks)
    return median([b.n03 for b in blocks]) * (1.0 if known else 4.0)


def bend_of(plane: Plane, blocks: Sequence[Block]) -> float:
    """By what share the relation is off in proportion, freed of any floor: the intercept of the relative excess over
    1/N(>0.5); 0 when the air does not vary."""
    rest = [(plane.excess(b) - plane.a) / b.n05 / plane.ratio for b in blocks]
    line = theil_sen([1.0 / b.n05 for b in blocks], rest)
    return 0.0 if line is None else line.intercept


def packed(blocks: Iterable[Block]) -> list[float]:
    """What `fit_plane` and `Plane.excess` need of each block, five numbers a block, for a memory."""
    out: list[float] = []
    for b in blocks:
        out += [b.utc, *[float(f"{value:.5g}") for value in (b.n03, b.n05, b.n1, b.growth)]]
    return out


def unpacked(values: object) -> list[Block]:
    """Blocks of what `packed` gave, as far as it can be read; their counts above 1 um are not in it."""
    if not isinstance(values, list | tuple) or len(values) % 5 or not all(is_number(value) for value in values):
        return []
    rows = [values[i : i + 5] for i in range(0, len(values), 5)]
    return [Block(row[0], row[1], row[2], row[3], 0.0, None, row[4]) for row in rows if min(row[:3]) > 0.0]


def boot_seconds(utc: float, at: Instant) -> float:
    """A moment of the wall clock on the clock of this boot, for `Suspicion.since`."""
    return at.boot_s - max(at.utc - utc, 0.0)
