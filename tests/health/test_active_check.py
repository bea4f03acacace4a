"""Active checks: when they are due, that twins never sleep at once, and how they stand in the record."""

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from health.small_air import instant
from motekeep.health.active_check import SLEEP_S, WHY, ActiveSchedule
from motekeep.health.check import LineState
from motekeep.instant import Instant
from motekeep.message.compose import Place
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame

HOUR_S = 3600.0
BM = DIALECTS["bm"]


def begun(schedule: ActiveSchedule, hours: float, asked: list[bool]) -> list[float]:
    """The hours at which checks began, looking every minute; `asked` is cycled through by the hour."""
    times = []
    for minute in range(int(hours * 60)):
        at = instant(60.0 * minute)
        if schedule.due(at, asked=asked[(minute // 60) % len(asked)]):
            schedule.begin(at)
            times.append(minute / 60.0)
    return times


def test_four_a_day_are_six_hours_apart() -> None:
    assert begun(ActiveSchedule(4.0, instant(0.0)), 25.0, [False]) == [6.0, 12.0, 18.0, 24.0]


def test_one_that_is_asked_for_comes_sooner_but_two_hours_after_the_last_at_the_least() -> None:
    assert begun(ActiveSchedule(4.0, instant(0.0)), 8.0, [True]) == [1.0, 3.0, 5.0, 7.0]


def test_none_a_day_is_none_whatever_asks() -> None:
    assert begun(ActiveSchedule(0.0, instant(0.0)), 50.0, [True]) == []


@given(st.lists(st.booleans(), min_size=1, max_size=30), st.floats(0.0, 24.0))
def test_checks_never_come_closer_than_asked_or_scheduled(asked: list[bool], a_day: float) -> None:
    times = begun(ActiveSchedule(a_day, instant(0.0)), 60.0, asked)
    closest = min(2.0, 24.0 / a_day if a_day else 2.0)
    assert all(b - a >= closest - 0.02 for a, b in pairwise(times))
    assert not times or times[0] >= 1.0


def data(second: float) -> bytes:
    wobble = float(int(second) * 7 % 13)
    return BM.encode(Frame(BM_28, (5.0, 8.0, 9.0), (1200.0 + wobble, 340.0, 62.0, 8.0, 2.0, 1.0), b""))


class Site:
    """Twins that stream every ten seconds, and obey."""

    def __init__(self, **setup: object) -> None:
        sensors = [SensorSetup(name, BM, 10.0, twin=twin, **setup) for name, twin in (("a", "b"), ("b", "a"))]  # type: ignore[arg-type]
        self.pipeline = Pipeline(Place("quarry", "gate"), 60, sensors, self.at(0.0))
        self.pipeline.resume({"a": 1, "b": 1}, {}, self.at(0.0))
        self.asleep: dict[str, float] = {}
        self.slept: list[tuple[str, float]] = []

    @staticmethod
    def at(seconds: float) -> Instant:
        return instant(50_000.0 + seconds)

    def live(self, begin_s: float, end_s: float) -> None:
        for step in range(int(begin_s // 10), int(end_s // 10)):
            second = 10.0 * step
            for name in ("a", "b"):
                if name in self.asleep and second - self.asleep[name] >= SLEEP_S:
                    del self.asleep[name]
                    self.pipeline.line(name, LineState.AWAKE, self.at(second))
                if name not in self.asleep and self.pipeline.active_check(name, self.at(second)):
                    self.asleep[name] = second
                    self.slept.append((name, second))
                    self.pipeline.line(name, LineState.ASLEEP, self.at(second), WHY)
                if name not in self.asleep:
                    self.pipeline.receive(name, data(second), self.at(second + 5.0))


def test_twins_never_sleep_at_once_and_both_get_their_turn() -> None:
    site = Site(active_a_day=4.0)
    site.live(0.0, 15.0 * HOUR_S)
    assert {name for name, _ in site.slept} == {"a", "b"}
    spans = sorted((second, second + SLEEP_S) for _, second in site.slept)
    assert len(spans) >= 4
    assert all(first_end <= second_begin for (_, first_end), (second_begin, _) in pairwise(spans))


def test_a_check_stands_in_the_record_as_sleep_and_in_health_as_a_function_check() -> None:
    site = Site(active_a_day=4.0)
    site.live(0.0, 6.5 * HOUR_S)
    harvest = site.pipeline.harvest()
    told = [(f.event, f.category) for f in harvest.findings if f.code == "active-check" and f.sensor == "a"]
    assert told == [("opened", "function_check"), ("closed", "function_check")]
    assert "frames-missing" not in {f.code for f in harvest.findings}
    asleep = [r for r in harvest.readings if r.sensor == "a" and r.reasons == ["asleep"]]
    assert len(asleep) in (9, 10)
    assert all(r.flag == 9 and r.frames.missing == 0 for r in asleep)
    [hour] = [h for h in harvest.hours if h.sensor == "a" and h.start == asleep[0].start[:13] + ":00:00Z"]
    assert "incomplete" not in hour.reasons, "sleep is not due"


def test_no_check_while_a_sensor_is_silent_or_has_just_started() -> None:
    site = Site(active_a_day=4.0)
    site.live(0.0, 5.9 * HOUR_S)
    site.pipeline.advance(site.at(6.2 * HOUR_S))
    assert not site.pipeline.active_check("a", site.at(6.2 * HOUR_S)), "frames are missing"
    site.pipeline.receive("a", data(1.0), site.at(6.2 * HOUR_S + 5.0))
    site.pipeline.advance(site.at(6.2 * HOUR_S + 6.0))
    assert not site.pipeline.active_check("a", site.at(6.2 * HOUR_S + 6.0)), "it is warming up"
    site.live(6.21 * HOUR_S, 6.5 * HOUR_S)
    assert site.slept


@pytest.mark.parametrize("active", [0.0, 4.0])
def test_a_line_that_is_lost_asleep_is_awake_when_it_is_back(active: float) -> None:
    site = Site(active_a_day=active)
    site.live(0.0, 600.0)
    site.pipeline.line("a", LineState.ASLEEP, site.at(600.0))
    site.pipeline.line("a", LineState.GONE, site.at(700.0), "unplugged")
    site.pipeline.line("a", LineState.OPENED, site.at(720.0))
    site.live(720.0, 1000.0)
    site.pipeline.advance(site.at(1000.0))
    last = [r for r in site.pipeline.harvest().readings if r.sensor == "a"][-1]
    assert last.frames.good >= 5
    assert "asleep" not in last.reasons
