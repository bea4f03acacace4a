"""A scenario in real time: a pseudo-terminal for each sensor, orders from a fifo, until told to stop.

Owns the loop and the real clock. One thread: emulated sensors say little, and one order of events is easy to follow.
"""

import os
import select
import time
from collections.abc import Callable, Iterator
from contextlib import suppress
from pathlib import Path

from motesim.air import Air, AirCourse
from motesim.control import Order, understand
from motesim.faults import Fault
from motesim.live import LiveSensor
from motesim.plan import SitePlan
from motesim.port import Port

CONTROL = "control"
# a terminal that nobody has open reports a hang-up without end and so cannot be waited on: it is looked at this often
_LOOK_S = 0.05
_LATE_PERIODS = 5.0  # after a suspend the frames that were missed are not caught up
_LONGEST_LINE = 1024  # of orders; more without a line end is rubbish and dropped

Told = Callable[[str], None]


class Station:
    """One sensor at its port."""

    def __init__(self, sensor: LiveSensor, port: Port, now: float) -> None:
        self.sensor = sensor
        self.port = port
        self.due = now + sensor.plan.period_s
        self.pulled = False  # by an order; a `port-gone` fault pulls it too, for as long as it lasts

    def attend(self) -> None:
        """Answer what the host sent."""
        data = self.port.read()
        if data:
            self.port.write(self.sensor.hear(data))

    def tick(self, air: Air, at: float, now: float) -> None:
        """One period: plug state by the faults, then the sensor's own word."""
        gone = self.pulled or "port-gone" in self.sensor.faults.names(at, at + 1e-3)
        if gone:
            self.port.unplug()
        elif not self.port.plugged:
            self.sensor.power_cycle()
            self.port.plug()
        self.port.write(self.sensor.tick(air, at))
        period = self.sensor.plan.period_s
        self.due += period
        if now - self.due > _LATE_PERIODS * period:
            self.due = now + period


class Run:
    """A scenario being played. `speed` makes the air (its weather, events and the faults' clock) run faster; frames
    keep their pace."""

    def __init__(self, plan: SitePlan, folder: Path, *, speed: float = 1.0, told: Told = print) -> None:
        self._plan = plan
        self._speed = speed
        self._told = told
        self._folder = folder
        self._stretches = self._air()
        self._stretch = next(self._stretches)
        self._orders = b""
        self._stopped = False
        self._wake_read, self._wake_write = os.pipe()
        os.set_blocking(self._wake_read, False)
        os.set_blocking(self._wake_write, False)
        folder.mkdir(parents=True, exist_ok=True)
        self._fifo_path = folder / CONTROL
        self._fifo_path.unlink(missing_ok=True)
        os.mkfifo(self._fifo_path, 0o600)
        # held open for writing too, or every writer that leaves would end it
        self._fifo = os.open(self._fifo_path, os.O_RDWR | os.O_NONBLOCK)
        now = time.monotonic()
        self._began = now
        self.stations = {s.name: Station(LiveSensor(s), Port(folder / s.name), now) for s in plan.sensors}

    def stop(self) -> None:
        """End soon; may be called from a signal handler."""
        self._stopped = True
        with suppress(OSError):  # full: it is awake already; closed: it has ended
            os.write(self._wake_write, b"s")

    def play(self) -> None:
        """Until the end of the scenario, `stop` or the order to quit; leaves no link and no fifo behind."""
        try:
            for name, station in self.stations.items():
                station.port.plug()
                self._told(f"{name}: {station.port.link} ({station.sensor.line.dialect.name})")
            while not self._stopped:
                self._turn()
        finally:
            for station in self.stations.values():
                station.port.unplug()
            for descriptor in (self._fifo, self._wake_read, self._wake_write):
                os.close(descriptor)
            self._fifo_path.unlink(missing_ok=True)

    def _turn(self) -> None:
        """Wait for the next thing, then do all that is due."""
        self._wait()
        now = time.monotonic()
        at = self._plan.start + (now - self._began) * self._speed
        if at >= self._plan.start + self._plan.seconds:
            self._stopped = True
            return
        while at > float(self._stretch.times[-1]):
            self._stretch = next(self._stretches)
        for line in self._lines():
            self._obey(line, at)
        for station in self.stations.values():
            station.attend()
            if station.due <= now:
                station.tick(self._stretch, at, now)

    def _wait(self) -> None:
        poll = select.poll()
        poll.register(self._wake_read, select.POLLIN)
        poll.register(self._fifo, select.POLLIN)
        now = time.monotonic()
        wait = min(station.due for station in self.stations.values()) - now
        for station in self.stations.values():
            if station.port.open_elsewhere():
                poll.register(station.port.fileno(), select.POLLIN)
            elif station.port.plugged:
                wait = min(wait, _LOOK_S)
        poll.poll(max(wait, 0.0) * 1000.0)

    def _lines(self) -> list[str]:
        try:
            self._orders += os.read(self._fifo, 4096)
        except BlockingIOError:
            return []
        *whole, rest = self._orders.split(b"\n")
        self._orders = rest if len(rest) <= _LONGEST_LINE else b""
        return [line.decode("ascii", "replace") for line in whole]

    def _obey(self, line: str, at: float) -> None:
        try:
            order = understand(line, tuple(self.stations))
        except ValueError as error:
            self._told(f"not done: {error}")
            return
        if order is None:
            return
        done = self._do(order, at)
        self._told(f"{'done' if done else 'nothing to do'}: {line.strip()}")

    def _do(self, order: Order, at: float) -> bool:
        if order.verb == "quit":
            self._stopped = True
            return True
        station = self.stations[order.sensor]
        if order.verb == "fault":
            station.sensor.faults.lay_on(Fault(order.kind, at, ramp_s=order.ramp_s, strength=order.strength))
            return True
        if order.verb == "clear":
            return station.sensor.faults.clear(order.kind, at)
        pulled = order.verb == "unplug"
        changed = station.pulled != pulled
        station.pulled = pulled
        if pulled:
            station.port.unplug()
        elif changed:
            station.sensor.power_cycle()
            station.port.plug()
        return changed

    def _air(self) -> Iterator[Air]:
        plan = self._plan
        return AirCourse(plan.air, plan.events, plan.seed, plan.start).stretches()
