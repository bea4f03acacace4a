"""What a wake tells: what is usual is learnt, a weak fan is found by it, a still one too, and air fools neither.

The wakes are those of a small model of its own: a cell of which a part is missing after the sleep and comes back with
V/(q Q), Poisson pulses, nothing else. How well it goes with the emulated units is measured in the bench.
"""

import json
from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
import pytest

from health.small_air import URBAN as URBAN_AIR
from health.small_air import Unit, feed, instant, printed, steady
from health.small_air import frames as small_frames
from motekeep.health.check import LineState
from motekeep.health.fan import FanStopped
from motekeep.health.fan_wake import FanStoppedByWakes
from motekeep.health.fan_weak import FanWeakByWakes
from motekeep.health.lessons.spin_up import SpinUp, SpinUpLesson, added
from motekeep.health.sensor import SensorHealth
from motekeep.health.wake import Shortfall, Wake
from motekeep.health.wake_watch import GUST, WakeWatch
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind
from motekeep.wire.aa import AA
from motekeep.wire.bm import BM_20, BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame, Layout, Observation

DAY_S = 86400.0
NOW = 1_796_083_200.0
URBAN = (0.82, 0.165, 0.013, 0.0015, 0.0003, 0.00003)  # of the particles above 0.3 um, channel by channel
MISSING = (0.34, 0.5, 0.9, 1.0, 1.0, 1.0)  # after ten minutes


@dataclass(frozen=True)
class Air:
    """`level` is N(>0.3 um) per 0.1 L; `old` what it was before the sleep; a still fan has `flow` 0."""

    level: float = 6000.0
    old: float | None = None
    flow: float = 1.0
    flush_s: float = 5.4
    floor: float = 6.0


def at(utc: float) -> Instant:
    return Instant(utc, utc - NOW + 1e6, "one", trusted=True)


def frames(air: Air, rng: np.random.Generator, period_s: float) -> Iterator[tuple[float, Frame]]:
    """The 95 s after a wake."""
    ages = np.arange(1.0, 95.0 / period_s + 1.0) * period_s
    shares, missing = np.array(URBAN), np.array(MISSING)
    if air.flow > 0.0:
        left = (1.0 - missing) * ((air.old if air.old is not None else air.level) / air.level)
        inside = 1.0 + (left - 1.0) * np.exp(-ages * air.flow / air.flush_s)[:, None]
        levels = air.level * air.flow * shares * inside
    else:
        old = air.old if air.old is not None else air.level
        levels = np.tile(0.008 * old * shares * (1.0 - missing), (len(ages), 1))
    per_pulse = 80.0 / period_s
    levels[:, 0] += air.floor
    between = rng.poisson(levels / per_pulse) * per_pulse
    counts = np.rint(np.cumsum(between[:, ::-1], axis=1)[:, ::-1])
    for age, row in zip(ages.tolist(), counts.tolist(), strict=True):
        yield age, Frame(BM_28, (1.0, 1.0, 1.0), tuple(row), b"")


def wake(
    air: Air, rng: np.random.Generator, utc: float = NOW, *, asleep_s: float = 600.0, period_s: float = 1.0
) -> Wake:
    watch = WakeWatch(0.1, period_s)
    assert watch.line(LineState.ASLEEP, at(utc - asleep_s)) is None
    assert watch.line(LineState.AWAKE, at(utc)) is None
    for age, frame in frames(air, rng, period_s):
        seen = watch.observe(Observation(frame, at(utc + age)))
        if seen is not None:
            return seen
    raise AssertionError("no wake was seen")


@cache
def pool(air: Air) -> list[Wake]:
    """Enough wakes to draw long stories from: to make each of them anew would take minutes."""
    rng = np.random.default_rng(4999)
    return [wake(air, rng) for _ in range(150)]


def wakes(air: Air, rng: np.random.Generator, days: float, a_day: int, begin: float = NOW) -> list[Wake]:
    drawn = rng.integers(0, 150, int(days * a_day)).tolist()
    return [replace(pool(air)[k], at=at(begin + n * DAY_S / a_day)) for n, k in enumerate(drawn)]


def taught() -> SpinUpLesson:
    lesson = SpinUpLesson()
    for one in wakes(Air(), np.random.default_rng(4998), 30.0, 12):
        lesson.wake(one)
    return lesson


@cache
def usual() -> SpinUp:
    part = taught().part()
    assert part is not None
    return part


# -- the look -----------------------------------------------------------------------------------------------------


def test_a_wake_holds_plateau_and_shortfall_of_each_small_channel() -> None:
    rng = np.random.default_rng(4000)
    seen = [wake(Air(20_000.0), rng) for _ in range(60)]
    assert seen[0].levels[0] == pytest.approx(20_006.0, rel=0.03)
    assert (seen[0].frames, seen[0].seconds) == (70, 70.0)
    assert [s.size_um for s in seen[0].shortfalls] == [0.3, 0.5]
    # (1 + 7/5.4)^-2 of what is missing, and a little less for the plateau that begins at 20 s
    for index, missing in ((0, 0.34), (1, 0.5)):
        assert np.mean([w.shortfalls[index].share for w in seen]) == pytest.approx(0.2 * missing, rel=0.25)
    assert np.mean([w.deficit_s for w in seen]) == pytest.approx(0.34 * 5.0, rel=0.2)


def test_the_stated_variance_is_that_of_counting() -> None:
    rng = np.random.default_rng(4001)
    shares = [[s.share for s in w.shortfalls] for w in (wake(Air(2000.0), rng) for _ in range(300))]
    stated = [s.variance for s in wake(Air(2000.0), rng).shortfalls]
    assert np.var(shares, axis=0) == pytest.approx([v - GUST * GUST for v in stated], rel=0.3)


def test_air_that_changes_while_it_is_looked_at_says_nothing_of_the_fan() -> None:
    watch = WakeWatch(0.1, 1.0)
    watch.line(LineState.ASLEEP, at(NOW - 600.0))
    watch.line(LineState.AWAKE, at(NOW))
    rng = np.random.default_rng(4002)
    plume = [replace(f, counts=tuple(c * (1.0 + (age > 60.0)) for c in f.counts)) for age, f in frames(Air(), rng, 1.0)]
    seen = [watch.observe(Observation(f, at(NOW + 1.0 + n))) for n, f in enumerate(plume)]
    [found] = [w for w in seen if w is not None]
    assert found.shortfalls == ()


def test_a_sensor_that_goes_back_to_sleep_after_a_minute_has_been_looked_at_too() -> None:
    watch = WakeWatch(0.1, 1.0)
    rng = np.random.default_rng(4003)
    watch.line(LineState.ASLEEP, at(NOW - 600.0))
    watch.line(LineState.AWAKE, at(NOW))
    for age, frame in frames(Air(), rng, 1.0):
        if age <= 60.0:
            assert watch.observe(Observation(frame, at(NOW + age))) is None
    seen = watch.line(LineState.ASLEEP, at(NOW + 60.5))
    assert seen is not None
    assert seen.seconds == 40.0
    assert not watch.looking


@pytest.mark.parametrize("state", [LineState.OPENED, LineState.GONE])
def test_a_line_that_was_lost_ends_the_look(state: LineState) -> None:
    watch = WakeWatch(0.1, 1.0)
    watch.line(LineState.ASLEEP, at(NOW - 600.0))
    watch.line(state, at(NOW - 300.0))
    watch.line(LineState.AWAKE, at(NOW))
    assert not watch.looking


def test_masses_are_looked_at_where_there_are_no_counts() -> None:
    layout: Layout = AA
    watch = WakeWatch(0.1, 1.0)
    watch.line(LineState.ASLEEP, at(NOW - 600.0))
    watch.line(LineState.AWAKE, at(NOW))
    seen = None
    for second in range(1, 96):
        mass = 40.0 * (1.0 - 0.4 * np.exp(-second / 5.4))
        seen = watch.observe(Observation(Frame(layout, (mass, mass), (), b""), at(NOW + second))) or seen
    assert seen is not None
    [shortfall] = seen.shortfalls
    assert (shortfall.size_um, round(float(shortfall.share), 2)) == (0.0, 0.09)


# -- the lesson ---------------------------------------------------------------------------------------------------


def test_what_is_usual_is_learnt_in_some_days_and_stands_still() -> None:
    rng = np.random.default_rng(4010)
    lesson = SpinUpLesson()
    learnt_after = None
    for one in wakes(Air(), rng, 30.0, 12):
        lesson.wake(one)
        if learnt_after is None and lesson.part() is not None:
            learnt_after = (one.at.utc - NOW) / DAY_S
    part = lesson.part()
    assert part is not None
    assert learnt_after is not None
    assert 3.0 <= learnt_after <= 15.0
    assert part.u <= SpinUpLesson.ENOUGH
    assert part.shortfalls == pytest.approx((0.075, 0.115), abs=0.025)
    for one in wakes(Air(flow=0.5), rng, 10.0, 12, NOW + 40.0 * DAY_S):
        lesson.wake(one)
    assert lesson.part() == part


def test_it_is_learnt_anew_after_a_new_fan_and_not_after_a_note() -> None:
    assert ServiceKind.FAN_REPLACED in SpinUpLesson.begun_again_by
    assert ServiceKind.UNIT_REPLACED in SpinUpLesson.begun_again_by
    assert ServiceKind.NOTE not in SpinUpLesson.begun_again_by
    lesson = taught()
    lesson.forget()
    assert lesson.part() is None


def test_a_cell_that_is_not_flushed_is_never_taken_as_usual() -> None:
    """Flush in 3 to 12 s: 5 to 20 cm3 at 0.1 L/min, computed. With 120 s half of everything is missing all along."""
    rng = np.random.default_rng(4012)
    lesson = SpinUpLesson()
    for one in wakes(Air(40_000.0, flush_s=120.0, old=1.0), rng, 12.0, 12):
        lesson.wake(replace(one, shortfalls=tuple(replace(s, share=s.share + 0.4) for s in one.shortfalls)))
    assert lesson.part() is None


def test_sleeps_of_another_length_do_not_count_until_they_are_the_rule() -> None:
    rng = np.random.default_rng(4013)
    part = usual()
    assert part.excess(wake(Air(), rng, asleep_s=1800.0)) is None
    assert part.excess(wake(Air(), rng, asleep_s=630.0)) is not None
    lesson = taught()
    for n in range(SpinUpLesson.OTHER_LENGTH):
        assert lesson.part() is not None
        lesson.wake(wake(Air(), rng, NOW + 50.0 * DAY_S + 600.0 * n, asleep_s=1800.0))
    assert lesson.part() is None


@pytest.mark.parametrize("days", [2.5, 30.0])
def test_what_was_gathered_and_what_was_learnt_survive_a_restart(days: float) -> None:
    rng = np.random.default_rng(4014)
    before, after = SpinUpLesson(), SpinUpLesson()
    for one in wakes(Air(), rng, days, 12):
        before.wake(one)
    notes = json.loads(json.dumps(before.notes()))
    after.recall(notes)
    assert after.part() == before.part()
    assert json.loads(json.dumps(after.notes())) == notes


@pytest.mark.parametrize(
    "notes",
    [{}, {"sizes": "x"}, {"sizes": [0.3], "blocks": [1.0]}, {"sizes": [0.3], "known": [0] * 6, "shortfalls": [1]}],
)
def test_notes_that_make_no_sense_begin_anew(notes: dict[str, object]) -> None:
    lesson = SpinUpLesson()
    lesson.recall(notes)  # type: ignore[arg-type]
    assert lesson.part() is None


def test_what_a_weak_fan_adds_grows_with_sleep_and_size() -> None:
    assert added(0.3, 600.0) == pytest.approx(0.03, abs=0.01)
    assert added(0.5, 600.0) > 1.3 * added(0.3, 600.0)
    assert added(0.3, 60.0) < 0.25 * added(0.3, 600.0)


# -- the weak fan -------------------------------------------------------------------------------------------------


def weakened(rng: np.random.Generator, air: Air, days: float, a_day: int = 12) -> tuple[FanWeakByWakes, float | None]:
    """A check that has learnt what is usual, after so many days of such air; when it spoke, in days."""
    check = FanWeakByWakes()
    check.learnt({"spin_up": usual()})
    spoke = None
    for one in wakes(air, rng, days, a_day, NOW + 40.0 * DAY_S):
        check.wake(one)
        if spoke is None and check.judge(one.at) is not None:
            spoke = (one.at.utc - NOW) / DAY_S - 40.0
    return check, spoke


def test_a_fan_at_seven_tenths_is_found_within_two_weeks_and_dated() -> None:
    check, spoke = weakened(np.random.default_rng(4020), Air(flow=0.7), 14.0)
    assert spoke is not None
    now = at(NOW + 54.0 * DAY_S)
    suspicion = check.judge(now)
    assert suspicion is not None
    began = suspicion.since + now.offset
    assert abs(began - (NOW + 40.0 * DAY_S)) <= 8.0 * DAY_S
    assert suspicion.confidence >= 0.85
    assert "of the usual flow" in suspicion.evidence


@pytest.mark.parametrize(
    "air",
    [Air(), Air(1500.0), Air(15_000.0), Air(floor=900.0), Air(flow=0.97)],
    ids=["the same", "cleaner", "denser", "false counts", "a little less flow"],
)
def test_a_fan_that_is_well_is_left_alone(air: Air) -> None:
    for seed in range(4030, 4034):
        assert weakened(np.random.default_rng(seed), air, 20.0)[1] is None


def test_it_asks_for_wakes_while_it_learns_and_while_it_is_unsure_and_not_for_ever() -> None:
    rng = np.random.default_rng(4040)
    check = FanWeakByWakes()
    assert check.wants_wake(at(NOW))
    asked = 0
    for one in wakes(Air(), rng, 40.0, 12):
        asked += check.wants_wake(one.at)
        check.wake(one)
    assert asked == FanWeakByWakes.EXTRA_WAKES
    well, _ = weakened(rng, Air(), 10.0)
    assert not well.wants_wake(at(NOW + 51.0 * DAY_S))
    unsure = FanWeakByWakes()
    unsure.learnt({"spin_up": usual()})
    asks = []
    for one in wakes(Air(flow=0.7), rng, 4.0, 12, NOW + 40.0 * DAY_S):
        unsure.wake(one)
        asks.append(unsure.wants_wake(one.at))
    assert any(asks)


def test_it_goes_on_after_a_restart_and_begins_anew_with_a_new_fan() -> None:
    rng = np.random.default_rng(4050)
    before, spoke = weakened(rng, Air(flow=0.6), 14.0)
    assert spoke is not None
    after = FanWeakByWakes()
    after.learnt({"spin_up": usual()})
    now = at(NOW + 54.0 * DAY_S)
    after.recall(json.loads(json.dumps(before.memory())), now)
    assert after.judge(now) is not None
    after.service(ServiceKind.FAN_REPLACED, now.utc, now)
    assert after.judge(now) is None


# -- the still fan ------------------------------------------------------------------------------------------------


def stopped(seed: int, air: Air, *, before: Air, asleep_s: float = 510.0, period_s: float = 1.0) -> list[bool]:
    """Whether it holds after each of six wakes of `air`, which follow four hours of `before`."""
    rng = np.random.default_rng(seed)
    check = FanStoppedByWakes(0.1, period_s)
    every = asleep_s + 90.0
    for n in range(int(4.0 * 3600.0 / every)):
        check.wake(wake(before, rng, NOW + n * every, asleep_s=asleep_s, period_s=period_s))
        assert check.judge(at(NOW + n * every)) is None
    holds = []
    for n in range(6):
        moment = NOW + 4.0 * 3600.0 + (n + 1) * every
        check.wake(wake(air if n == 0 else replace(air, old=None), rng, moment, asleep_s=asleep_s, period_s=period_s))
        holds.append(check.judge(at(moment)) is not None)
    return holds


STILL = Air(5000.0, flow=0.0)


@pytest.mark.parametrize("period_s", [1.0, 6.0])
@pytest.mark.parametrize("level", [10_000.0, 40_000.0])
def test_a_fan_that_does_not_start_is_found_at_the_first_wake(level: float, period_s: float) -> None:
    for seed in range(4060, 4063):
        assert all(stopped(seed, Air(level, flow=0.0), before=Air(level), period_s=period_s))


@pytest.mark.parametrize("share", [0.3, 0.05, 0.02, 0.005])
def test_air_that_was_cleaned_while_the_sensor_slept_comes_out_of_the_cell_and_opens_nothing(share: float) -> None:
    for seed in range(4070, 4073):
        cleaned = Air(5000.0 * share, old=0.5 * 5000.0)
        assert not any(stopped(seed, cleaned, before=Air(5000.0)))


def test_a_plume_that_has_gone_is_no_stop() -> None:
    rng = np.random.default_rng(4080)
    check = FanStoppedByWakes(0.1, 1.0)
    for n in range(30):
        level = 40_000.0 if n % 10 == 9 else 800.0
        check.wake(wake(Air(level), rng, NOW + 600.0 * n, asleep_s=510.0))
        assert check.judge(at(NOW + 600.0 * n)) is None


def test_after_a_long_sleep_it_takes_a_day_to_be_sure() -> None:
    rng = np.random.default_rng(4090)
    check = FanStoppedByWakes(0.1, 1.0)
    found = None
    for hour in range(72):
        air = Air(5000.0) if hour < 24 else replace(STILL, level=5000.0)
        check.wake(wake(air, rng, NOW + 3600.0 * hour, asleep_s=3500.0))
        if found is None and check.judge(at(NOW + 3600.0 * hour)) is not None:
            found = hour - 24
    assert found is not None
    assert 23 <= found <= 26


def test_a_still_fan_is_remembered_and_over_when_air_is_back() -> None:
    rng = np.random.default_rng(4100)
    check = FanStoppedByWakes(0.1, 1.0)
    for n in range(24):
        check.wake(wake(Air(5000.0), rng, NOW + 600.0 * n, asleep_s=510.0))
    check.wake(wake(STILL, rng, NOW + 600.0 * 24, asleep_s=510.0))
    memory = check.memory()
    assert memory is not None
    after = FanStoppedByWakes(0.1, 1.0)
    after.recall(json.loads(json.dumps(memory)), at(NOW + 15_000.0))
    assert after.judge(at(NOW + 15_000.0)) is not None
    after.wake(wake(STILL, rng, NOW + 600.0 * 26, asleep_s=510.0))
    assert after.judge(at(NOW + 600.0 * 26)) is not None
    after.wake(wake(Air(4000.0), rng, NOW + 600.0 * 27, asleep_s=510.0))
    assert after.judge(at(NOW + 600.0 * 27)) is None


# -- all of a sensor's checks together ------------------------------------------------------------------------------


def test_a_sensor_that_sleeps_between_is_told_stopped_at_the_wake_after_its_fan_gave_up() -> None:
    rng = np.random.default_rng(4110)
    health = SensorHealth("north", DIALECTS["bm"], 1.0, at(NOW - 600.0))
    opened = []
    for n in range(25):
        woken = NOW + 600.0 * n
        air = Air(10_000.0, flow=float(n < 24))
        health.line(LineState.ASLEEP, at(woken - 510.0))
        health.line(LineState.AWAKE, at(woken))
        for age, frame in frames(air, rng, 1.0):
            if age <= 89.0:
                health.observe(Observation(frame, at(woken + age)))
        health.line(LineState.ASLEEP, at(woken + 90.0))
        opened += [(e.finding.code, n) for e in health.judge(at(woken + 90.0)) if e.opened]
    assert [found for found in opened if found[0] != "warming-up"] == [("fan-stopped", 24)]


def test_an_unsure_stop_asks_for_a_wake_and_a_cell_that_is_flushed_ends_it() -> None:
    def unsure() -> FanStopped:
        rng = np.random.default_rng(4120)
        air = steady(20_000.0, URBAN_AIR, 1500.0, 1.0)
        check = FanStopped(0.1, 1.0)
        feed(check, small_frames(printed(air, Unit(), rng, stopped_at=1200), BM_20), 1.0)
        return check

    check = unsure()
    now = instant(3000.0)
    suspicion = check.judge(now)
    assert suspicion is not None
    assert suspicion.confidence < FanStopped.SURE
    assert check.wants_wake(now)
    one = wake(Air(), np.random.default_rng(4121))
    check.wake(replace(one, shortfalls=(Shortfall(0.0, 0.0, 1e-4),)))
    assert check.judge(now) is not None, "nothing came back: the fan stands still"
    check.wake(replace(one, shortfalls=(Shortfall(0.0, 0.12, 1e-4),)))
    assert check.judge(now) is None
    assert not check.wants_wake(now)
