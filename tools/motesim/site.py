"""A site in emulated time: its air, its sensors, their frames, and the truth behind them.

Owns the march of time for captures and benches, stretch by stretch. Must not know files or ports.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from motekeep.health.check import LineState
from motesim.aerosol import Floats
from motesim.air import Air, AirCourse
from motesim.emulator import Emulator, Printed, State
from motesim.faults import FaultSet
from motesim.line import Line, Spoken
from motesim.plan import SensorPlan, SitePlan
from motesim.relaxation import generators

# A turn falls between two frames; so long after the earlier one that its jitter cannot bring it behind the turn.
_BEHIND_FRAME_S = 0.02


@dataclass(frozen=True, slots=True)
class Truth:
    """What was really so in one interval at one sensor: means over it.

    Masses are PM1, PM2.5, PM10 in ug/m3 with aerodynamic cuts, `dry` without and `wet` with the particles' water. `rh`
    and `temperature` are those of the air, `cell_*` those of the sensing cell; `flow` and `gain` are over nominal,
    `floor` is false counts per 0.1 L in the smallest channel; `awake` is a share.
    """

    sensor: str
    start: float
    seconds: float
    dry: tuple[float, float, float]
    wet: tuple[float, float, float]
    rh: float
    temperature: float
    cell_rh: float
    cell_temperature: float
    flow: float
    gain: float
    floor: float
    awake: float
    faults: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Block:
    """One stretch of one sensor. `awake` is so at each time of `state`, `stays` whether it is a period later."""

    sensor: str
    air: Air
    printed: Printed
    state: State
    awake: NDArray[np.bool_]
    stays: bool = True


class SensorCourse:
    """One sensor of a site through time; used once, from the start to the end."""

    def __init__(self, plan: SensorPlan, start: float, end: float) -> None:
        self.plan = plan
        self.faults = FaultSet(plan.faults)
        self.line = Line(plan, self.faults)
        self.emulator = Emulator(
            self.line.face, plan.seed, plan.period_s, faults=self.faults, overrides=plan.unit, cold=plan.cold
        )
        self._start = start
        self._end = end
        self._phase = plan.period_s * float(generators(plan.seed, ["phase"])["phase"].random())
        self._true_period = plan.period_s * (1.0 + 1e-6 * self.emulator.unit.clock_ppm)
        self._done = 0

    def block(self, air: Air) -> Block | None:
        """The frames that fall into `air`, None when there are none."""
        end = min(float(air.times[-1]), self._end)
        last = int(np.ceil((end - self._start - self._phase) / self._true_period))
        if last <= self._done:
            return None
        times = self._start + self._phase + self._true_period * np.arange(self._done, last, dtype=np.float64)
        self._done = last
        awake = self._awake(np.append(times, times[-1] + self._true_period))
        printed, state = self.emulator.advance(air, times, awake[:-1])
        return Block(self.plan.name, air, printed, state, awake[:-1], bool(awake[-1]))

    def _awake(self, times: Floats) -> NDArray[np.bool_]:
        duty = self.plan.duty
        if duty is None:
            return np.ones(len(times), dtype=np.bool_)
        return np.asarray((times - self._start) % duty.every_s < duty.awake_s)


class Site:
    """One site of a scenario. Every iterator starts afresh at the scenario's start and yields the same again."""

    def __init__(self, plan: SitePlan) -> None:
        self.plan = plan

    @property
    def end(self) -> float:
        return self.plan.start + self.plan.seconds

    def air(self) -> Iterator[Air]:
        """Stretches of air that cover the scenario; neighbours share a sample."""
        course = AirCourse(self.plan.air, self.plan.events, self.plan.seed, self.plan.start)
        for air in course.stretches():
            yield air
            if air.times[-1] >= self.end:
                return

    def courses(self, *names: str) -> list[SensorCourse]:
        """Fresh courses of these sensors, or of all."""
        chosen = [self.plan.sensor(name) for name in names] if names else list(self.plan.sensors)
        return [SensorCourse(plan, self.plan.start, self.end) for plan in chosen]

    def observed(self, sensor: str) -> Iterator[Block]:
        """The numbers of one sensor without making bytes of them: for benches that need speed."""
        (course,) = self.courses(sensor)
        for air in self.air():
            block = course.block(air)
            if block is not None:
                yield block

    def frames(self, sensor: str) -> Iterator[Spoken]:
        """What comes out of one sensor's port: lists of (Unix seconds, bytes), some hours each."""
        (course,) = self.courses(sensor)
        for air in self.air():
            block = course.block(air)
            if block is not None:
                yield course.line.speak(block.printed)

    def truth(self, sensor: str, seconds: float = 60.0) -> Iterator[Truth]:
        """The truth of one sensor, interval by interval."""
        faults = FaultSet(self.plan.sensor(sensor).faults)
        for block in self.observed(sensor):
            yield from truths(block, faults, seconds)


def truths(block: Block, faults: FaultSet, seconds: float = 60.0) -> list[Truth]:
    """Truth of a block in wall-aligned intervals of `seconds`, which must be a multiple of ten seconds."""
    air, state = block.air, block.state
    end = float(state.times[-1])
    inside = air.times[:-1] <= end
    air_at, air_starts = _groups(air.times[:-1][inside], seconds)
    masses = np.concatenate([air.dry_masses(), air.wet_masses()])[:, :-1][:, inside]
    masses = _means(masses, air_at)
    climate = _means(np.stack([air.rh, air.temperature])[:, :-1][:, inside], air_at)
    at, starts = _groups(state.times, seconds)
    inner = _means(
        np.stack([state.rh, state.temperature, state.flow, state.gain, state.floor, block.awake.astype(float)]), at
    )
    row_of = {start: row for row, start in enumerate(air_starts.tolist())}
    out = []
    for column, start in enumerate(starts.tolist()):
        row = row_of.get(start)
        if row is None:
            continue
        pm = masses[:, row].tolist()
        cell_rh, cell_temperature, flow, gain, floor, awake = inner[:, column].tolist()
        out.append(
            Truth(
                sensor=block.sensor,
                start=start,
                seconds=seconds,
                dry=(pm[0], pm[1], pm[2]),
                wet=(pm[3], pm[4], pm[5]),
                rh=float(climate[0, row]),
                temperature=float(climate[1, row]),
                cell_rh=cell_rh,
                cell_temperature=cell_temperature,
                flow=flow,
                gain=gain,
                floor=floor,
                awake=awake,
                faults=tuple(faults.names(start, start + seconds)),
            )
        )
    return out


def turns(block: Block) -> list[tuple[float, LineState]]:
    """When the sensor was put to sleep and woken in this block, in order of time: what a host would tell its pipeline.

    A sensor sleeps from its last frame on, and its first frame comes a period after the wake. The last turn may lie a
    moment behind the block's last frame.
    """
    changed = np.flatnonzero(np.diff(block.awake, append=block.stays))
    return [
        (float(block.state.times[i]) + _BEHIND_FRAME_S, LineState.ASLEEP if block.awake[i] else LineState.AWAKE)
        for i in changed.tolist()
    ]


def _groups(times: Floats, seconds: float) -> tuple[NDArray[np.int64], Floats]:
    """Where each interval begins in `times`, and its wall-aligned start."""
    slots = np.floor(times / seconds)
    begins = np.flatnonzero(np.concatenate([[True], np.diff(slots) > 0]))
    return begins, slots[begins] * seconds


def _means(values: Floats, begins: NDArray[np.int64]) -> Floats:
    lengths = np.diff(np.concatenate([begins, [values.shape[1]]]))
    return np.asarray(np.add.reduceat(values, begins, axis=1) / lengths)
