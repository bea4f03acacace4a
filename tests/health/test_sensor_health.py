"""All checks of one sensor together: what it hears goes where it belongs, and one cause is one finding."""

import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from health.small_air import RURAL, Floats, Unit, frames, instant, printed, steady
from motekeep.health.check import Check, LineState, listens
from motekeep.health.finding import KINDS, FindingEvent, Suspicion
from motekeep.health.frozen import OutputFrozen
from motekeep.health.sensor import SensorHealth
from motekeep.health.unit import SensorError
from motekeep.instant import Instant
from motekeep.measure.interval import Accumulator
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Frame, Observation

START = 10_000.0


class Sensor:
    """A sensor as the pipeline drives it: judged every five seconds, intervals of a minute."""

    def __init__(self, dialect: str = "bm", start_s: float = START, offset: float = 1.8e9, boot: str = "one") -> None:
        self.offset, self.boot = offset, boot
        self.now = start_s
        self.health = SensorHealth("north", DIALECTS[dialect], 1.0, self.at())
        self.events: list[FindingEvent] = []
        self.flags: list[dict[str, int]] = []
        self._judge_at, self._begun = start_s + 5.0, start_s
        self._accumulator = Accumulator()

    def at(self, boot_s: float | None = None) -> Instant:
        return instant(self.now if boot_s is None else boot_s, self.offset, self.boot)

    def hear(self, made: list[Frame]) -> "Sensor":
        for frame in made:
            self.wait(1.0)
            self.health.observe(Observation(frame, self.at()))
            if not self.health.warming(self.at()):
                self._accumulator.add(frame)
        return self

    def wait(self, seconds: float) -> "Sensor":
        end = self.now + seconds
        while min(self._judge_at, self._begun + 60.0) <= end:
            if self._judge_at < self._begun + 60.0:
                self.events += self.health.judge(self.at(self._judge_at))
                self._judge_at += 5.0
            else:
                interval = self._accumulator.close("north", self.at(self._begun), 60.0, climate=None)
                self._accumulator = Accumulator()
                self.health.interval(interval)
                self.flags.append(self.health.flags_between(self._begun, self._begun + 60.0))
                self._begun += 60.0
        self.now = end
        return self

    def told(self) -> list[tuple[str, bool]]:
        return [(e.finding.code, e.opened) for e in self.events]


def air(seconds: float, *, stopped_at: int | None = None, level: float = 4_000.0) -> Floats:
    return printed(steady(level, RURAL, seconds, 1.0), Unit(), np.random.default_rng(1), stopped_at)


def test_an_hour_of_a_sound_sensor_is_without_finding_and_without_flag() -> None:
    sensor = Sensor().hear(frames(air(3600.0)))
    assert sensor.told() == []
    assert sensor.flags == [{}] * 60


def test_a_stopped_fan_flags_its_readings_from_the_minute_it_was_proven_and_dates_back_to_the_stop() -> None:
    sensor = Sensor().hear(frames(air(1500.0, stopped_at=1200)))
    assert sensor.told() == [("fan-stopped", True)]
    assert sensor.events[0].finding.since == pytest.approx(sensor.at(START + 1200.0).utc, abs=20.0)
    assert sensor.flags[:20] == [{}] * 20
    assert sensor.flags[23:] == [{"fan-stopped": 4}] * 2
    assert sensor.health.flags_between(START + 1200.0, START + 1260.0) == {"fan-stopped": 4}


def test_saturation_flags_the_very_minute_it_happened_in_and_no_other() -> None:
    full = air(300.0)
    full[150] = 65_535.0
    sensor = Sensor().hear(frames(full))
    assert sensor.flags == [{}, {}, {"counts-saturated": 3}, {}, {}]
    assert sensor.told() == [("counts-saturated", True)]


def test_a_replug_is_warm_up_whose_frames_no_other_check_sees() -> None:
    sensor = Sensor().hear(frames(air(120.0)))
    sensor.health.line(LineState.GONE, sensor.at(), "unplugged")
    sensor.wait(5.0)
    sensor.health.line(LineState.OPENED, sensor.at())
    broken = [Frame(f.layout, f.mass, f.counts, f.payload, error=0xFF) for f in frames(air(20.0))]
    sensor.hear(broken)
    assert sensor.told() == [("warming-up", True)]
    sensor.hear(frames(air(60.0)))
    assert sensor.told() == [("warming-up", True), ("warming-up", False)]
    assert not any(sensor.flags)


def test_a_port_that_is_gone_is_one_finding_however_much_else_was_wrong_before() -> None:
    sensor = Sensor()
    for n, frame in enumerate(frames(air(900.0))):
        if n % 12 == 0:
            sensor.wait(1.0)
            sensor.health.damaged(Damage("checksum", 32), sensor.at())
        else:
            sensor.hear([frame])
    assert sensor.told() == [("frames-corrupt", True)]
    sensor.health.line(LineState.GONE, sensor.at(), "no such device")
    sensor.wait(60.0)
    assert sensor.told()[1:] == [("frames-corrupt", False), ("frames-missing", True)]
    assert "explains frames-corrupt" in sensor.health.open()[0].evidence


def restarted(sensor: Sensor, **how: object) -> Sensor:
    kept = json.loads(json.dumps(sensor.health.dump()))
    new = Sensor(**how)  # type: ignore[arg-type]
    new.health.restore(kept, new.at())
    return new


def test_a_stopped_fan_outlives_a_reboot_with_its_since_and_without_a_second_opening() -> None:
    first = Sensor().hear(frames(air(1500.0, stopped_at=1200)))
    since = first.health.open()[0].since
    second = restarted(first, start_s=30.0, offset=1.8e9 + START + 1600.0, boot="two")
    second.hear(frames(air(900.0, stopped_at=0)[60:]))
    assert [f.code for f in second.health.open() if f.code != "warming-up"] == ["fan-stopped"]
    assert next(f for f in second.health.open() if f.code == "fan-stopped").since == since
    assert "fan-stopped" not in dict(second.told())


def test_a_frozen_output_that_a_power_cycle_cured_is_closed_after_the_restart() -> None:
    normal = frames(air(900.0))
    first = Sensor().hear([*normal, *[normal[-1]] * 200])
    assert first.told() == [("output-frozen", True)]
    second = restarted(first, start_s=30.0, offset=1.8e9 + START + 1200.0, boot="two").hear(frames(air(600.0)))
    assert ("output-frozen", False) in second.told()
    closed = next(e for e in second.events if e.finding.code == "output-frozen")
    assert closed.at <= second.at(30.0 + OutputFrozen.again_s + 10.0).utc


KEYS = st.sampled_from(["findings", "checks", "code", "since", "confidence", "FanStopped", "before", "left", "sorted"])
LEAVES = st.none() | st.booleans() | st.floats() | st.sampled_from([*KINDS, ""])
JSON = st.recursive(LEAVES, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(KEYS, inner), max_leaves=12)
KEPT = st.fixed_dictionaries({"findings": JSON, "checks": st.dictionaries(st.just("FanStopped"), JSON)}) | JSON


@given(KEPT)
@settings(max_examples=60, deadline=None)
def test_a_kept_text_of_any_shape_starts_the_sensor_all_the_same(kept: object) -> None:
    sensor = Sensor()
    if isinstance(kept, dict):
        sensor.health.restore(kept, sensor.at())
    sensor.hear(frames(air(10.0)))
    assert {f.code for f in sensor.health.open()} <= set(KINDS)
    assert json.dumps(sensor.health.dump(), allow_nan=False)


@given(
    st.lists(
        st.sampled_from(["frame", "hit", "gone", "opened", "asleep", "awake", "pause", "judge", "bytes"]), max_size=80
    )
)
@settings(max_examples=40, deadline=None)
def test_any_order_of_events_is_taken_without_an_exception(happened: list[str]) -> None:
    sensor = Sensor("aa")
    frame = Frame(DIALECTS["aa"].layouts[0], (3.2, 5.1), (), b"x")
    for what in happened:
        match what:
            case "frame":
                sensor.hear([frame] * 3)
            case "hit":
                sensor.health.damaged(Damage("tail", 10), sensor.at())
            case "bytes":
                sensor.health.heard(b"\x00\xff" * 40, sensor.at())
            case "pause":
                sensor.wait(47.0)
            case "judge":
                sensor.wait(5.0)
            case _:
                sensor.health.line(LineState(what), sensor.at(), "said so")
    assert {f.code for f in sensor.health.open()} <= set(KINDS)


def test_a_check_hears_only_what_it_listens_to() -> None:
    class Deaf(Check):
        code, clear_s = "sensor-error", 0.0

        def judge(self, at: Instant) -> Suspicion | None:
            return None

    assert not any(listens(Deaf(), hook) for hook in ("observe", "damaged", "heard", "line", "interval", "twin"))
    assert listens(SensorError(), "observe")
    assert not listens(SensorError(), "heard")
