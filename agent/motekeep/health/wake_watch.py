"""Looking at wakes: the frames of the first minute and a half after a sensor was woken, and the figures taken of them.

Owns the gathering. Must not know what is usual for a unit, nor any fault.

While a sensor sleeps its fan stands still. The air in its cell stays, and what floats in it settles and is exchanged
by a draught of warmth: after ten minutes a third of the particles of 0.3 to 0.5 um are gone, half of those up to 1 um,
nearly all larger ones. On waking fresh air comes in with the time constant V/(q Q): 5 to 20 cm3 at 0.1 L/min take 3 to
12 s, and longer the smaller the share q of the flow that a worn fan still drives. So the counts are short of their
plateau for some seconds, and by how much, and when, tells the flow.
"""

from collections.abc import Sequence
from itertools import pairwise
from math import exp, log, sqrt

from motekeep.health.check import LineState
from motekeep.health.wake import Shortfall, Wake
from motekeep.instant import Instant
from motekeep.wire.frame import Frame, Layout, Observation

LOOKS_S = 90.0  # after a wake; a sensor with a shorter duty is looked at for as long as it is awake
SHORTEST_S = 55.0  # of a look: half a minute for the plateau
EARLY_S = 15.0  # by then what was in the cell is gone
SETTLED_S = 20.0  # from here on the plateau: 95 % of the air is fresh, in a slow cell 80 %
# Frames count with t exp(-t/7 s), t being their age: the course of what a slower flush takes away, as the derivative of
# exp(-t q/tau) by q is, for the tau of a usual cell. The first seconds, with spin-up, the laser's start and stirred-up
# dust in them, hardly count.
WEIGHT_S = 7.0
FINE_UM = 1.0  # larger particles are few, and a starting fan stirs some up
GUST = 0.03  # relative, of the difference between ten seconds and the minute after them, by the air alone
VIEW = 0.75  # usual share of the flow that the beam looks at
UNSTEADY = 0.25  # relative difference of the plateau's halves, beyond what counting allows: the air changed
LEAST_PULSES = 30.0  # of a channel in its plateau


class WakeWatch:
    """Listens for wakes of one sensor. Both methods give a wake when it has been seen to its end."""

    def __init__(self, flow_l_min: float, period_s: float) -> None:
        self._period = period_s
        # what one pulse is in the number of one frame: /dL, and ug/m3 (two pulses a second per ug/m3, half looked at)
        self._per_pulse = 6.0 / (flow_l_min * period_s * VIEW)
        self._per_pulse_mass = 1.0 / period_s
        self._asleep_at: float | None = None
        self._woken: Instant | None = None
        self._asleep_s = 0.0
        self._ages: list[float] = []  # of the frames since: at most 90 s of them
        self._frames: list[Frame] = []

    @property
    def looking(self) -> bool:
        """Whether frames are wanted."""
        return self._woken is not None

    def line(self, state: LineState, at: Instant) -> Wake | None:
        """The line changed its state."""
        seen = self._finish() if state is LineState.ASLEEP else None
        self._woken = None
        if state is LineState.AWAKE and self._asleep_at is not None:
            self._woken, self._asleep_s = at, at.boot_s - self._asleep_at
            self._ages, self._frames = [], []
        self._asleep_at = at.boot_s if state is LineState.ASLEEP else None
        return seen

    def observe(self, observation: Observation) -> Wake | None:
        """A good frame came, warm-up included."""
        if self._woken is None:
            return None
        age = observation.at.boot_s - self._woken.boot_s
        if self._frames and observation.frame.layout is not self._frames[0].layout:
            self._woken = None
            return None
        if age <= LOOKS_S:
            self._ages.append(age)
            self._frames.append(observation.frame)
            return None
        seen = self._finish()
        self._woken = None
        return seen

    def _finish(self) -> Wake | None:
        if self._woken is None or not self._ages or self._ages[-1] < SHORTEST_S:
            return None
        ages, layout = self._ages, self._frames[0].layout
        rows = [frame.counts or frame.mass for frame in self._frames]
        settled = sum([age <= SETTLED_S for age in ages])
        plateau = rows[settled:]
        seconds = ages[-1] - SETTLED_S
        if len(plateau) < 0.5 * seconds / self._period or len(plateau) < 4 or settled < 2:
            return None  # frames were lost, and nobody knows which
        early = max(sum([age <= EARLY_S for age in ages]), 1)
        levels = tuple([sum(column) / len(plateau) for column in zip(*plateau, strict=True)])
        _, _, smallest = self._channels(layout, rows)[0]
        level = sum(smallest[settled:]) / len(plateau)
        deficit_s = sum([1.0 - value / level for value in smallest[:settled]]) * self._period if level > 0.0 else 0.0
        return Wake(
            at=self._woken,
            asleep_s=self._asleep_s,
            layout=layout,
            levels=levels,
            frames=len(plateau),
            seconds=seconds,
            shortfalls=self._shortfalls(layout, rows, settled),
            deficit_s=deficit_s,
            first=smallest[0] / level if level > 0.0 else 0.0,
            early=sum(smallest[:early]) / early,
            early_frames=early,
        )

    def _shortfalls(self, layout: Layout, rows: list[tuple[float, ...]], settled: int) -> tuple[Shortfall, ...]:
        top = layout.count_top if layout.sizes_um else layout.mass_top
        if top is not None and any(row[0] >= top for row in rows):
            return ()
        weights = [age * exp(-age / WEIGHT_S) for age in self._ages[:settled]]
        total = sum(weights)
        spread = sum([w * w for w in weights]) / (total * total)
        found = []
        for size_um, per_pulse, values in self._channels(layout, rows):
            after = values[settled:]
            plateau = sum(after) / len(after)
            pulses = plateau * len(after) / per_pulse
            if pulses < LEAST_PULSES:
                continue
            if _unsteady(after, pulses):
                return ()
            share = 1.0 - sum([w * v for w, v in zip(weights, values, strict=False)]) / (total * plateau)
            counting = per_pulse / plateau * (spread + 1.0 / len(after))
            found.append(Shortfall(size_um, share, counting + GUST * GUST))
        return tuple(found)

    def _channels(self, layout: Layout, rows: list[tuple[float, ...]]) -> list[tuple[float, float, list[float]]]:
        if not layout.sizes_um:
            return [(0.0, self._per_pulse_mass, [row[0] for row in rows])]
        return [
            (low, self._per_pulse, [row[i] - row[i + 1] for row in rows])
            for i, (low, high) in enumerate(pairwise(layout.sizes_um))
            if high <= FINE_UM
        ]


def _unsteady(plateau: Sequence[float], pulses: float) -> bool:
    """Whether the air changed while the plateau was taken."""
    half = len(plateau) // 2
    a, b = sum(plateau[:half]) / half, sum(plateau[half:]) / (len(plateau) - half)
    if a <= 0.0 or b <= 0.0:
        return True
    return abs(log(b / a)) > UNSTEADY + 4.0 * sqrt(4.0 / pulses)
