"""One emulated sensor under a host's commands, frame by frame, in the time that its caller keeps.

Owns what a sensor does when it is told to sleep, wake, stream or be polled. Must not know ports or clocks.

    power-on   streams, or waits to be told to measure where the dialect is polled
    sleep      the fan stops, no bytes come; the cell settles
    wake       the fan spins up, frames carry the start's transient; the mode from before the sleep is kept
    poll       measures on, speaks only when read
    stream     speaks every period (polled dialects: begins to measure)
    read       the newest frame
    status     the status word, where the dialect has one
"""

import numpy as np

from motekeep.wire.commands import CommandListener
from motesim.air import Air
from motesim.answers import NOT_MEASURING, NOTHING_NEW, acknowledgement
from motesim.emulator import Emulator, State
from motesim.faults import FaultSet
from motesim.line import Line
from motesim.plan import SensorPlan


class LiveSensor:
    """One sensor from power-on. `tick` must be called every `plan.period_s` with times that only rise."""

    def __init__(self, plan: SensorPlan) -> None:
        self.plan = plan
        self.faults = FaultSet(plan.faults)
        self.line = Line(plan, self.faults)
        self.state: State | None = None
        self._listener = CommandListener(self.line.dialect.commands)
        self._start()

    def _start(self) -> None:
        plan = self.plan
        self.emulator = Emulator(
            self.line.face, plan.seed, plan.period_s, faults=self.faults, overrides=plan.unit, cold=True
        )
        self._polled = self.line.dialect.polled
        self.measuring = not self._polled
        self.asleep = False
        self.streaming = not self._polled
        self._newest: bytes | None = None
        self._status = b""
        self._silent = False

    def power_cycle(self) -> None:
        """Supply taken away and given back: what had been commanded is forgotten."""
        self._start()

    def tick(self, air: Air, at: float) -> bytes:
        """One period passes, up to `at`; what the sensor says by itself."""
        times = np.array([at])
        printed, self.state = self.emulator.advance(air, times, np.array([self.measuring]))
        self._silent = bool(self.faults.any_of(("silent", "port-gone"), times)[0])
        said = b"".join(data for _, data in self.line.speak(printed))
        if not self.measuring:
            return b""
        if self._polled:
            self._status, said = self.line.parts(said)
        self._newest = said
        return said if self.streaming else b""

    def hear(self, data: bytes) -> bytes:
        """What a host sent, in any split; what the sensor answers at once."""
        answers = b"".join(self._answer(command) for command in self._listener.understand(data))
        return b"" if self._silent else answers

    def _answer(self, command: str) -> bytes:
        if self.asleep and command != "wake":
            return b""
        if command == "read":
            return self._read()
        if command == "status":
            return self._status
        if command == "sleep":
            self.asleep, self.measuring, self._newest = True, False, None
        elif command == "wake":
            self.asleep, self.measuring = False, True
        elif command == "poll":
            self.streaming = False
        elif command == "stream":
            self.measuring = True
            self.streaming = not self._polled
        return acknowledgement(self.line.dialect.name, command, self.line.identity)

    def _read(self) -> bytes:
        if not self._polled:
            return self._newest or b""
        if not self.measuring:
            return NOT_MEASURING
        newest, self._newest = self._newest, None
        return NOTHING_NEW if newest is None else newest
