"""What is usual for a unit when it is woken: lesson `spin_up`.

Owns the gathering of wakes into what is usual, and what physics allows as usual. Must not know any fault.
"""

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt
from statistics import median
from typing import ClassVar

from motekeep.health.baseline import Lesson, Notes
from motekeep.health.memory import is_number
from motekeep.health.wake import Wake
from motekeep.measure.dose import ServiceKind

DAY_S = 86400.0
BLOCK_WAKES = 24  # a day of wakes, or so many: what is averaged before anything is judged
CLIP = 3.0  # standard deviations beyond which a wake counts as just so far off: a plume went by
ALIKE = 0.2  # relative: sleeps of another length leave another shortfall


@dataclass(frozen=True, slots=True)
class SpinUp:
    """The usual shortfalls after a wake, by the lower edges of their channels, of a unit whose fan is well.

    They hold for sleeps of `asleep_s`. `u` is the standard uncertainty of all of them together, relative; `spread` how
    many times the variance of a wake was what counting and gusts allow. `deficit_s` and `first`: see `Wake`.
    """

    sizes_um: tuple[float, ...]
    shortfalls: tuple[float, ...]
    asleep_s: float
    u: float
    spread: float
    wakes: int
    deficit_s: float
    first: float

    def excess(self, wake: Wake) -> tuple[float, float] | None:
        """How far this wake's shortfalls are above the usual ones, relative, and with what variance; None when they
        cannot be compared. A channel weighs with its usual shortfall squared over its variance: by counting statistics.
        """
        if abs(wake.asleep_s / self.asleep_s - 1.0) > ALIKE:
            return None
        found = {s.size_um: s for s in wake.shortfalls}
        pairs = [
            (found[size], usual) for size, usual in zip(self.sizes_um, self.shortfalls, strict=True) if size in found
        ]
        weight = sum([usual * usual / s.variance for s, usual in pairs])
        if weight <= 0.0:
            return None
        value = sum([(s.share - usual) * usual / s.variance for s, usual in pairs]) / weight
        variance = self.spread / weight
        reach = CLIP * sqrt(variance)
        return max(min(value, reach), -reach), variance


@dataclass(frozen=True, slots=True)
class _Block:
    """Mean shortfall and weight (one over variance) by channel over a day of wakes."""

    day: float
    wakes: int
    shares: tuple[float, ...]
    weights: tuple[float, ...]
    deficit_s: float
    first: float


class SpinUpLesson(Lesson):
    """Learns the usual shortfall from the first wakes: until it is known to 4 %, over three days at the least.

    Only wakes after sleeps of about one length are taken: that of the first. When it changes for good (another duty),
    learning begins anew. A block is a day, or 24 wakes; within it wakes beyond 3 standard deviations of the median are
    drawn in, so that a plume or a gust teaches nothing.

    Plausible is what a cell of 5 to 20 cm3 at the nominal flow can do (flush in 3 to 12 s; computed): of ten minutes'
    sleep between a fifth and two thirds of what is below 1 um is lost, and of that a twelfth to a half is still missing
    in the seconds that are weighed. What lies outside is never given: a fan that is weak already, or a lag that is none
    of the cell's.
    """

    name: ClassVar[str] = "spin_up"
    begun_again_by: ClassVar[frozenset[ServiceKind]] = frozenset(
        {ServiceKind.FAN_REPLACED, ServiceKind.UNIT_REPLACED, ServiceKind.CLEANED}
    )

    ENOUGH = 0.04
    LEAST_DAYS = 3.0
    MOST_BLOCKS = 60  # two months of days: what is not known by then goes with the oldest
    USUAL_SPREAD, USUAL_BLOCKS = 1.7, 10  # emulated units and weathers; counts as so many blocks seen
    OTHER_LENGTH = 20  # sleeps of another length in a row: the duty was changed
    PLAUSIBLE = (0.02, 0.33)

    def __init__(self) -> None:
        self.forget()

    def forget(self) -> None:
        self._sizes: tuple[float, ...] = ()
        self._asleep_s = 0.0
        self._others = 0
        self._wakes: list[Wake] = []  # of the block under way: at most BLOCK_WAKES
        self._blocks: deque[_Block] = deque(maxlen=self.MOST_BLOCKS)
        self._part: SpinUp | None = None

    def wake(self, wake: Wake) -> None:
        if not wake.shortfalls:
            return
        if self._asleep_s and abs(wake.asleep_s / self._asleep_s - 1.0) > ALIKE:
            self._others += 1
            if self._others >= self.OTHER_LENGTH:
                self.forget()
            return
        self._others = 0
        if self._part is not None:
            return
        sizes = tuple([s.size_um for s in wake.shortfalls])
        if len(sizes) > len(self._sizes):
            self.forget()
            self._sizes, self._asleep_s = sizes, wake.asleep_s
        if sizes != self._sizes:
            return
        if self._wakes and (len(self._wakes) >= BLOCK_WAKES or _day(wake) != _day(self._wakes[0])):
            self._blocks.append(_block(self._wakes))
            self._wakes = []
            self._part = self._learnt()
        self._wakes.append(wake)

    def _learnt(self) -> SpinUp | None:
        blocks = list(self._blocks)
        if len(blocks) < self.LEAST_DAYS or blocks[-1].day - blocks[0].day < self.LEAST_DAYS - 1.0:
            return None
        columns = range(len(self._sizes))
        totals = [sum([b.weights[i] for b in blocks]) for i in columns]
        usual = [sum([b.weights[i] * b.shares[i] for b in blocks]) / totals[i] for i in columns]
        low, high = self.PLAUSIBLE
        if not all(low <= share <= high for share in usual):
            return None
        squares = 0.0
        for block in blocks:
            weight = sum([u * u * w for u, w in zip(usual, block.weights, strict=True)])
            pull = sum([(s - u) * u * w for s, u, w in zip(block.shares, usual, block.weights, strict=True)])
            squares += pull * pull / weight
        spread = (squares + self.USUAL_BLOCKS * self.USUAL_SPREAD) / (len(blocks) - 1 + self.USUAL_BLOCKS)
        spread = max(spread, self.USUAL_SPREAD)
        u = sqrt(spread / sum([share * share * total for share, total in zip(usual, totals, strict=True)]))
        if u > self.ENOUGH:
            return None
        wakes = sum([b.wakes for b in blocks])
        deficit_s = sum([b.wakes * b.deficit_s for b in blocks]) / wakes
        first = sum([b.wakes * b.first for b in blocks]) / wakes
        return SpinUp(self._sizes, tuple(usual), self._asleep_s, u, spread, wakes, deficit_s, first)

    def part(self) -> SpinUp | None:
        return self._part

    # -- across a restart ---------------------------------------------------------------------------------------

    def notes(self) -> Notes:
        """A block under way is lost in a restart: less than a day of wakes."""
        if (p := self._part) is not None:
            known = [p.asleep_s, p.u, p.spread, float(p.wakes), p.deficit_s, p.first]
            return {"sizes": p.sizes_um, "shortfalls": p.shortfalls, "known": known}
        flat = [x for b in self._blocks for x in (b.day, b.wakes, *b.shares, *b.weights, b.deficit_s, b.first)]
        return {"sizes": self._sizes, "asleep_s": self._asleep_s, "blocks": flat}

    def recall(self, notes: Notes) -> None:
        self.forget()
        sizes, known, shortfalls = (_list(notes.get(key)) for key in ("sizes", "known", "shortfalls"))
        if not sizes:
            return
        if len(known) == 6 and len(shortfalls) == len(sizes):
            asleep_s, u, spread, wakes, deficit_s, first = known
            if asleep_s > 0.0 and u > 0.0 and spread > 0.0 and min(shortfalls) > 0.0:
                self._sizes, self._asleep_s = tuple(sizes), asleep_s
                self._part = SpinUp(tuple(sizes), tuple(shortfalls), asleep_s, u, spread, int(wakes), deficit_s, first)
            return
        asleep, flat = notes.get("asleep_s"), _list(notes.get("blocks"))
        n, size = len(sizes), 4 + 2 * len(sizes)
        if not is_number(asleep) or asleep <= 0.0 or len(flat) % size:
            return
        self._sizes, self._asleep_s = tuple(sizes), asleep
        for at in range(0, len(flat), size):
            day, wakes, *rest = flat[at : at + size]
            if min(rest[n : 2 * n]) > 0.0:
                self._blocks.append(
                    _Block(day, int(wakes), tuple(rest[:n]), tuple(rest[n : 2 * n]), rest[2 * n], rest[2 * n + 1])
                )


def _day(wake: Wake) -> float:
    return wake.at.utc // DAY_S


def _block(wakes: Sequence[Wake]) -> _Block:
    shares, weights = [], []
    for i in range(len(wakes[0].shortfalls)):
        own = [(w.shortfalls[i].share, w.shortfalls[i].variance) for w in wakes]
        middle = median([share for share, _ in own])
        drawn = [(middle + max(min(s - middle, CLIP * sqrt(v)), -CLIP * sqrt(v)), 1.0 / v) for s, v in own]
        total = sum([weight for _, weight in drawn])
        shares.append(sum([share * weight for share, weight in drawn]) / total)
        weights.append(total)
    deficit_s, first = median([w.deficit_s for w in wakes]), median([w.first for w in wakes])
    return _Block(_day(wakes[0]), len(wakes), tuple(shares), tuple(weights), deficit_s, first)


def _list(value: object) -> list[float]:
    """A list of finite numbers, or an empty one."""
    return list(value) if isinstance(value, list | tuple) and all(is_number(x) for x in value) else []
