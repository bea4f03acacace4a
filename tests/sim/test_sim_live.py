"""Sensors under commands: in emulated time, and on real pseudo-terminals."""

import os
import select
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Frame
from motesim.air import AirPlan, still_air
from motesim.faults import Fault
from motesim.live import LiveSensor
from motesim.plan import SensorPlan
from motesim.port import Port
from motesim.run import Station

SCENARIO = """
site = "here"
start = 2026-12-01T12:00:00Z
duration = "1h"
period = 0.1
[[sensor]]
name = "north"
dialect = "bm"
[[sensor]]
name = "mast"
dialect = "stuffed"
"""


class Bench:
    """One live sensor in still air, with the agent's decoder behind it."""

    def __init__(self, dialect: str, *faults: Fault, **unit: float) -> None:
        unit = {"averaging": 1, **unit}
        self.sensor = LiveSensor(SensorPlan("north", dialect, seed=3, unit=unit, faults=faults))
        self.commands = DIALECTS[dialect].commands
        self.air = still_air(AirPlan(), 50.0, 15.0, samples=2000)
        self.decoder = DIALECTS[dialect].decoder()
        self.at = 0.0

    def ticks(self, n: int) -> list[Frame | Damage]:
        out: list[Frame | Damage] = []
        for _ in range(n):
            self.at += 1.0
            out += self.decoder.feed(self.sensor.tick(self.air, self.at))
        return out

    def send(self, command: bytes | None) -> list[Frame | Damage]:
        assert command is not None
        out: list[Frame | Damage] = []
        for byte in command:  # in the smallest pieces that a line can deliver
            out += self.decoder.feed(self.sensor.hear(bytes([byte])))
        return out


@pytest.mark.parametrize("dialect", ["bm", "bm-climate", "aa"])
def test_a_streaming_sensor_streams_sleeps_and_wakes(dialect: str) -> None:
    bench = Bench(dialect)
    assert len(bench.ticks(10)) == 10
    assert bench.send(bench.commands.sleep) == []
    assert bench.ticks(30) == []
    assert bench.sensor.state is not None
    assert bench.sensor.state.flow[-1] < 0.05
    assert bench.send(bench.commands.wake) == []
    woken = bench.ticks(30)
    assert len(woken) == 30
    assert all(isinstance(frame, Frame) for frame in woken)
    assert bench.sensor.state.flow[-1] > 0.8


def test_counts_climb_after_a_wake() -> None:
    bench = Bench("bm", fan_up=3.0, warm_gain=0.0)
    bench.ticks(20)
    bench.send(bench.commands.sleep)
    bench.ticks(120)
    bench.send(bench.commands.wake)
    woken = [frame.counts[0] for frame in bench.ticks(100) if isinstance(frame, Frame)]
    assert woken[0] < 0.6 * sum(woken[40:]) / len(woken[40:])  # a fan lag of 3 s: 28 % of the flow after the first


@pytest.mark.parametrize("dialect", ["bm", "aa"])
def test_a_sensor_in_poll_mode_speaks_only_when_read(dialect: str) -> None:
    bench = Bench(dialect)
    bench.send(bench.commands.poll_mode)
    assert bench.ticks(5) == []
    (frame,) = bench.send(bench.commands.read)
    assert isinstance(frame, Frame)
    bench.send(bench.commands.stream)
    assert len(bench.ticks(5)) == 5


def test_a_polled_sensor_measures_only_when_told_and_answers_each_read_once() -> None:
    bench = Bench("stuffed")
    assert bench.ticks(3) == []
    assert bench.send(bench.commands.read) == []
    assert bench.decoder.tally.dropped.get("refused") == 1
    bench.send(bench.commands.stream)
    assert bench.ticks(3) == []
    (frame,) = bench.send(bench.commands.read)
    assert isinstance(frame, Frame)
    assert frame.counts[0] > 0.0
    assert bench.send(bench.commands.read) == []  # nothing new yet
    bench.ticks(1)
    assert len(bench.send(bench.commands.read)) == 1
    bench.send(bench.commands.sleep)
    bench.ticks(2)
    assert bench.send(bench.commands.read) == []


def test_a_sensor_that_watches_its_fan_says_that_it_stopped() -> None:
    bench = Bench("stuffed", Fault("fan-stopped", 10.0))
    bench.send(bench.commands.stream)
    bench.ticks(5)
    (before,) = bench.send(bench.commands.read)
    bench.ticks(10)
    bench.send(bench.commands.status)
    (after,) = bench.send(bench.commands.read)
    assert isinstance(before, Frame)
    assert isinstance(after, Frame)
    assert before.error == 0
    assert after.error != 0


def test_a_silent_sensor_does_not_answer_either() -> None:
    bench = Bench("bm", Fault("silent", 5.0))
    assert len(bench.ticks(10)) == 4
    assert bench.sensor.hear(bench.commands.read or b"") == b""


def test_a_port_carries_bytes_both_ways_and_shows_an_unplug(tmp_path: Path) -> None:
    port = Port(tmp_path / "north")
    port.plug()
    assert not port.open_elsewhere()
    port.write(b"lost, nobody listens")
    reader = os.open(port.link, os.O_RDWR | os.O_NOCTTY)
    try:
        assert port.open_elsewhere()
        port.write(b"\x42\x4d\x00\x0d")
        assert select.select([reader], [], [], 2.0)[0]
        assert os.read(reader, 100) == b"\x42\x4d\x00\x0d"
        os.write(reader, b"\xe4\x0d")
        assert select.select([port], [], [], 2.0)[0]
        assert port.read() == b"\xe4\x0d"
        port.unplug()
        assert not port.link.is_symlink()
        assert os.read(reader, 10) == b""
    finally:
        os.close(reader)
    port.plug()
    assert port.link.is_symlink()
    port.unplug()


def test_a_port_that_goes_away_comes_back_with_a_sensor_at_power_on(tmp_path: Path) -> None:
    fault = Fault("port-gone", 12.0, lasts_s=5.0)
    bench = Bench("bm", fault)
    station = Station(bench.sensor, Port(tmp_path / "north"), now=0.0)
    station.port.plug()
    ages, there = [], []
    for second in range(1, 25):
        station.tick(bench.air, float(second), float(second))
        ages.append(bench.sensor.emulator.age)
        there.append(station.port.link.is_symlink())
    station.port.unplug()
    assert there == [not 12 <= second < 17 for second in range(1, 25)]
    assert ages[10] == 11
    assert ages[-1] == 8


class Emulation:
    """`motesim run` as a process of its own, its ports read through the agent's decoders."""

    def __init__(self, folder: Path) -> None:
        scenario = folder / "scenario.toml"
        scenario.write_text(SCENARIO)
        self.links = folder / "links"
        # the output goes to a file: a pipe that nobody empties would stop the emulation
        self.said = folder / "said.txt"
        with self.said.open("wb") as said:
            self.process = subprocess.Popen(
                [sys.executable, "-c", "from motesim.cli import main; main()", "run", scenario, "--link", self.links],
                stdout=said,
                stderr=subprocess.STDOUT,
            )
        wait_for((self.links / "mast").is_symlink)

    def order(self, line: str) -> None:
        with (self.links / "control").open("w") as control:
            control.write(line + "\n")

    def open(self, sensor: str) -> int:
        return os.open(self.links / sensor, os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK)

    def end(self) -> int:
        if self.process.poll() is None:
            self.process.send_signal(signal.SIGTERM)
        return self.process.wait(10.0)


def wait_for(what: Callable[[], object], seconds: float = 20.0) -> None:
    until = time.monotonic() + seconds
    while not what():
        assert time.monotonic() < until, "did not happen in time"
        time.sleep(0.02)


def frames(reader: int, dialect: str, n: int, asking: bytes = b"", seconds: float = 20.0) -> list[Frame]:
    """The next `n` frames from an open port; `asking` is sent again and again where the sensor has to be read."""
    decoder = DIALECTS[dialect].decoder()
    found: list[Frame] = []
    until = time.monotonic() + seconds
    while len(found) < n:
        assert time.monotonic() < until, f"{len(found)} of {n} frames in {seconds} s"
        if asking:
            os.write(reader, asking)
        if select.select([reader], [], [], 0.2)[0]:
            found += [item for item in decoder.feed(os.read(reader, 4096)) if isinstance(item, Frame)]
    return found


def quiet(reader: int, seconds: float = 0.8) -> bool:
    while select.select([reader], [], [], 0.0)[0]:
        os.read(reader, 4096)  # what was on its way
    return not select.select([reader], [], [], seconds)[0]


@pytest.mark.whole
def test_a_scenario_plays_on_ports_and_takes_orders(tmp_path: Path) -> None:
    emulation = Emulation(tmp_path)
    try:
        north, mast = emulation.open("north"), emulation.open("mast")
        bm, stuffed = DIALECTS["bm"].commands, DIALECTS["stuffed"].commands
        os.write(mast, DIALECTS["stuffed"].start)

        assert all(frame.layout.name == "bm-28" for frame in frames(north, "bm", 5))
        assert frames(mast, "stuffed", 3, asking=stuffed.read or b"")[-1].mass[1] > 0.0

        os.write(north, bm.sleep or b"")
        time.sleep(0.3)
        assert quiet(north)
        os.write(north, bm.wake or b"")
        before = frames(north, "bm", 30)[-15:]

        emulation.order("fault north fan-stopped")
        wait_for(lambda: "done: fault north" in emulation.said.read_text())
        after = frames(north, "bm", 60)[-15:]
        assert sum(f.counts[0] for f in after) < 0.3 * sum(f.counts[0] for f in before)

        emulation.order("unplug north")
        wait_for(lambda: not (emulation.links / "north").is_symlink())
        wait_for(lambda: select.select([north], [], [], 0.0)[0] and os.read(north, 4096) == b"")
        os.close(north)
        emulation.order("plug north\nclear north fan-stopped\nfault south silent")
        wait_for(lambda: "not done: no sensor 'south'" in emulation.said.read_text())
        again = emulation.open("north")
        assert len(frames(again, "bm", 3)) >= 3
        os.close(again)
        os.close(mast)
    finally:
        code = emulation.end()
    assert code == 0, emulation.said.read_text()
    assert list(emulation.links.iterdir()) == []
