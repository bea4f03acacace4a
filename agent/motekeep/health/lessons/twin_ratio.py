"""How a sensor compares with its twin while both are well: learnt in the first days, channel by channel.

Owns what two sound units of one kind may differ by, and the learning of it. Must not know what a fault looks like.

Two units in one air differ by flow, one factor for all channels, and by where their thresholds sit. The second moves
the ratio with the aerosol: N(>d) falls with a power of d, so a threshold that is off by the factor t changes the count
by t^-slope, and the slope is anything from 2 in dust to 8 in smoke. So each channel has two numbers,

    ln(own/twin) = level - shift (slope - usual slope),

the slope being that of the size distribution as the twin sees it in the same hours. `shift` is ln t and small: it is
learnt by ridge regression, with the spread that units have as its prior.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import exp, log, sqrt
from statistics import median
from typing import ClassVar

from motekeep.health.baseline import Lesson, Notes
from motekeep.health.hour import Hour
from motekeep.health.memory import is_number
from motekeep.health.twin_block import Block, BlockBuilder, Comparison, from_numbers, to_numbers
from motekeep.measure.dose import ServiceKind

# ISO 21501-4: flow within 5 % (clause 3.7) and thresholds within 10 % (clause 3.2) of nominal in a good counter, so two
# of them within these factors of each other.
_FLOW = log(1.05 / 0.95)
_SIZE = log(1.1 / 0.9)
# Standard deviation of ln t between two units whose light differs by 10 % and whose thresholds by 4 % (common practice,
# no source): sqrt(0.04^2 + (0.10/2)^2), as size goes with about the square root of light.
_SHIFT_SD = 0.065
# What no three days show of the changes that the weather of other weeks brings to a ratio.
_LEAST_SPREAD = 0.02
_TRIMMED_AT = 2.0  # standard deviations, beyond which a block counts less (Huber 1964)


@dataclass(frozen=True, slots=True)
class ChannelRatio:
    """What is usual in one channel: see the module. `level_sd` and `shift_sd` are how well both are known, `spread` is
    the standard deviation of one block about them beyond counting."""

    level: float
    slope: float
    shift: float
    level_sd: float
    shift_sd: float
    spread: float

    def residual(self, seen: Comparison) -> float:
        """How far ln(own/twin) is from what is usual in such an aerosol."""
        return seen.log_ratio - self.level + self.shift * (seen.slope - self.slope)


@dataclass(frozen=True, slots=True)
class TwinRatio:
    """The part: what is usual of a pair, in the channels of `sizes_um`."""

    sizes_um: tuple[float, ...]
    channels: tuple[ChannelRatio, ...]


class TwinRatioLesson(Lesson):
    """Learns from three days of blocks. What no two sound units can differ by is not learnt: see `impossible`.

    A service record of either unit begins it again; moving both to another place does not change them.
    """

    name: ClassVar[str] = "twin_ratio"
    begun_again_by: ClassVar[frozenset[ServiceKind]] = frozenset(
        {ServiceKind.CLEANED, ServiceKind.FAN_REPLACED, ServiceKind.UNIT_REPLACED}
    )
    begun_again_by_twin: ClassVar[frozenset[ServiceKind]] = begun_again_by

    BLOCKS = 18  # three days of four hours

    def __init__(self, flow_l_min: float, period_s: float) -> None:
        self._flow_l_min = flow_l_min
        self._builder = BlockBuilder(period_s)
        self._blocks: list[Block] = []  # at most BLOCKS
        self._sizes_um: tuple[float, ...] = ()
        self._part: TwinRatio | None = None

    def hour(self, hour: Hour) -> None:
        if self._part is not None or not hour.sound:
            return
        block = self._builder.add(hour)
        if self._builder.sizes_um != self._sizes_um:
            self._sizes_um, self._blocks = self._builder.sizes_um, []
        if block is None:
            return
        self._blocks = [*self._blocks, block][-self.BLOCKS :]
        if len(self._blocks) == self.BLOCKS and impossible(self._sizes_um, self._blocks, self._flow_l_min) is None:
            self._part = learn(self._sizes_um, self._blocks, self._flow_l_min)
            self._blocks = []

    def part(self) -> TwinRatio | None:
        return self._part

    def notes(self) -> Notes:
        if self._part is not None:
            rows = [(c.level, c.slope, c.shift, c.level_sd, c.shift_sd, c.spread) for c in self._part.channels]
            return {"sizes_um": self._part.sizes_um, "ratio": [n for row in rows for n in row]}
        blocks = [*self._blocks, *([self._builder.open] if self._builder.open is not None else [])]
        return {"sizes_um": self._sizes_um, "blocks": to_numbers(blocks)}

    def recall(self, notes: Notes) -> None:
        sizes, ratio = notes.get("sizes_um"), notes.get("ratio")
        if not isinstance(sizes, list | tuple) or not all(is_number(size) and size > 0.0 for size in sizes):
            return
        sizes_um = tuple(sizes)
        if isinstance(ratio, list | tuple):
            if len(ratio) == 6 * len(sizes_um) and all(map(is_number, ratio)) and sizes_um:
                rows = [ratio[i : i + 6] for i in range(0, len(ratio), 6)]
                self._part = TwinRatio(sizes_um, tuple([ChannelRatio(*row) for row in rows]))
            return
        blocks = from_numbers(notes.get("blocks"), len(sizes_um))
        if blocks:
            self._sizes_um = self._builder.sizes_um = sizes_um
            self._blocks, self._builder.open = blocks[:-1][-self.BLOCKS :], blocks[-1]

    def forget(self) -> None:
        self._blocks, self._part, self._builder.open = [], None, None


def learn(sizes_um: tuple[float, ...], blocks: Sequence[Block], flow_l_min: float) -> TwinRatio:
    """What is usual in these blocks."""
    compared = [block.compare(sizes_um, flow_l_min) for block in blocks]
    return TwinRatio(sizes_um, tuple([_channel(column) for column in zip(*compared, strict=True)]))


def _channel(seen: Sequence[Comparison]) -> ChannelRatio:
    """Weighted ridge regression of the ratio on the slope; blocks beyond two standard deviations count less."""
    usual = median([c.slope for c in seen])
    spread, level, shift, level_sd, shift_sd = _LEAST_SPREAD, 0.0, 0.0, 0.0, 0.0
    trims = [1.0] * len(seen)
    for _ in range(4):  # it stands still after three
        a = b = c = p = q = 0.0
        for one, trim in zip(seen, trims, strict=True):
            weight, x = trim / (one.variance + spread**2), one.slope - usual
            a, b, c = a + weight, b - weight * x, c + weight * x * x
            p, q = p + weight * one.log_ratio, q - weight * x * one.log_ratio
        c += _SHIFT_SD**-2
        determinant = a * c - b * b
        level, shift = (c * p - b * q) / determinant, (a * q - b * p) / determinant
        level_sd, shift_sd = sqrt(c / determinant), sqrt(a / determinant)
        residuals = [abs(one.log_ratio - level + shift * (one.slope - usual)) for one in seen]
        between = (1.4826 * median(residuals)) ** 2 - median([one.variance for one in seen])
        spread = sqrt(max(between, _LEAST_SPREAD**2))
        sds = [sqrt(one.variance + spread**2) for one in seen]
        trims = [min(1.0, _TRIMMED_AT * sd / max(r, 1e-9)) for r, sd in zip(residuals, sds, strict=True)]
    return ChannelRatio(level, usual, shift, level_sd, shift_sd, spread)


def impossible(sizes_um: tuple[float, ...], blocks: Sequence[Block], flow_l_min: float) -> str | None:
    """In words, how these blocks differ by more than two sound units of one kind can; None when they do not.

    The flow of both is within 5 % and their thresholds within 10 % (ISO 21501-4), which changes a count by the slope of
    the size distribution: at a slope of 3.5 by a factor of two and a bit.
    """
    worst, told = 1.0, None
    for size, seen in zip(sizes_um, zip(*[b.compare(sizes_um, flow_l_min) for b in blocks], strict=True), strict=True):
        counting = sqrt(median([one.variance for one in seen]) / len(seen))
        ratio = median([one.log_ratio for one in seen])
        most = _FLOW + _SIZE * max(median([one.slope for one in seen]), 1.0) + 3.0 * _LEAST_SPREAD
        beyond = (abs(ratio) - 3.0 * counting) / most
        if beyond > worst:
            worst = beyond
            told = (
                f"{exp(ratio):.2g} of the twin's count above {size:g} um, where two sound units of one kind "
                f"are between {exp(-most):.2g} and {exp(most):.2g} of each other in this air"
            )
    return told
