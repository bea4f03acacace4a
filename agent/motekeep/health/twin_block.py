"""A block: what a sensor and its twin counted in the same few hours, and how that compares channel by channel.

Owns the gathering of hours into blocks and the counting statistics of a ratio. Must not know what is learnt of a pair,
nor what makes two units differ.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import log

from motekeep.health.hour import Hour
from motekeep.health.memory import is_number

# Longer than the gusts and plumes that reach one inlet before the other, short enough for six in a day: what is left
# between neighbouring blocks is slow change of the aerosol, which the learnt spread covers.
BLOCK_S = 14_400.0
LEAST_S = 3600.0  # of both units together in a block: with less it says nothing
_MOST_CHANNELS = 16  # of what is recalled; no dialect has more


@dataclass(frozen=True, slots=True)
class Comparison:
    """One channel of one block.

    `log_ratio` is ln(own/twin) and `variance` its counting variance. `slope` is -d ln N/d ln d of the cumulative size
    distribution just above the channel's size, as the twin sees it. `expected` is the twin's level in counts per 0.1 L.
    """

    log_ratio: float
    variance: float
    slope: float
    expected: float


@dataclass(frozen=True, slots=True)
class Block:
    """Mean counts per 0.1 L of both over `seconds` of common, sound time that began in the slot at `start_utc`."""

    start_utc: float
    seconds: float
    own: tuple[float, ...]
    twin: tuple[float, ...]

    def compare(self, sizes_um: Sequence[float], flow_l_min: float) -> list[Comparison]:
        """Channel by channel. Half a pulse is added to each level, so that none is zero (Haldane 1956).

        A pulse is worth 6/flow counts per 0.1 L in a second of a counter that sees its whole flow; twice as much for
        one whose beam takes in half of it, the worst that is usual (common practice, no source).
        """
        pulse = 12.0 / (flow_l_min * self.seconds)
        own = [n + pulse / 2.0 for n in self.own]
        twin = [n + pulse / 2.0 for n in self.twin]
        slopes = [
            log(below / above) / log(large / small)
            for (small, large), (below, above) in zip(pairwise(sizes_um), pairwise(twin), strict=True)
        ]
        slopes.append(slopes[-1] if slopes else 0.0)
        return [
            Comparison(log(a / b), pulse / a + pulse / b, slope, b)
            for a, b, slope in zip(own, twin, slopes, strict=True)
        ]


class BlockBuilder:
    """Gathers hours; gives each block when an hour of a later slot comes. Only hours of a trusted clock are taken, as
    blocks outlive a boot, and only pairs that count: masses say too little of sizes."""

    def __init__(self, period_s: float) -> None:
        self._period_s = period_s
        self.sizes_um: tuple[float, ...] = ()
        self.open: Block | None = None

    def add(self, hour: Hour) -> Block | None:
        """One more hour; the block before it, where it is the first of another and the block is long enough."""
        pair = hour.pair
        if pair is None or len(pair.sizes_um) < 2 or not hour.start.trusted:
            return None
        finished = None
        slot = hour.start.utc // BLOCK_S * BLOCK_S
        if self.open is not None and (slot != self.open.start_utc or pair.sizes_um != self.sizes_um):
            finished = self.open if self.open.seconds >= LEAST_S and pair.sizes_um == self.sizes_um else None
            self.open = None
        self.sizes_um = pair.sizes_um
        seconds = min(pair.seconds, self._period_s * min(pair.frames, pair.twin_frames))  # of sleepers, those awake
        if seconds <= 0.0:
            return finished
        fresh = Block(slot, seconds, pair.own, pair.twin)
        self.open = fresh if self.open is None else _joined(self.open, fresh)
        return finished


def _joined(a: Block, b: Block) -> Block:
    share = b.seconds / (a.seconds + b.seconds)
    own, twin = (
        tuple([x + share * (y - x) for x, y in zip(xs, ys, strict=True)])
        for xs, ys in ((a.own, b.own), (a.twin, b.twin))
    )
    return Block(a.start_utc, a.seconds + b.seconds, own, twin)


def to_numbers(blocks: Sequence[Block]) -> list[float]:
    """Blocks as plain numbers, one after the other; five digits are more than counting gives."""
    numbers: list[float] = []
    for block in blocks:
        numbers += [block.start_utc, round(block.seconds, 1)]
        numbers += [float(f"{n:.5g}") for n in (*block.own, *block.twin)]
    return numbers


def from_numbers(numbers: object, channels: int) -> list[Block]:
    """What `to_numbers` gave; nothing where it cannot be that."""
    if not isinstance(numbers, list | tuple) or not 2 <= channels <= _MOST_CHANNELS:
        return []
    size = 2 + 2 * channels
    if len(numbers) % size or not all(is_number(n) and n >= 0.0 for n in numbers):
        return []
    rows = [numbers[i : i + size] for i in range(0, len(numbers), size)]
    return [Block(row[0], row[1], tuple(row[2 : 2 + channels]), tuple(row[2 + channels :])) for row in rows if row[1]]
