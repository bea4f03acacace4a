"""A fan that stands still: fan-stopped, without a twin and without a wake to compare.

Owns the shape of the collapse and what counts as its end. Must not know the line or the weather: it sees settled
frames only.
"""

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import accumulate, islice
from math import inf, sqrt
from typing import ClassVar

from motekeep.health.chance import poisson_at_least, poisson_at_most
from motekeep.health.check import Check, LineState
from motekeep.health.finding import Suspicion
from motekeep.health.memory import Memory, is_number
from motekeep.health.wake import Wake
from motekeep.instant import Instant
from motekeep.wire.frame import Frame, Layout, Observation

Levels = tuple[float, ...]


@dataclass(frozen=True, slots=True)
class _Block:
    """Mean levels of all frames of some 12 s."""

    start: float
    levels: Levels


@dataclass(frozen=True, slots=True)
class _Collapse:
    """What is known of a fan that stopped: levels before and after, what one pulse is in the mean of a single block,
    and whether the large particles went further down than the small ones."""

    since: float
    before: Levels
    left: Levels
    per_pulse: float
    sorted: bool
    evidence: str


class FanStopped(Check):
    """fan-stopped: counts collapse in every channel faster than air can, and stay down.

    Without flow the cell is fed by a draught of warmth alone, within seconds about a hundredth of the flow; what is in
    it falls out, large particles in seconds (1 cm in still air: 10 um 3 s, 2.5 um 50 s, 1 um 5 min, 0.3 um 40 min,
    Stokes with slip). What is left is a drizzle of small pulses and the false counts of the smallest channel. Level
    alone tells nothing, so four things are asked of the last three to four minutes, in blocks of 12 s:

    1. Depth and speed. The mean over the last 108 to 168 s is at most a quarter (without counts: a seventh) of the
       lowest two minutes of the half hour that ended 48 s earlier. Air that falls exponentially does that only with
       a time constant under about two minutes; an air cleaner in a room takes 8 or more, rain and a clean night far
       longer. The lowest two minutes, not the last: a plume that passes falls back to what was there before it.
    2. Order. No larger channel with pulses enough has clearly kept more than a tenth: the false counts that may hold up
       the smallest are not in it. Smoke that ends takes the small particles and leaves the large ones; gusty smoke
       that thins takes all, but not so deep. Where pulses are few this tells little: hours of smoke over a clean site
       (under some 300 /dL) that end within a minute can be taken for a stop, until five minutes of pulses deny it;
       mass alone knows no order and can be fooled so at any level, which its low confidence says.
    3. Number. The pulses missing are too many for chance, also if the air had fallen to 0.6 of that lowest level.
       How much of a printed number one pulse is comes from the scatter of the unit's own two-minute means before, and
       while there are few of them from the worst that firmware does (one second of air of which half is looked at).
    4. It lasts: all of the above over the whole span at once.

    Then it holds until the smallest channel is back at half of before, or the large particles are back in their old
    share. A daemon that restarts remembers it. Fog clearing fails 1 as small particles stay. Below some 60 /dL at a 6 s
    cadence (10 /dL at 1 s) there are too few pulses to tell. A duty cycle with less than eight minutes awake is too
    short to see a collapse in: the look at each wake is what finds it there, and that check is `fan_wake`.
    """

    code: ClassVar[str] = "fan-stopped"
    clear_s: ClassVar[float] = 60.0
    settled: ClassVar[bool] = True

    BLOCK_S = 12.0
    CHUNK = 10  # blocks of the two minutes that levels before are taken over
    FALL = 4  # blocks left to the fall itself, firmware averaging included
    AFTER = range(9, 15)  # blocks after the fall; the longer ones where pulses are few
    HISTORY = 150  # blocks before the fall: half an hour
    DEPTH = 0.25
    DEPTH_MASS = 0.15
    LARGER = 0.1
    CHANCE = 1e-5
    AIR_FALLS_TO = 0.6
    LEAST_PULSES = 20.0
    ORDER_PULSES = 2.0
    CHANCE_ORDER = 3e-3
    ORDER_SURE, LARGER_SURE = 20.0, 0.12
    SORTED_PULSES = 8.0
    REFINE = 25  # blocks after which levels left are taken anew: five minutes tell the drizzle better than two
    BACK = 5  # blocks that must be back
    GAP_S = 60.0
    SURE = 0.95
    FLUSHED, FLUSHED_SIGMA = 0.06, 4.0  # shortfall after a wake; a laser that starts dim makes up to 0.04

    def __init__(self, flow_l_min: float, period_s: float) -> None:
        self._block_s = max(self.BLOCK_S, 2.0 * period_s)
        # one frame: 12/flow per dL and pulse, or 1 ug/m3 (two pulses a second per ug/m3, half of it looked at)
        self._per_pulse_counts = 12.0 / flow_l_min
        self._per_pulse_mass = 1.0
        self._frames_a_block = max(self._block_s / period_s, 1.0)
        self._frames: list[Frame] = []  # of one block
        self._block_end = 0.0
        self._block_start = 0.0
        self._layout: Layout | None = None
        self._blocks: deque[_Block] = deque(maxlen=self.HISTORY + self.FALL + self.AFTER.stop)
        self._collapse: _Collapse | None = None
        self._restarted = False
        self._refine_at = inf

    # -- gathering ----------------------------------------------------------------------------------------------

    def observe(self, observation: Observation) -> None:
        now = observation.at.boot_s
        if now >= self._block_end:
            self._next_block(observation.frame, now)
        self._frames.append(observation.frame)

    def _next_block(self, frame: Frame, now: float) -> None:
        if now - self._block_end > self.GAP_S or frame.layout is not self._layout:
            self._forget()
            self._layout = frame.layout
        if self._frames:
            rows = [f.counts or f.mass for f in self._frames]
            levels = tuple([total / len(rows) for total in map(sum, zip(*rows, strict=True))])
            self._blocks.append(_Block(self._block_start, levels))
            self._frames.clear()
            self._follow(now)
        self._block_start, self._block_end = now, now + self._block_s

    def _follow(self, now: float) -> None:
        """A block is complete: look for a collapse, or for its end."""
        collapse = self._collapse
        if collapse is None:
            self._collapse = self._look()
            return
        self._collapse = None if self._is_back(collapse) else self._refined(collapse, now)
        if self._collapse is None:
            self._blocks.clear()

    def _forget(self) -> None:
        self._frames.clear()
        self._blocks.clear()
        self._restarted = True

    def line(self, state: LineState, at: Instant, why: str) -> None:
        if state is not LineState.GONE:
            self._forget()

    # -- the collapse -------------------------------------------------------------------------------------------

    def _look(self) -> _Collapse | None:
        """Whether the blocks end in a collapse. The first lines are the cheap way out, taken nearly always."""
        n, shortest, chunk = len(self._blocks), self.AFTER.start, self.CHUNK
        since = shortest + self.FALL
        if n < since + 2 * chunk:
            return None
        # newest first, as a deque is slow to look into
        newest = [block.levels[0] for block in islice(reversed(self._blocks), since + 2 * chunk)]
        just_before = max(sum(newest[since : since + chunk]), sum(newest[since + chunk :])) / chunk
        if just_before <= 0.0 or sum(newest[:shortest]) / shortest > 2.0 * self.DEPTH * just_before:
            return None
        blocks = list(self._blocks)
        smallest = [block.levels[0] for block in blocks]
        for length in self.AFTER:
            split = n - length - self.FALL
            if split < 2 * chunk:
                return None
            found = self._compare(blocks, smallest, split, length)
            if found is not None:
                return found
        return None

    def _compare(self, blocks: list[_Block], smallest: list[float], split: int, length: int) -> _Collapse | None:
        ends = range(split, max(split - self.HISTORY, 0) + self.CHUNK - 1, -self.CHUNK)
        lowest = min(ends, key=lambda end: sum(smallest[end - self.CHUNK : end]))
        before = _mean(blocks[lowest - self.CHUNK : lowest])
        left = _mean(blocks[-length:])
        depth = self.DEPTH if self._has_counts else self.DEPTH_MASS
        if before[0] <= 0.0 or left[0] > depth * before[0]:
            return None
        per_pulse = self._per_pulse(blocks[:split]) * self.CHUNK / length
        expected = [level / per_pulse for level in before]
        seen = [level / per_pulse for level in left]
        if not self._has_counts and before[0] < 5.0 * self._resolution:
            return None
        if expected[0] < self.LEAST_PULSES:
            return None
        if poisson_at_most(int(seen[0]), self.AIR_FALLS_TO * expected[0]) > self.CHANCE:
            return None
        if any(self._has_kept(pulses, left) for pulses, left in zip(expected[1:], seen[1:], strict=True)):
            return None
        return self._collapsed(blocks, before, left, per_pulse * length)

    def _has_kept(self, expected: float, seen: float) -> bool:
        """Whether a larger channel has kept more than a stopped fan leaves it, as far as its pulses tell."""
        if expected >= self.ORDER_SURE:
            return seen > self.LARGER_SURE * expected
        few = expected < self.ORDER_PULSES
        return not few and poisson_at_least(round(seen), self.LARGER * expected) < self.CHANCE_ORDER

    def _collapsed(self, blocks: list[_Block], before: Levels, left: Levels, per_pulse: float) -> _Collapse:
        normal = max(before[0] - 2.0 * sqrt(before[0] * per_pulse), 0.5 * before[0])
        first = len(blocks) - 1
        while first > 0 and blocks[first - 1].levels[0] < normal:
            first -= 1
        self._refine_at = blocks[-1].start + self.REFINE * self._block_s
        return self._state(blocks[first].start, before, left, per_pulse, len(blocks) - first)

    def _state(self, since: float, before: Levels, left: Levels, per_pulse: float, blocks: int) -> _Collapse:
        """The collapse with what its levels, means over so many blocks, say of the order."""
        one = per_pulse / blocks
        kept = left[0] / before[0]
        pairs = list(zip(before, left, strict=True))[1:]
        by_size = any(poisson_at_most(int(a / one), 0.5 * kept * b / one) < 0.05 for b, a in pairs)
        return _Collapse(since, before, left, per_pulse, by_size, self._told(before, left, by_size=by_size))

    def _refined(self, collapse: _Collapse, now: float) -> _Collapse | None:
        """The same with the levels of the first five minutes, once. None when these show that large particles were
        kept after all: what two minutes of few pulses could not tell from a stop was the end of some smoke."""
        if now < self._refine_at or len(self._blocks) < self.REFINE:
            return collapse
        self._refine_at = inf
        left = _mean(list(self._blocks)[-self.REFINE :])
        one = collapse.per_pulse / self.REFINE
        pairs = list(zip(collapse.before, left, strict=True))[1:]
        if any(self._has_kept(b / one, a / one) for b, a in pairs):
            return None
        return self._state(collapse.since, collapse.before, left, collapse.per_pulse, self.REFINE)

    def _per_pulse(self, history: Sequence[_Block]) -> float:
        """How much of a two-minute mean one pulse is, from the unit's own scatter before the fall.

        Half the mean square of differences between such means, over their mean, is one pulse plus what the air did. All
        channels count the same pulses, and the air does least to the large, rare ones: so the smallest figure among
        the channels with pulses enough, raised by a third since the smallest of several is biased. The worst that
        firmware does is the limit, and counts like half such a mean while the history is short.
        """
        worst = self._per_pulse_counts if self._has_counts else self._per_pulse_mass
        worst /= self._frames_a_block * self.CHUNK
        columns = list(zip(*[block.levels for block in history], strict=True))
        figures = [_scatter(column, self.CHUNK) for column in (columns if self._has_counts else columns[:1])]
        enough = [f for f, column in zip(figures, columns, strict=False) if 0.0 < f * 20.0 * self.CHUNK <= sum(column)]
        if not enough:
            return worst
        independent = (len(history) - 2.5 * self.CHUNK) / self.CHUNK
        return min((0.5 * worst + independent * 1.33 * min(enough)) / (0.5 + independent), worst)

    @property
    def _has_counts(self) -> bool:
        return self._layout is not None and bool(self._layout.sizes_um)

    @property
    def _resolution(self) -> float:
        return self._layout.mass_resolution if self._layout is not None else 0.0

    def _told(self, before: Levels, left: Levels, *, by_size: bool) -> str:
        layout = self._layout
        assert layout is not None  # noqa: S101 (blocks exist only under a layout)
        names = [f"above {size:g} um" for size in layout.sizes_um] if layout.sizes_um else list(layout.mass)
        unit = "/dL" if layout.sizes_um else "ug/m3"
        pairs = [f"{name} {b:.4g} to {a:.3g}" for name, b, a in zip(names, before, left, strict=True) if b > 0.0]
        order = ", large ones furthest" if by_size else ""
        return f"fell within {self.FALL * self._block_s:.0f} s and stays down{order}: {', '.join(pairs[:4])} {unit}"

    # -- the way back -------------------------------------------------------------------------------------------

    def _is_back(self, collapse: _Collapse) -> bool:
        """Whether air is drawn again. After a restart of sensor or daemon a level well above the drizzle is enough, as
        somebody may have put in a new fan on a cleaner day."""
        before, left = collapse.before, collapse.left
        if len(self._blocks) < self.BACK or len(self._blocks[-1].levels) != len(before):
            return False
        now = _mean(list(self._blocks)[-self.BACK :])
        if now[0] >= 0.5 * before[0]:
            return True
        if self._restarted and now[0] >= max(0.25 * before[0], 5.0 * left[0]):
            return True
        if not collapse.sorted or now[0] < 3.0 * left[0]:
            return False
        per_pulse = collapse.per_pulse / self.BACK
        for i in range(len(now) - 1, 0, -1):
            due = before[i] / before[0] * now[0]
            if due >= self.SORTED_PULSES * per_pulse:
                return now[i] >= 0.4 * due
        return False

    def judge(self, at: Instant) -> Suspicion | None:
        collapse = self._collapse
        if collapse is None:
            return None
        return Suspicion(collapse.since, self._confidence(collapse), collapse.evidence)

    @staticmethod
    def _confidence(collapse: _Collapse) -> float:
        if len(collapse.before) <= 3:  # masses
            return 0.6
        return 0.97 if collapse.sorted else 0.9

    # -- a wake -------------------------------------------------------------------------------------------------

    def wants_wake(self, at: Instant) -> bool:
        """Order or counts were missing: then a wake may tell clean air from a still fan, and may free a stuck one."""
        return self._collapse is not None and self._confidence(self._collapse) < self.SURE

    def wake(self, wake: Wake) -> None:
        """A cell that settles while the sensor sleeps and is flushed when it wakes has a fan that runs; beside one that
        stands still awake as well nothing changes."""
        weight = sum([1.0 / s.variance for s in wake.shortfalls])
        if self._collapse is None or not wake.shortfalls:
            return
        mean = sum([s.share / s.variance for s in wake.shortfalls]) / weight
        if mean >= self.FLUSHED and mean * sqrt(weight) >= self.FLUSHED_SIGMA:
            self._collapse = None
            self._blocks.clear()

    # -- across a restart ---------------------------------------------------------------------------------------

    def memory(self) -> Memory | None:
        collapse = self._collapse
        if collapse is None:
            return None
        return {"before": collapse.before, "left": collapse.left, "sorted": float(collapse.sorted)}

    def recall(self, memory: Memory, at: Instant) -> None:
        before, left, by_size = memory.get("before"), memory.get("left"), memory.get("sorted")
        if not isinstance(before, list) or not isinstance(left, list) or not is_number(by_size):
            return
        if not all(is_number(level) for level in (*before, *left)) or len(before) != len(left):
            return
        if before and before[0] > 0.0:
            evidence = f"stopped before the restart: smallest channel {before[0]:.4g} to {left[0]:.3g}"
            worst = self._per_pulse_counts / self._frames_a_block
            self._collapse = _Collapse(at.boot_s, tuple(before), tuple(left), worst, bool(by_size), evidence)


def _mean(blocks: Sequence[_Block]) -> Levels:
    return tuple([sum(column) / len(blocks) for column in zip(*[b.levels for b in blocks], strict=True)])


def _scatter(levels: Sequence[float], chunk: int) -> float:
    """Half the mean square of differences between means of `chunk` blocks, over the mean of all; 0 when unknown. The
    means are one and a half chunks apart, so that firmware averaging does not hide in the differences."""
    sums = [0.0, *accumulate(levels)]
    means = [(b - a) / chunk for a, b in zip(sums, sums[chunk:], strict=False)]
    squares = [(b - a) ** 2 / 2.0 for a, b in zip(means, means[chunk + chunk // 2 :], strict=False)]
    average = sums[-1] / len(levels)
    return sum(squares) / len(squares) / average if squares and average > 0.0 else 0.0
