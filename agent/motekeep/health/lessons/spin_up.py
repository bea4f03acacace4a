"""What is usual for a unit when it is woken: lesson `spin_up`.

Owns the gathering of wakes into what is usual, and what physics allows as usual. Must not know any fault.
"""

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass
from math import expm1, sqrt
from statistics import median
from typing import ClassVar

from motekeep.health.baseline import Lesson, Notes
from motekeep.health.memory import is_number
from motekeep.health.wake import Wake
from motekeep.health.wake_watch import WEIGHT_S
from motekeep.measure.dose import ServiceKind

DAY_S = 86400.0
BLOCK_WAKES = 24  # a day of wakes, or so many: what is averaged before anything is judged
CLIP = 3.0  # standard deviations beyond which a wake counts as just so far off: a plume went by
ALIKE = 0.2  # relative: sleeps of another length leave another shortfall
WEAK = 0.7  # of the flow: the fault that excesses are told in units of
USUAL_FLUSH_S = 5.4
DRAUGHT_PER_S = 1.5e-3  # a hundredth of the flow through 9 cm3


@dataclass(frozen=True, slots=True)
class SpinUp:
    """The usual shortfalls after a wake, by the lower edges of their channels, of a unit whose fan is well.

    They hold for sleeps of `asleep_s`. `u` is the standard uncertainty that they bring into an `excess`; `spread` how
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
        """How far this wake's shortfalls are above the usual ones, in units of what a fan at WEAK would add, and with
        what variance; None when they cannot be compared. A channel weighs by what it would add and by its counting.
        """
        if abs(wake.asleep_s / self.asleep_s - 1.0) > ALIKE:
            return None
        found = {s.size_um: s for s in wake.shortfalls}
        usual = zip(self.sizes_um, self.shortfalls, strict=True)
        rows = [(found[size], share, added(size, self.asleep_s)) for size, share in usual if size in found]
        weight = sum([more * more / s.variance for s, _, more in rows])
        if weight <= 0.0:
            return None
        value = sum([(s.share - share) * more / s.variance for s, share, more in rows]) / weight
        variance = self.spread / weight
        reach = CLIP * sqrt(variance)
        return max(min(value, reach), -reach), variance


def added(size_um: float, asleep_s: float) -> float:
    """What a fan at WEAK adds to the shortfall of the channel from this size on, after so long a sleep.

    Of the particles exp(-(k + b) t) of what settling would leave not is there still: k by Stokes with slip from 1 cm at
    1.6 g/cm3, b by the draught. Of what is missing the weights of `wake_watch` see E(tau) = (1 + 7 s/tau)^-2, and tau
    rises from a usual 5.4 s (9 cm3 at 0.1 L/min) to 7.7 s.
    """
    diameter = 1.35 * size_um or 0.4  # the middle of a channel; most of a smallest mass
    settling = 4.8e-3 * diameter * diameter * (1.0 + 0.165 / diameter)
    missing = settling / (settling + DRAUGHT_PER_S) * -expm1(-(settling + DRAUGHT_PER_S) * asleep_s)
    return missing * (seen(USUAL_FLUSH_S / WEAK) - seen(USUAL_FLUSH_S))


def seen(flush_s: float) -> float:
    """The weighted mean of exp(-t/flush) over a wake."""
    return (1.0 + WEIGHT_S / flush_s) ** -2


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
    """Learns the usual shortfall from the first wakes: over three days at the least, and until its uncertainty is a
    fifth of what a fan at 70 % would add; after PATIENT_DAYS a third is enough.

    Only wakes after sleeps of about one length are taken: that of the first. When it changes for good (another duty),
    learning begins anew. A block is a day, or 24 wakes; within it wakes beyond 3 standard deviations of the median are
    drawn in, so that a plume or a gust teaches nothing.

    Plausible is what a cell flushed in 3 to 12 s can do: of ten minutes' sleep a third to two thirds of what is below
    1 um is lost, and a twelfth to two fifths of that is missing in the seconds that are weighed; firmware that averages
    over ten frames and a laser that starts bright or dim move it by some 0.1 (emulated units). What lies outside is
    never given. A fan that is weak on its first day lies inside: alone it cannot be told from a large cell.
    """

    name: ClassVar[str] = "spin_up"
    begun_again_by: ClassVar[frozenset[ServiceKind]] = frozenset(
        {ServiceKind.FAN_REPLACED, ServiceKind.UNIT_REPLACED, ServiceKind.CLEANED}
    )

    ENOUGH, ENOUGH_LATER, PATIENT_DAYS = 0.2, 0.33, 30.0
    LEAST_DAYS = 3.0
    MOST_BLOCKS = 60  # two months of days: what is not known by then goes with the oldest
    USUAL_SPREAD, USUAL_BLOCKS = 1.7, 10  # emulated units and weathers; counts as so many blocks seen
    OTHER_LENGTH = 20  # sleeps of another length in a row: the duty was changed
    PLAUSIBLE = (-0.08, 0.45)

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
        more = [added(size, self._asleep_s) for size in self._sizes]
        squares = 0.0
        for block in blocks:
            weight = sum([m * m * w for m, w in zip(more, block.weights, strict=True)])
            pull = sum([(s - u) * m * w for s, u, m, w in zip(block.shares, usual, more, block.weights, strict=True)])
            squares += pull * pull / weight
        spread = (squares + self.USUAL_BLOCKS * self.USUAL_SPREAD) / (len(blocks) - 1 + self.USUAL_BLOCKS)
        spread = max(spread, self.USUAL_SPREAD)
        u = sqrt(spread / sum([m * m * total for m, total in zip(more, totals, strict=True)]))
        late = blocks[-1].day - blocks[0].day >= self.PATIENT_DAYS
        if u > (self.ENOUGH_LATER if late else self.ENOUGH):
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
            if asleep_s > 0.0 and u > 0.0 and spread > 0.0:
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
