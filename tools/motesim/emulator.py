"""One emulated sensor: the air goes in, printed numbers come out, frame after frame.

Owns the order of the physics: optics, cell, coincidence, false counts, counting, firmware. Must not know bytes.
The same object makes a capture in blocks of hours and a live stream frame by frame.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from motesim.aerosol import Floats
from motesim.air import Air
from motesim.faults import FaultSet
from motesim.firmware import Columns, Firmware
from motesim.flow import NOMINAL_CM3_S, Cell, Fan
from motesim.humidity import warmed
from motesim.optics import coincident, shifted_thresholds_um, visible
from motesim.relaxation import Course, generators
from motesim.unit import Unit, draw, drawn_with
from motesim.weather import STEP_S

STANDARD_EDGES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)
RUNNING = 1_000_000  # frames since the wake of a sensor that has been running for long
_SURGE_S = 4.0  # a dry bearing catches and lets go over seconds; ours
_BURST_S = 2.0
_DRAUGHT_S = 120.0
_DRAUGHT_SPREAD = 0.4
_COARSE_CHANNEL_UM = 1.0
_STOPPED_SHARE, _OFF_SPEED_SHARE = 0.9, 0.2  # of the flow lost, from where a sensor that watches its fan complains


@dataclass(frozen=True, slots=True)
class Face:
    """What a sensor shows of itself: the thresholds it counts at, and the shape of its printed numbers.

    `fan_bits` are the error bits for a stopped fan and for one off its speed, 0 where the sensor does not watch it.
    """

    edges_um: tuple[float, ...]
    printed: int
    masses: tuple[str, ...]
    mass_resolution: float
    mass_top: float
    count_top: float | None
    floats: bool = False
    fan_bits: tuple[int, int] = (0, 0)


@dataclass(frozen=True, slots=True)
class Printed:
    """Frames of one block, in order of time; `repeats` marks those that a frozen output repeats."""

    times: Floats
    columns: Columns
    rh: Floats
    temperature: Floats
    error: NDArray[np.int64]
    revision: NDArray[np.int64]
    repeats: NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class State:
    """What really went on in the sensor in one block, at every step, asleep or not."""

    times: Floats
    flow: Floats
    gain: Floats
    floor: Floats
    rh: Floats
    temperature: Floats


class Emulator:
    """One sensor from power-on (or long running) on. `advance` must be called with times that only rise."""

    def __init__(
        self,
        face: Face,
        seed: int,
        period_s: float,
        *,
        faults: FaultSet | None = None,
        overrides: dict[str, float] | None = None,
        cold: bool = False,
    ) -> None:
        self.face = face
        self.period_s = period_s
        self.faults = faults if faults is not None else FaultSet()
        self._seed = seed
        self._overrides = overrides or {}
        self._swapped_at = -np.inf
        self._age = 0 if cold else RUNNING
        streams = generators(seed, ["pulses", "surge", "draught"])
        self._pulses = streams["pulses"]
        self._surge = Course(streams["surge"], _SURGE_S, period_s)
        self._draught = Course(streams["draught"], _DRAUGHT_S, period_s)
        self._frozen: list[Floats] | None = None
        self._fit(drawn_with(seed, self._overrides), running=not cold)

    def _fit(self, unit: Unit, *, running: bool) -> None:
        """Put this unit in place."""
        face = self.face
        self.unit = unit
        self.firmware = Firmware(unit, self.period_s, face.edges_um, face.masses, face.count_top)
        self._fan = Fan(unit.flow if running else 0.0, unit.fan_up, unit.fan_down)
        self._cell = Cell(face.edges_um, unit.cell_volume)
        spread = unit.edge_spread + (1.0,) * max(len(face.edges_um) - len(unit.edge_spread), 0)
        self._edges = tuple(sorted(edge * s for edge, s in zip(face.edges_um, spread, strict=False)))

    @property
    def age(self) -> int:
        """Frames since the sensor woke."""
        return self._age

    def advance(self, air: Air, times: Floats, awake: NDArray[np.bool_]) -> tuple[Printed, State]:
        """The frames at `times`, a `period_s` apart, which `air` covers. Asleep there are none."""
        swaps = [f for f in self.faults.swaps() if self._swapped_at < f.at <= times[-1]]
        if not swaps:
            return self._block(air, times, awake)
        parts: list[tuple[Printed, State]] = []
        rest = times
        for swap in swaps:
            before = int(np.searchsorted(rest, swap.at))
            if before:
                done = len(times) - len(rest)
                parts.append(self._block(air, rest[:before], awake[done : done + before]))
            self._swapped_at = swap.at
            self._fit(draw(int(swap.strength)), running=False)
            self._age = 0
            rest = rest[before:]
        if len(rest):
            parts.append(self._block(air, rest, awake[len(times) - len(rest) :]))
        return _join(parts)

    def _block(self, air: Air, times: Floats, awake: NDArray[np.bool_]) -> tuple[Printed, State]:
        first = max(int((times[0] - air.times[0]) // STEP_S), 0)
        last = min(int((times[-1] - air.times[0]) // STEP_S) + 2, len(air.times))
        air = air.cut(first, last)
        unit, faults, step = self.unit, self.faults, self.period_s

        ages = self._ages(awake)
        since_wake_s = (np.minimum(ages, RUNNING) - 1) * step
        flow = self._flow(times, awake)
        gain = unit.gain * (1.0 - faults.level("optics-fouled", air.times))
        cell_rh = np.clip(warmed(air.rh, air.temperature, unit.warmth), 0.0, 100.0)
        outside = _at(times, air.times, visible(air, cell_rh, self._edges, gain, unit.resolution))
        inside = self._cell.follow(outside, flow, step)

        volume = NOMINAL_CM3_S * step * unit.view
        rates = self._cell.passing(inside, flow) * volume
        rates = coincident(rates, inside.sum(axis=1), unit.sensing_volume)
        warming = np.exp(-since_wake_s / unit.warm_s)
        rates *= (1.0 + unit.warm_gain * warming)[:, None]
        coarse = np.array(self.face.edges_um) >= _COARSE_CHANNEL_UM
        stirred = np.exp(-since_wake_s / _BURST_S) * unit.burst * unit.view + faults.level("insect", times)
        rates += np.outer(stirred * step, coarse)

        leak = faults.level("light-leak", times) * np.interp(times, air.times, air.daylight)
        floor = unit.floor + faults.level("floor-raised", times) + leak
        rates[:, 0] += floor / self.firmware.scale
        pulses = self._pulses.poisson(rates[awake])

        face = self.face
        columns = self.firmware.columns(
            self.firmware.pool(pulses, ages[awake]),
            resolution=face.mass_resolution,
            mass_top=face.mass_top,
            floats=face.floats,
        )
        rh = np.interp(times, air.times, cell_rh)
        temperature = np.interp(times, air.times, air.temperature) + unit.warmth
        printed = self._printed(times[awake], columns, rh[awake], temperature[awake])
        actual_gain = np.interp(times, air.times, gain)
        return printed, State(times, flow, actual_gain, floor, rh, temperature)

    def _ages(self, awake: NDArray[np.bool_]) -> NDArray[np.int64]:
        """Frames since the wake at each step: 1 on the first frame, 0 asleep."""
        index = np.arange(1, len(awake) + 1)
        asleep_at = np.maximum.accumulate(np.where(awake, 0, index))
        ages = np.where(asleep_at == 0, self._age + index, index - asleep_at)
        ages = np.minimum(np.where(awake, ages, 0), RUNNING)
        if len(ages):
            self._age = int(ages[-1])
        return ages

    def _flow(self, times: Floats, awake: NDArray[np.bool_]) -> Floats:
        """Flow over nominal: the fan with its faults, or the draught that warmth drives through a still cell."""
        unit, faults = self.unit, self.faults
        lost = np.maximum(faults.level("fan-weak", times), faults.level("fan-stopped", times))
        driven = self._fan.run(unit.flow * (1.0 - lost) * awake, self.period_s)
        surge = faults.level("fan-surging", times)
        course = self._surge.take(len(times))
        driven = driven * np.exp(surge * course - surge * surge / 2.0)
        wander = np.exp(_DRAUGHT_SPREAD * self._draught.take(len(times)))
        return np.hypot(driven, unit.draught * wander)

    def _printed(self, times: Floats, columns: Columns, rh: Floats, temperature: Floats) -> Printed:
        unit, faults = self.unit, self.faults
        shown = [
            columns.counts,
            columns.mass,
            columns.ambient,
            np.clip(np.round(rh + unit.rh_error, 1), 0.0, 100.0)[:, None],
            np.round(temperature + unit.temperature_error, 1)[:, None],
        ]
        frozen = faults.any_of(("output-frozen",), times)
        if frozen.any():
            held = self._frozen if self._frozen is not None else [column[:1] for column in shown]
            source = np.maximum.accumulate(np.where(frozen, 0, np.arange(1, len(times) + 1)))
            shown = [np.concatenate([old, new])[source] for old, new in zip(held, shown, strict=True)]
        if len(times):
            self._frozen = [column[-1:] for column in shown]
        error = faults.level("sensor-error", times).astype(np.int64) | self._fan_error(times)
        changed = faults.level("revision-changed", times).astype(np.int64)
        revision = np.where(changed > 0, changed, unit.revision)
        counts, mass, ambient, rh_shown, temperature_shown = shown
        return Printed(
            times, Columns(counts, mass, ambient), rh_shown[:, 0], temperature_shown[:, 0], error, revision, frozen
        )

    def _fan_error(self, times: Floats) -> NDArray[np.int64]:
        """What a sensor that watches its fan says of it: the flow that is lost stands for the speed."""
        stopped_bit, off_speed_bit = self.face.fan_bits
        if not stopped_bit:
            return np.zeros(len(times), dtype=np.int64)
        lost = np.maximum(self.faults.level("fan-weak", times), self.faults.level("fan-stopped", times))
        bit = np.where(lost > _STOPPED_SHARE, stopped_bit, np.where(lost > _OFF_SPEED_SHARE, off_speed_bit, 0))
        return bit.astype(np.int64)

    def loss_by_coincidence(self, per_cm3: float) -> float:
        """Share of pulses lost at this number above the first threshold, 0..1."""
        return float(-np.expm1(-self.unit.sensing_volume * per_cm3))

    def thresholds_um(self, gain: float = 1.0) -> tuple[float, ...]:
        """Latex diameters that this unit's thresholds sit at when its optics give `gain` of their first signal."""
        return tuple(shifted_thresholds_um(self._edges, np.array([self.unit.gain * gain]))[:, 0].tolist())


def _at(times: Floats, grid: Floats, values: Floats) -> Floats:
    """Columns of `values` on `grid`, interpolated at `times`."""
    return np.stack([np.interp(times, grid, column) for column in values.T], axis=1)


def _join(parts: list[tuple[Printed, State]]) -> tuple[Printed, State]:
    printed = [p for p, _ in parts]
    states = [s for _, s in parts]

    def columns(name: str) -> Floats:
        return np.concatenate([getattr(p.columns, name) for p in printed])

    def field(items: list[Printed] | list[State], name: str) -> Floats:
        return np.concatenate([getattr(item, name) for item in items])

    return (
        Printed(
            field(printed, "times"),
            Columns(columns("counts"), columns("mass"), columns("ambient")),
            field(printed, "rh"),
            field(printed, "temperature"),
            field(printed, "error").astype(np.int64),
            field(printed, "revision").astype(np.int64),
            field(printed, "repeats").astype(np.bool_),
        ),
        State(*(field(states, name) for name in ("times", "flow", "gain", "floor", "rh", "temperature"))),
    )
