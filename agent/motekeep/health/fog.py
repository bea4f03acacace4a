"""humidity-high: fog, or air so moist that no correction for humidity holds.

Owns the signature of droplets. Must not know corrections; RH is taken as the climate source gives it.
"""

from collections import deque
from dataclasses import dataclass
from statistics import median
from typing import ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.memory import Memory, is_number
from motekeep.instant import Instant
from motekeep.measure.climate import FIXED
from motekeep.measure.interval import Interval

MINUTE_S = 60.0


@dataclass(frozen=True, slots=True)
class _Piece:
    """At least a minute of one sensor: when it ended (boot seconds), how long it was, counts per 0.1 L above the
    smallest size and above 1 um (None where it has none), RH as measured and as it is outside."""

    end_s: float
    seconds: float
    small: float | None
    large: float | None
    rh: float
    outside: float


class HumidityHigh(Check):
    """humidity-high: RH of 95 % or more as measured; or droplets: particles above 1 um jump against the small ones in
    air that is close to saturation.

    Above some 90 to 95 % the growth of particles has no bound and droplets pass 2.5 um (Petters and Kreidenweis 2007,
    doi 10.5194/acp-7-1961-2007; in fog counts above 2.5 um rose by half and more, Jayaratne et al. 2018, doi
    10.5194/amt-11-4883-2018). But a probe at the sensor sits in the warmth of its cell, where saturated air reads 77 to
    90 %, always the same for one unit, as its warmth is its own. So the highest ten minutes that it has ever read stand
    for saturation (never less than 80 %, and forgotten by 0.1 % a day, so that one odd reading is not for ever), and
    RH outside is what it reads over that.

    Droplets: the ratio of counts above 1 um to those in the smallest channel, medians of the last seven minutes, is 1.6
    times its median of the last day (times of fog left out); counts above 1 um are themselves 1.4 times those of the
    last three hours, since air that merely loses its haze shows the same ratio; their excess is 0.4 per cm3 at least;
    RH outside is 88 % at least, and 96 % or on the rise in these twenty minutes, in any case not falling. Twice in a
    row. A minute of plume moves no such median; dust and sea salt have the ratio, but seldom that air. It closes after
    twenty minutes without. Three hours of record are needed first. A fixed RH says nothing, and a sensor without counts
    is judged by RH alone.
    """

    code: ClassVar[str] = "humidity-high"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = 7500.0  # an interval may last an hour

    WINDOW_S = 420.0
    BLOCK_S = 600.0
    BLOCKS, LEAST_BLOCKS = 144, 18  # a day, and three hours, of ten minutes
    RISE_WINDOW_S = 1200.0
    HOLD_S = 1200.0

    RH, RH_BACK = 95.0, 93.0
    SATURATED_LEAST, FORGOTTEN_A_DAY = 80.0, 0.1
    NEAR, NEAR_BACK = 88.0, 84.0
    HIGH, RISE, FALLS = 96.0, 0.8, 0.3
    JUMP, JUMP_BACK, UP = 1.6, 1.3, 1.4
    EXCESS = 40.0  # per 0.1 L

    def __init__(self) -> None:
        self._gathered: list[Interval] = []  # up to a minute of shorter intervals
        self._pieces: deque[_Piece] = deque(maxlen=32)  # of the last twenty minutes
        self._block: list[_Piece] = []
        self._ratios: deque[float] = deque(maxlen=self.BLOCKS)
        self._larges: deque[float] = deque(maxlen=self.LEAST_BLOCKS)
        self._base: float | None = None  # median of the ratios
        self._top = self.SATURATED_LEAST
        self._in_a_row = 0
        self._began = 0.0
        self._since: float | None = None
        self._last = float("-inf")  # end of the last piece that showed it
        self._evidence = ""
        self._confidence = 0.0

    def interval(self, interval: Interval) -> None:
        if interval.climate is None or interval.climate.source == FIXED or interval.layout is None:
            self._gathered = []
            return
        self._gathered.append(interval)
        if sum([i.seconds for i in self._gathered]) >= MINUTE_S - 1.0:  # the first one is cut short by the wall clock
            piece = self._piece(self._gathered)
            self._gathered = []
            self._take(piece)

    def _piece(self, intervals: list[Interval]) -> _Piece:
        last = intervals[-1]
        rh = sum([i.climate.rh_pct for i in intervals if i.climate]) / len(intervals)
        small, large = _counts(intervals)
        end_s = last.start.boot_s + last.seconds
        seconds = sum([i.seconds for i in intervals])
        return _Piece(end_s, seconds, small, large, rh, 100.0 * rh / self._top)

    def _take(self, piece: _Piece) -> None:
        while self._pieces and self._pieces[0].end_s < piece.end_s - self.RISE_WINDOW_S:
            self._pieces.popleft()
        self._pieces.append(piece)
        self._learn_top(piece)
        shown = self._shown(piece)
        if shown:
            self._last = piece.end_s
            if not self._in_a_row:
                self._began = min([p.end_s - p.seconds for p in self._window(piece)])
            self._in_a_row += 2 if piece.seconds >= self.WINDOW_S else 1
            if self._in_a_row >= 2 and self._since is None:
                self._since = self._began
        else:
            self._in_a_row = 0
            if self._since is not None and piece.end_s - self._last >= self.HOLD_S:
                self._since = None
            if self._since is None:
                self._learn(piece)

    def _window(self, piece: _Piece) -> list[_Piece]:
        return [p for p in self._pieces if p.end_s > piece.end_s - self.WINDOW_S or p is piece]

    def _shown(self, piece: _Piece) -> bool:
        """Whether the air is, by this piece, too moist; what says so is kept as evidence."""
        holds = self._since is not None
        if piece.rh >= (self.RH_BACK if holds else self.RH):
            self._confidence = 0.95
            self._evidence = f"RH {piece.rh:.0f} %; no correction for humidity holds from {self.RH:.0f} % on"
            return True
        window = [p for p in self._window(piece) if p.small is not None and p.large is not None]
        if self._base is None or not window or piece.outside < (self.NEAR_BACK if holds else self.NEAR):
            return False
        small, large = median([p.small or 0.0 for p in window]), median([p.large or 0.0 for p in window])
        jump = median([(p.large or 0.0) / max(p.small or 0.0, 1.0) for p in window]) / self._base
        shown = jump >= self.JUMP_BACK if holds else jump >= self.JUMP and self._grew(piece, small, large)
        if shown:
            self._confidence = 0.7  # of such findings on emulated sites with 12 fogs a month, 7 in ten were fog
            self._evidence = (
                f"{large:.0f} /dL above 1 um to {small:.0f} in all, {jump:.1f} times the share of the last day, at RH"
                f" {piece.rh:.0f} % where saturated air reads {self._top:.0f} %"
            )
        return shown

    def _grew(self, piece: _Piece, small: float, large: float) -> bool:
        recent = [p.rh for p in self._pieces]
        if piece.rh < max(recent) - self.FALLS:
            return False
        moist = piece.outside >= self.HIGH or piece.rh - min(recent) >= self.RISE
        excess = large - (self._base or 0.0) * small
        return moist and excess >= self.EXCESS and large >= self.UP * median(self._larges)

    def _learn_top(self, piece: _Piece) -> None:
        """The highest RH of ten minutes stands for saturation."""
        recent = [p for p in self._pieces if p.end_s > piece.end_s - self.BLOCK_S or p is piece]
        forgotten = self._top - self.FORGOTTEN_A_DAY * piece.seconds / 86400.0
        self._top = max(forgotten, self.SATURATED_LEAST)
        if sum([p.seconds for p in recent]) >= self.BLOCK_S - MINUTE_S:
            self._top = max(self._top, min(sum([p.rh for p in recent]) / len(recent), 100.0))

    def _learn(self, piece: _Piece) -> None:
        if piece.small is None or piece.large is None:
            return
        self._block.append(piece)
        if sum([p.seconds for p in self._block]) < self.BLOCK_S - MINUTE_S:
            return
        small, large = sum([p.small or 0.0 for p in self._block]), sum([p.large or 0.0 for p in self._block])
        self._ratios.append(large / max(small, 1.0))
        self._larges.append(large / len(self._block))
        self._block = []
        if len(self._ratios) >= self.LEAST_BLOCKS:
            self._base = max(median(self._ratios), 1e-6)

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        return Suspicion(self._since, self._confidence, self._evidence, until=max(self._last, self._since))

    def memory(self) -> Memory | None:
        """The medians stand for the day that they are of: 1.5 kB less to write than all of it."""
        kept = {"top": round(self._top, 2), "holds": float(self._since is not None)}
        if self._base is not None and self._larges:
            kept |= {"share": self._base, "level": median(self._larges)}
        return kept

    def recall(self, memory: Memory, at: Instant) -> None:
        top, share, level = memory.get("top"), memory.get("share"), memory.get("level")
        if is_number(top):
            self._top = min(max(top, self.SATURATED_LEAST), 100.0)
        if is_number(share) and is_number(level) and share > 0.0 and level >= 0.0:
            self._base = share
            self._ratios.extend([share] * self.LEAST_BLOCKS)
            self._larges.extend([level] * self.LEAST_BLOCKS)
        if memory.get("holds") == 1.0:
            self._since = self._last = at.boot_s
            self._confidence, self._evidence = 0.7, "as before the restart"


def _counts(intervals: list[Interval]) -> tuple[float | None, float | None]:
    """Mean counts above the smallest size, and above the first one of 1 um or more; None where there are none."""
    pairs: list[tuple[float, float]] = []
    for interval in intervals:
        layout = interval.layout
        index = next((i for i, size in enumerate(layout.sizes_um) if size >= 1.0), None) if layout else None
        if not index or not interval.counts:
            return None, None
        small, large = interval.counts[0], interval.counts[index]
        if not small.n or not large.n or small.censored or large.censored:
            return None, None
        pairs.append((small.mean, large.mean))
    return sum([s for s, _ in pairs]) / len(pairs), sum([x for _, x in pairs]) / len(pairs)
