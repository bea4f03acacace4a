"""The one thing that is wrong with a sensor beside its twin: decided block by block, held until it is over.

Owns the windows, the limits and the hysteresis of what a pair tells, and what of it is kept. Must not know the shapes
of the explanations (`twin_comparison`, `twin_floor`), nor Check: the checks read what is decided here.

Rule, at each finished block, with limits for opening and looser ones for what is held already:
  nothing held    -- an explanation fits, leads, and is beyond its limit --> that code is held
  held            -- the same, at the looser limits ----------------------> held on, its evidence renewed
  held            -- another explanation leads clearly -------------------> the other code is held
  held            -- neither ---------------------------------------------> nothing held
A gain in every channel is the twin's loss, and is found by the twin's own comparison.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from math import exp, log, sqrt

from motekeep.health.finding import Suspicion
from motekeep.health.hour import Hour
from motekeep.health.lessons.twin_ratio import TwinRatio, impossible
from motekeep.health.memory import Memory, is_number
from motekeep.health.twin_block import BLOCK_S, Block, BlockBuilder, Comparison, from_numbers, to_numbers
from motekeep.health.twin_comparison import Account, Explanation, account, departures_of
from motekeep.health.twin_floor import Excess, excess_of, false_counts
from motekeep.instant import Instant

FAN, OPTICS, FLOOR, LEAK, DISAGREES = CODES = (
    "fan-weak",
    "optics-fouled",
    "floor-raised",
    "light-leak",
    "twin-disagrees",
)

# Windows in blocks of four hours. A weak fan shows in half a day; dirt takes weeks, so days may be averaged; a daylight
# leak wants several days, as clouds change it.
_FAST, _SLOW, _FLOOR_SHORT, _FLOOR_LONG, _LEAK_LONG = 3, 12, 12, 24, 42
KEPT = 48  # blocks, eight days: the longest window, and how far back a beginning is looked for
_FIRST = 3  # blocks after which an impossible pair is told

# Limits in ln. Opening at 15 % of the flow or 14 % of the light, four standard deviations from nothing; a finding is
# held while half of that is left.
_LEAST_FLOW, _LEAST_LIGHT = -log(0.85), -log(0.86)
_LEAST_FAST = -log(0.82)  # in half a day, in which fouled optics and a passing aerosol can look like flow
_SURE = 4.0
_LEAD = 3.0  # -2 ln likelihood before the next explanation: e^1.5, before what is known of how often each happens
_LEAD_FAST = 4.0
_CLEAR_LEAD = 10.0  # to put another explanation in the place of the one held
_GOOD = 3.0  # chi2 per channel that an explanation may leave, as no shape is exact
_LEAST_FALSE = 200.0  # false counts per 0.1 L worth a visit, a fifth of clean air above 0.3 um
_DAYLIGHT_GAIN = 30.0  # -2 ln likelihood against the same number all day
_NIGHT_SHARE = 0.4  # of the daily part, which a leak may leave at night
_NIGHT_LACK = 0.5  # of it, which a leak may lack: a twin's own leak makes it all of it
_DISAGREEMENT = log(1.3)
_MOST_LOST = -log(0.25)  # of flow or light: with less left a unit is as good as stopped, and shapes are no guide
_RIVAL = 3.0  # -2 ln likelihood by which another explanation may lead before false counts are not believed


@dataclass(frozen=True, slots=True)
class Held:
    """A code that holds: since when (Unix seconds), how sure, on what evidence."""

    code: str
    since_utc: float
    confidence: float
    evidence: str


class TwinVerdict:
    """What a sensor's twin tells of it. `learnt` must have given the ratio before anything but `twin-disagrees` of an
    impossible pair is decided."""

    def __init__(self, flow_l_min: float, period_s: float) -> None:
        self._flow_l_min = flow_l_min
        self._builder = BlockBuilder(period_s)
        self._ratio: TwinRatio | None = None
        self._blocks: list[Block] = []  # at most KEPT
        self._compared: dict[Block, list[Comparison]] = {}  # of those blocks, as each stands in several windows
        self._sizes_um: tuple[float, ...] = ()
        self.held: Held | None = None

    def learnt(self, ratio: TwinRatio | None) -> None:
        """The ratio of the pair, or that it is to be learnt anew: then all that was seen before is of another pair."""
        if ratio == self._ratio:
            return
        if ratio is None or self._ratio is not None:
            self._blocks, self.held, self._builder.open = [], None, None
        self._ratio = ratio

    def hour(self, hour: Hour) -> None:
        """One more hour."""
        block = self._builder.add(hour)
        if self._builder.sizes_um != self._sizes_um:
            self._sizes_um, self._blocks = self._builder.sizes_um, []
        if block is not None:
            self._blocks = [*self._blocks, block][-KEPT:]
            self.held = self._decide()

    def _decide(self) -> Held | None:
        ratio = self._ratio
        if ratio is None:
            return self._impossible()
        if ratio.sizes_um != self._sizes_um:
            return None
        self._compared = {
            block: self._compared.get(block) or block.compare(self._sizes_um, self._flow_l_min)
            for block in self._blocks
        }
        found = [*self._losses(ratio), *self._false_counts(ratio)]
        held = next((one for one in found if self.held is not None and one.code == self.held.code), None)
        chosen = max(found, key=lambda one: one.confidence, default=None)
        if chosen is None:
            return None
        if held is not None and chosen.confidence < held.confidence + 0.05:
            chosen = held
        if self.held is not None and chosen.code == self.held.code:
            chosen = replace(chosen, since_utc=self.held.since_utc)
        return chosen

    def _impossible(self) -> Held | None:
        if len(self._blocks) < _FIRST:
            return None
        told = impossible(self._sizes_um, self._blocks, self._flow_l_min)
        if told is None:
            return None
        return Held(DISAGREES, self._blocks[0].start_utc, 0.9, f"{told}; the pair is not learnt while this is so")

    # -- losses ---------------------------------------------------------------------------------------------------

    def _account(self, ratio: TwinRatio, blocks: Sequence[Block]) -> Account:
        return account(ratio, [self._compared[block] for block in blocks])

    def _losses(self, ratio: TwinRatio) -> list[Held]:
        found: list[Held | None] = []
        for window in (_FAST, _SLOW):
            blocks = self._blocks[-window:]
            if len(blocks) < window:
                continue
            whole = self._account(ratio, blocks)
            if max(abs(d.value) for d in whole.departures) < _LEAST_FLOW / 2.0:
                continue
            found.append(self._loss(FAN, Explanation.FLOW, whole, window, ratio))
            if window == _SLOW:
                found += [
                    self._loss(OPTICS, Explanation.OPTICS, whole, window, ratio),
                    self._disagreement(whole, ratio),
                ]
        return [one for one in found if one is not None]

    def _loss(self, code: str, name: Explanation, whole: Account, window: int, ratio: TwinRatio) -> Held | None:
        fit = whole.fits[name]
        held = self.held is not None and self.held.code == code
        least, clear = (_LEAST_FLOW, _LEAD) if name is Explanation.FLOW else (_LEAST_LIGHT, _LEAD)
        if window == _FAST:
            least, clear = _LEAST_FAST, _LEAD_FAST
        limit = least / 2.0 if held else least
        sure = _SURE / 2.0 if held else _SURE
        lost = -_MOST_LOST <= fit.number <= -max(limit, sure * fit.sd) and whole.gain > 0.0
        good = fit.chi2 <= _GOOD * len(whole.departures)
        lead = whole.lead(name)
        if not (lost and good and (lead >= (-_CLEAR_LEAD if held else clear))):
            return None
        # few blocks: every one of them must say so; of many, two thirds, so that no single event of a day passes for it
        each = sorted([self._account(ratio, [block]).fits[name].number for block in self._blocks[-window:]])
        if each[-1 if window == _FAST else 2 * window // 3 - 1] > -limit / 2.0:
            return None
        what = "of its flow" if name is Explanation.FLOW else "of its light"
        channels = ", ".join([f"{exp(d.value):.2f} above {d.size_um:g}" for d in whole.departures])
        evidence = (
            f"{exp(fit.number):.2f} {what} is left (standard deviation {fit.sd:.2f}): beside the twin it sees, as "
            f"parts of what is usual, {channels} um"
        )
        confidence = 0.9 + 0.08 * min(max(lead, 0.0) / 20.0, 1.0)
        since = self._began(ratio, name, fit.number) if not held else 0.0
        return Held(code, since, round(confidence, 3), evidence)

    def _began(self, ratio: TwinRatio, name: Explanation, number: float) -> float:
        """When it began, from the blocks one by one."""
        lost = [-self._account(ratio, [block]).fits[name].number for block in self._blocks]
        return self._blocks[_last_zero(lost, -number / 2.0)].start_utc

    def _disagreement(self, whole: Account, ratio: TwinRatio) -> Held | None:
        """Less than both can differ by in some channel, for two days, and like nothing that is known."""
        held = self.held is not None and self.held.code == DISAGREES
        best = whole.fits[whole.best]
        far = [d for d in whole.departures if -d.value >= max(_DISAGREEMENT, 1.5 * _SURE * sqrt(d.variance))]
        odd = best.chi2 > (1.0 if held else 2.0) * _GOOD * len(whole.departures) or (
            whole.best is not Explanation.FLOOR and best.number < -_MOST_LOST
        )
        if not far or not odd:
            return None
        i = whole.departures.index(min(far, key=lambda d: d.value))
        worst = whole.departures[i]
        lost = [-ratio.channels[i].residual(self._compared[block][i]) for block in self._blocks]
        if sorted(lost[-_SLOW:])[_SLOW // 3] < _DISAGREEMENT / 2.0:  # two thirds of the blocks must say so
            return None
        evidence = (
            f"{exp(worst.value):.2f} of what is usual beside the twin above {worst.size_um:g} um over "
            f"{_SLOW * BLOCK_S / 86_400.0:.0f} days, which neither flow nor optics nor false counts explain"
        )
        return Held(DISAGREES, self._blocks[_last_zero(lost, -worst.value / 2.0)].start_utc, 0.8, evidence)

    # -- false counts ---------------------------------------------------------------------------------------------

    def _false_counts(self, ratio: TwinRatio) -> list[Held]:
        seen = [false_counts(ratio, block.start_utc, self._compared[block]) for block in self._blocks]
        found: list[Held] = []
        for window in (_FLOOR_SHORT, _FLOOR_LONG, _LEAK_LONG):
            if len(seen) < window:
                continue
            above = departures_of(ratio, [self._compared[block] for block in self._blocks[-window:]])[1]
            if abs(above.value) > _LEAST_FLOW:
                continue  # the channel above is off too: this is no floor
            excess = excess_of(seen[-window:])
            one = self._floor(excess) or self._leak(excess, window)
            if one is not None and self._account(ratio, self._blocks[-window:]).lead(Explanation.FLOOR) > -_RIVAL:
                # began: as in `_began`; a night between two days of a leak is no end of it
                began = _last_zero([each.excess for each in seen], max(excess.night, excess.day / 4.0) / 2.0)
                fresh = len(seen) - began < _FLOOR_SHORT and (self.held is None or self.held.code != LEAK)
                if one.code == LEAK and (fresh or found):
                    continue  # a floor that has just begun has no night yet, and one that is there now is no leak
                found.append(replace(one, since_utc=self._blocks[began].start_utc))
        return found

    def _floor(self, excess: Excess) -> Held | None:
        held = self.held is not None and self.held.code == FLOOR
        least, sure = (_LEAST_FALSE / 2.0, _SURE / 2.0) if held else (_LEAST_FALSE, _SURE)
        if excess.night < max(least, sure * excess.night_sd) or excess.day > excess.night:
            return None
        evidence = (
            f"{excess.night:.0f} false counts per 0.1 L in the smallest channel, day and night (standard deviation "
            f"{excess.night_sd:.0f}), which the twin does not see, while larger channels agree"
        )
        return Held(FLOOR, 0.0, 0.92, evidence)

    def _leak(self, excess: Excess, window: int) -> Held | None:
        held = self.held is not None and self.held.code == LEAK
        share = 0.4 if held else 1.0
        least = share * max(_LEAST_FALSE, _SURE * excess.day_sd)
        if window == _FLOOR_SHORT or excess.day < least or excess.gain < share * _DAYLIGHT_GAIN:
            return None
        # far below nothing at night is the twin's own leak, seen upside down
        if not -_NIGHT_LACK * excess.day <= excess.night <= _NIGHT_SHARE / share * excess.day:
            return None
        evidence = (
            f"false counts in the smallest channel follow daylight: {excess.day:.0f} per 0.1 L about "
            f"{excess.noon_utc_h:.0f} h UTC (standard deviation {excess.day_sd:.0f}), {max(excess.night, 0.0):.0f} at "
            f"night, and none at the twin"
        )
        return Held(LEAK, 0.0, 0.95, evidence)

    # -- what the checks ask -----------------------------------------------------------------------------------------

    def suspicion(self, code: str, at: Instant) -> Suspicion | None:
        """What holds of this code."""
        held = self.held
        if held is None or held.code != code:
            return None
        return Suspicion(held.since_utc - at.offset, held.confidence, held.evidence)

    def memory(self) -> Memory:
        """All that a restart must not lose: eight days of blocks, and since when what is held has been held."""
        blocks = [*self._blocks, *([self._builder.open] if self._builder.open is not None else [])]
        kept: dict[str, float | Sequence[float]] = {"sizes_um": self._sizes_um, "blocks": to_numbers(blocks)}
        if self.held is not None:
            kept |= {"held": CODES.index(self.held.code), "since_utc": self.held.since_utc}
        return kept

    def recall(self, memory: Mapping[str, object]) -> None:
        """Take up what `memory` gave, after `learnt`."""
        sizes = memory.get("sizes_um")
        if not isinstance(sizes, list | tuple) or not all(is_number(size) and size > 0.0 for size in sizes):
            return
        blocks = from_numbers(memory.get("blocks"), len(sizes))
        if not blocks:
            return
        self._sizes_um = self._builder.sizes_um = tuple(sizes)
        self._blocks, self._builder.open = blocks[:-1][-KEPT:], blocks[-1]
        held, since = memory.get("held"), memory.get("since_utc")
        if is_number(held) and 0 <= held < len(CODES) and is_number(since) and self._blocks:
            self.held = Held(CODES[int(held)], since, 0.9, "held before the daemon restarted")
            self.held = self._decide()


def _last_zero(values: Sequence[float], half: float) -> int:
    """Where a rise to twice `half` began: the value after the last zero of the one-sided cumulated sum of what exceeds
    `half` (Page 1954, Biometrika 41:100)."""
    total, began = 0.0, len(values) - 1
    for i, value in enumerate(values):
        if total <= 0.0:
            began = i
        total = max(total + value - half, 0.0)
    return began
