"""What goes wrong with a sensor, when, how fast and how badly.

Owns the table of faults and their courses. Must not know how a fault works itself out: that is physics (`emulator`)
or the line (`line`).
"""

from dataclasses import dataclass
from math import inf

import numpy as np
from numpy.typing import NDArray

from motesim.aerosol import Floats


@dataclass(frozen=True, slots=True)
class FaultKind:
    """`unit` says what the strength of a fault of this kind means, `strength` is the usual one."""

    unit: str
    strength: float
    most: float = inf


KINDS: dict[str, FaultKind] = {
    "fan-stopped": FaultKind("share of the flow lost, 1 is a stuck fan", 1.0, 1.0),
    "fan-weak": FaultKind("share of the flow lost", 0.3, 1.0),
    "fan-surging": FaultKind("standard deviation of ln flow", 0.25, 1.5),
    "optics-fouled": FaultKind("share of the optical signal lost", 0.25, 0.99),
    "floor-raised": FaultKind("false counts per 0.1 L in the smallest channel", 900.0),
    "light-leak": FaultKind("false counts per 0.1 L in the smallest channel under a clear high sun", 1500.0),
    "insect": FaultKind("large pulses a second while it sits in the inlet", 3.0),
    "output-frozen": FaultKind("no meaning: the last frame repeats", 1.0),
    "silent": FaultKind("no meaning: no bytes come", 1.0),
    "port-gone": FaultKind("no meaning: the port is away", 1.0),
    "sensor-error": FaultKind("the error bits of the frame, as a number", 1.0, 65_535.0),
    "revision-changed": FaultKind("the new revision byte", 0x9C, 255.0),
    "unit-swapped": FaultKind("the seed of the new unit", 4711.0),
    "bad-checksums": FaultKind("share of frames with one byte altered", 0.05, 1.0),
    "byte-damage": FaultKind("chance that a byte is altered or lost", 0.002, 1.0),
    "rubbish": FaultKind("bursts of rubbish a minute", 2.0),
}


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault. `at` is Unix seconds; it grows linearly to `strength` within `ramp_s` and ends after `lasts_s`."""

    kind: str
    at: float
    lasts_s: float = inf
    ramp_s: float = 0.0
    strength: float = 1.0

    def active(self, times: Floats) -> NDArray[np.bool_]:
        return np.asarray((times >= self.at) & (times < self.at + self.lasts_s))

    def level(self, times: Floats) -> Floats:
        """Its strength at each of `times`, 0 while it is not there."""
        grown = np.clip((times - self.at) / self.ramp_s, 0.0, 1.0) if self.ramp_s > 0.0 else np.ones_like(times)
        return np.asarray(self.strength * grown * self.active(times))


class FaultSet:
    """All faults of one sensor."""

    def __init__(self, faults: tuple[Fault, ...] = ()) -> None:
        self.faults = list(faults)

    def level(self, kind: str, times: Floats) -> Floats:
        """The strongest of this kind at each time, 0 without any."""
        level = np.zeros_like(times)
        for fault in self.faults:
            if fault.kind == kind:
                level = np.maximum(level, fault.level(times))
        return level

    def any_of(self, kinds: tuple[str, ...], times: Floats) -> NDArray[np.bool_]:
        found = np.zeros(len(times), dtype=np.bool_)
        for fault in self.faults:
            if fault.kind in kinds:
                found |= fault.active(times)
        return found

    def names(self, start: float, end: float) -> list[str]:
        """Kinds that are there at some moment of the span."""
        return sorted({f.kind for f in self.faults if f.at < end and start < f.at + f.lasts_s})

    def swaps(self) -> list[Fault]:
        """Changes of the unit itself, in order."""
        return sorted((f for f in self.faults if f.kind == "unit-swapped"), key=lambda fault: fault.at)

    def lay_on(self, fault: Fault) -> None:
        self.faults.append(fault)

    def clear(self, kind: str, now: float) -> bool:
        """End every fault of this kind now; whether there was one."""
        kept: list[Fault] = []
        found = False
        for fault in self.faults:
            if fault.kind == kind and fault.at <= now < fault.at + fault.lasts_s:
                found = True
                fault = Fault(kind, fault.at, max(now - fault.at, 0.0), fault.ramp_s, fault.strength)  # noqa: PLW2901
            kept.append(fault)
        self.faults = kept
        return found
