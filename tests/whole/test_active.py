"""An active check, with the real daemon and an emulated sensor that obeys: asleep, awake, and marked as such."""

import threading
import time
from pathlib import Path

import pytest

from motesim.air import AirCourse, AirPlan
from motesim.live import LiveSensor
from motesim.plan import SensorPlan
from motesim.port import Port
from whole_site import gateway

pytestmark = pytest.mark.whole

SPEED = 150.0
PERIOD_S = 5.0
START = 1_796_083_200.0


class Obedient:
    """One emulated sensor at a pseudo-terminal that does as it is told, `SPEED` times as fast as a real one."""

    def __init__(self, link: Path) -> None:
        self.port = Port(link)
        self.slept: list[bool] = []  # whether it was asleep, each time that this changed
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._play, name="obedient")

    def __enter__(self) -> "Obedient":
        self.port.plug()
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._over.set()
        self._thread.join(10.0)
        self.port.unplug()

    def _play(self) -> None:
        sensor = LiveSensor(SensorPlan("north", seed=4200, period_s=PERIOD_S))
        stretches = AirCourse(AirPlan(), (), 4200, START).stretches()
        air, at, due = next(stretches), START, time.monotonic()
        while not self._over.wait(max(due - time.monotonic(), 0.0)):
            at, due = at + PERIOD_S, due + PERIOD_S / SPEED
            while at > float(air.times[-1]):
                air = next(stretches)
            self.port.write(sensor.hear(self.port.read()))
            if sensor.asleep != (self.slept[-1] if self.slept else False):
                self.slept.append(sensor.asleep)
            self.port.write(sensor.tick(air, at))


def test_a_sensor_without_twin_sleeps_ten_minutes_to_show_its_fan_and_the_record_says_so(tmp_path: Path) -> None:
    with gateway(tmp_path, plugged=False, speed=SPEED) as site, Obedient(tmp_path / "obedient") as sensor:
        site.write_config(interval=60, health_every=60.0)
        text = site.config.read_text().replace(str(site.sensors.ports["north"].link), str(sensor.port.link))
        site.config.write_text(text.replace('dialect = "bm"', f'dialect = "bm"\nperiod = {PERIOD_S}'))
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        # it asks for a first wake, to learn what is usual, an hour after the start: 24 s on this clock
        opened = subscriber.wait_on("finding", lambda d: d["code"] == "active-check", 90.0)
        assert (opened["event"], opened["category"]) == ("opened", "function_check")
        subscriber.wait_on("health", lambda d: d["status"] == "function_check")
        subscriber.wait_on("reading/north", lambda d: d["reasons"] == ["asleep"] and d["flag"] == 9)
        closed = subscriber.wait_on("finding", lambda d: d["code"] == "active-check" and d["event"] == "closed")
        assert sensor.slept == [True, False]
        after = len(subscriber.on("reading/north"))
        subscriber.wait(lambda _: len(subscriber.on("reading/north")) > after + 3)
        readings = [h.document for h in subscriber.on("reading/north")]
        assert readings[-1]["frames"]["good"] >= 6
        asleep = [d for d in readings if d["reasons"] == ["asleep"]]
        assert 8 <= len(asleep) <= 11
        assert all(d["frames"]["missing"] == 0 for d in asleep)
        told = [h.document for h in subscriber.on("finding") if opened["at"] < h.document["at"] < closed["at"]]
        assert "frames-missing" not in {d["code"] for d in told if d["event"] == "opened"}
        assert daemon.events("active_check.began")
