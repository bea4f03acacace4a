"""unit-swapped by noise: another averaging is another unit; air, dirt and fans are not."""

import json

import numpy as np
import pytest

from health.noise_intervals import START, Counter, flicker, intervals
from motekeep.health.behaviour import BehaviourSwapped
from motekeep.health.lessons.noise import Noise
from motekeep.instant import Instant
from motekeep.measure.interval import Interval

OLD = [Counter(80.0, 3), Counter(13.0, 3, 6.0)]


def at(boot_s: float) -> Instant:
    return Instant(1.8e9 + boot_s, boot_s, "one", trusted=True)


def check_of(counter: Counter) -> BehaviourSwapped:
    check = BehaviourSwapped()
    check.learnt({"noise": Noise(counter.scale, counter.averaging)})
    return check


def first(check: BehaviourSwapped, made: list[Interval]) -> float | None:
    """The minute in which it first held."""
    for interval in made:
        check.interval(interval)
        end: float = interval.start.boot_s + interval.seconds
        if check.judge(at(end)) is not None:
            return (end - START) / 60.0
    return None


@pytest.mark.parametrize("old", OLD, ids=str)
@pytest.mark.parametrize("averaging", [1, 10])
def test_a_unit_that_averages_otherwise_is_told_within_minutes(old: Counter, averaging: int) -> None:
    rng = np.random.default_rng(21)
    new = Counter(old.scale, averaging, old.period_s)
    check = check_of(old)
    assert first(check, old.minutes(60, rng)) is None
    minute = first(check, new.minutes(20, rng, start_s=START + 3600.0))
    assert minute is not None
    assert 60.0 < minute <= 66.0
    suspicion = check.judge(at(START + 60.0 * minute))
    assert suspicion is not None
    assert suspicion.confidence < 0.95  # the revision byte is surer


@pytest.mark.parametrize("old", OLD, ids=str)
def test_hours_of_the_same_unit_in_flickering_air_with_a_surging_fan_opens_nothing(old: Counter) -> None:
    rng = np.random.default_rng(22)
    frames = 360 * old.frames_a_minute
    factor = flicker(frames, 0.25, 4.0, old.period_s, rng) * flicker(frames, 0.6, 60.0, old.period_s, rng)
    assert first(check_of(old), old.minutes(360, rng, factor)) is None


def test_an_output_that_freezes_or_goes_to_nothing_is_no_other_unit() -> None:
    old = OLD[0]
    rng = np.random.default_rng(23)
    rows = old.printed(np.ones((7200, 1)), rng)
    rows[3630:] = rows[3630]
    assert first(check_of(old), list(intervals(rows, 60, START))) is None
    factor = np.concatenate([np.ones((3600, 1)), np.full((3600, 1), 0.01)])
    assert first(check_of(old), old.minutes(120, rng, factor)) is None


def test_it_holds_until_the_old_unit_is_back_or_the_new_one_is_learnt() -> None:
    old, new = Counter(80.0, 3), Counter(80.0, 10)
    rng = np.random.default_rng(24)
    check = check_of(old)
    assert first(check, new.minutes(10, rng)) is not None
    first(check, new.minutes(60, rng, start_s=START + 600.0))
    assert check.judge(at(START + 4200.0)) is not None
    for interval in old.minutes(15, rng, start_s=START + 4200.0):
        check.interval(interval)
    assert check.judge(at(START + 5100.0)) is None
    first(check, new.minutes(10, rng, start_s=START + 5100.0))
    memory = check.memory()
    assert memory is not None
    again = check_of(old)
    again.recall(json.loads(json.dumps(memory)), at(START))
    assert again.judge(at(START)) is not None
    again.learnt({})  # a record `unit-replaced` has made the lesson begin again
    assert again.judge(at(START)) is None
