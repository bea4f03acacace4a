"""Lost light, a floor and daylight, told by a sensor alone from made-up hours of two populations of particles."""

import random
from collections.abc import Callable, Iterator
from math import cos, exp, pi, sin

import pytest

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.floor_alone import FloorRaisedAlone
from motekeep.health.hour import Hour, Levels
from motekeep.health.lessons.shape import ShapeLesson
from motekeep.health.light_leak import LightLeakAlone
from motekeep.health.optics_alone import OpticsFouledAlone
from motekeep.health.shape import BlockBuilder, fit_plane
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind

SIZES = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)
FINE = (5000.0, 1300.0, 60.0, 1.0, 0.02, 0.0)  # /dL above each size: two invented populations
COARSE = (600.0, 300.0, 100.0, 20.0, 3.0, 0.4)
# what a quarter of the light lost takes from each count: steeper where thresholds move further
FOULED = (0.25, 0.45, 0.5, 0.3, 0.45, 0.4)
START = 1_800_000_000.0 // 86_400.0 * 86_400.0
DAY = 24
LEARNT = 15 * DAY

Change = Callable[[int], float]
NONE: Change = lambda hour: 0.0  # noqa: E731 (a default of tests)


def air(
    hours: int, *, floor: Change = NONE, fouled: Change = NONE, flow: Change = NONE, seed: int = 7
) -> Iterator[Hour]:
    """Hours of weather: both populations wander by the hour and by the day, each on its own."""
    chance = random.Random(seed)
    fine = coarse = 0.0
    for i in range(hours):
        fine = 0.97 * fine + 0.15 * chance.gauss(0.0, 1.0)
        coarse = 0.97 * coarse + 0.15 * chance.gauss(0.0, 1.0)
        rush = 0.3 * cos(2.0 * pi * (i - 8) / 24.0)
        counts = []
        for one, other, lost in zip(FINE, COARSE, FOULED, strict=True):
            seen = (one * exp(fine + rush) + other * exp(coarse + rush)) * (1.0 - lost) ** fouled(i)
            counts.append(seen * (1.0 - flow(i)) * (1.0 + chance.gauss(0.0, 0.004)))
        counts[0] += floor(i)
        at = Instant(START + 3600.0 * i, 3600.0 * i, "boot", trusted=True)
        rh = 55.0 + 15.0 * cos(2.0 * pi * (i - 4) / 24.0)
        yield Hour(at, 3600.0, 600, Levels(SIZES, tuple(counts)), (), None, rh, 15.0, sound=True)


def watch(check: Check, hours: Iterator[Hour]) -> list[Suspicion | None]:
    """What the check says after each hour, taught by the lesson as it goes."""
    lesson, said, known = ShapeLesson(), [], None
    for hour in hours:
        lesson.hour(hour)
        if lesson.part() is not known:
            known = lesson.part()
            check.learnt({} if known is None else {"shape": known})
        check.hour(hour)
        said.append(check.judge(at_end(hour)))
    return said


def at_end(hour: Hour) -> Instant:
    return Instant(hour.start.utc + 3600.0, hour.start.boot_s + 3600.0, "boot", trusted=True)


def first(said: list[Suspicion | None]) -> int | None:
    return next((i for i, one in enumerate(said) if one is not None), None)


def later(hour: int, height: float) -> Change:
    return lambda i: height if i >= hour else 0.0


def sun(hour: int, height: float, noon: float) -> Change:
    return lambda i: height * max(sin(pi * ((i % 24 - noon) / 12.0 + 0.5)), 0.0) if i >= hour else 0.0


CHECKS = (OpticsFouledAlone, FloorRaisedAlone, LightLeakAlone)


@pytest.mark.parametrize("kind", CHECKS)
def test_weather_that_changes_both_populations_opens_nothing(kind: type[Check]) -> None:
    assert first(watch(kind(), air(60 * DAY))) is None


@pytest.mark.parametrize("kind", CHECKS)
def test_a_weak_fan_opens_nothing(kind: type[Check]) -> None:
    assert first(watch(kind(), air(50 * DAY, flow=later(20 * DAY, 0.3)))) is None


def test_a_floor_is_found_within_four_days_and_dated_to_its_beginning() -> None:
    said = watch(FloorRaisedAlone(), air(30 * DAY, floor=later(20 * DAY, 900.0)))
    found = first(said)
    assert found is not None
    assert 20 * DAY < found <= 24 * DAY
    suspicion = said[found]
    assert suspicion is not None
    assert suspicion.since == pytest.approx(20 * DAY * 3600.0, abs=12 * 3600.0)
    assert "false counts /dL" in suspicion.evidence


@pytest.mark.parametrize("kind", [OpticsFouledAlone, LightLeakAlone])
def test_a_floor_is_not_taken_for_lost_light_or_daylight(kind: type[Check]) -> None:
    assert first(watch(kind(), air(45 * DAY, floor=later(20 * DAY, 900.0)))) is None


@pytest.mark.parametrize("noon", [3.0, 12.0, 21.0])
def test_daylight_is_found_within_eight_days_wherever_noon_is(noon: float) -> None:
    found = first(watch(LightLeakAlone(), air(30 * DAY, floor=sun(20 * DAY, 700.0, noon))))
    assert found is not None
    assert 20 * DAY < found <= 28 * DAY


@pytest.mark.parametrize("kind", [OpticsFouledAlone, FloorRaisedAlone])
def test_daylight_is_not_taken_for_lost_light_or_a_floor(kind: type[Check]) -> None:
    assert first(watch(kind(), air(45 * DAY, floor=sun(20 * DAY, 700.0, 12.0)))) is None


def test_light_lost_over_weeks_is_found_and_goes_with_a_cleaning() -> None:
    check = OpticsFouledAlone()
    hours = list(air(70 * DAY, fouled=lambda i: min(max(i - 20 * DAY, 0) / (28 * DAY), 1.0)))
    said = watch(check, iter(hours))
    found = first(said)
    assert found is not None
    assert 20 * DAY < found <= 58 * DAY
    suspicion = said[found]
    assert suspicion is not None
    assert 18 * DAY * 3600.0 < suspicion.since < found * 3600.0
    assert said[-1] is not None
    check.service(ServiceKind.CLEANED, hours[-1].start.utc, at_end(hours[-1]))
    assert check.judge(at_end(hours[-1])) is None


def test_a_unit_with_a_floor_from_the_first_day_is_not_learnt_and_is_told_with_less_confidence() -> None:
    check = FloorRaisedAlone()
    said = watch(check, air(20 * DAY, floor=later(0, 2500.0)))
    suspicion = said[-1]
    assert suspicion is not None
    assert suspicion.confidence < 0.7
    lesson = ShapeLesson()
    for hour in air(20 * DAY, floor=later(0, 2500.0)):
        lesson.hour(hour)
    assert lesson.part() is None


def test_hours_in_which_something_is_wrong_teach_nothing() -> None:
    lesson = ShapeLesson()
    for hour in air(LEARNT):
        lesson.hour(Hour(hour.start, 3600.0, 600, hour.levels, (), None, hour.rh_pct, 15.0, sound=False))
    assert lesson.part() is None


def test_the_relation_of_the_channels_is_recovered_with_its_floor() -> None:
    builder = BlockBuilder()
    blocks = [block for hour in air(LEARNT, floor=later(0, 40.0)) if (block := builder.add(hour)) is not None]
    plane = fit_plane(blocks)
    # N(>0.3) = b N(>0.5) + d N(>1) for both populations at once
    determinant = FINE[1] * COARSE[2] - COARSE[1] * FINE[2]
    assert plane.b == pytest.approx((FINE[0] * COARSE[2] - COARSE[0] * FINE[2]) / determinant, rel=0.05)
    assert plane.a == pytest.approx(40.0, abs=40.0)


def test_a_lesson_goes_on_where_it_was_after_a_restart() -> None:
    hours = list(air(LEARNT))
    before, straight = ShapeLesson(), ShapeLesson()
    for hour in hours[: 8 * DAY]:
        before.hour(hour)
    after = ShapeLesson()
    after.recall(before.notes())
    for hour in hours[8 * DAY :]:
        after.hour(hour)
    for hour in hours:
        straight.hour(hour)
    a, b = after.part(), straight.part()
    assert a is not None
    assert b is not None
    assert a.plane.b == pytest.approx(b.plane.b, rel=0.02)
    again = ShapeLesson()
    again.recall(after.notes())
    assert again.part() == a


@pytest.mark.parametrize(
    ("kind", "change"), [(FloorRaisedAlone, later(20 * DAY, 900.0)), (LightLeakAlone, sun(20 * DAY, 700.0, 12.0))]
)
def test_a_finding_survives_a_restart_of_the_gateway(kind: type[Check], change: Change) -> None:
    check = kind()
    hours = list(air(32 * DAY, floor=change))
    before = watch(check, iter(hours))[-1]
    assert before is not None
    memory = check.memory()
    assert memory is not None
    assert sum(len(v) if isinstance(v, list) else 1 for v in memory.values()) < 900
    again = kind()
    rebooted = Instant(hours[-1].start.utc + 4000.0, 100.0, "next boot", trusted=True)
    again.recall(memory, rebooted)
    after = again.judge(rebooted)
    assert after is not None
    assert after.since + rebooted.offset == pytest.approx(before.since + START, abs=1.0)


@pytest.mark.parametrize("kind", CHECKS)
@pytest.mark.parametrize("spoilt", [{"blocks": [1.0, 2.0]}, {"days": "x"}, {"since": float("nan")}, {"bends": [1.0]}])
def test_a_memory_that_cannot_be_read_is_left_out(kind: type[Check], spoilt: dict[str, object]) -> None:
    check = kind()
    at = Instant(START, 0.0, "boot", trusted=True)
    check.recall(spoilt, at)  # type: ignore[arg-type] # as it may come out of a file
    assert check.judge(at) is None
