"""fan-surging: found within an hour at both cadences, and not opened by air that flickers."""

import json

import numpy as np
import pytest

from health.noise_intervals import LEVELS, START, Counter, Floats, flicker, without_counts
from motekeep.health.fan_surging import FanSurging, shape_of
from motekeep.health.lessons.noise import Noise
from motekeep.instant import Instant
from motekeep.measure.interval import Interval

UNITS = [Counter(80.0, 1), Counter(80.0, 3), Counter(80.0, 10), Counter(13.0, 3, 6.0), Counter(13.0, 10, 6.0)]
BEFORE, AFTER = 120, 90  # minutes


def at(boot_s: float) -> Instant:
    return Instant(1.8e9 + boot_s, boot_s, "one", trusted=True)


def check_of(counter: Counter) -> FanSurging:
    check = FanSurging(counter.period_s)
    check.learnt({"noise": Noise(counter.scale, counter.averaging)})
    return check


def holds(check: FanSurging, made: list[Interval]) -> list[tuple[float, float]]:
    """(minutes since the start, since in minutes) of each interval's end at which it held."""
    found = []
    for interval in made:
        check.interval(interval)
        end = interval.start.boot_s + interval.seconds
        suspicion = check.judge(at(end))
        if suspicion is not None:
            found.append(((end - START) / 60.0, (suspicion.since - START) / 60.0))
    return found


def surging(counter: Counter, rng: np.random.Generator, sd: float = 0.25, minutes: int = AFTER) -> Floats:
    frames = counter.frames_a_minute
    quiet = np.ones((BEFORE * frames, 1))
    return np.concatenate([quiet, flicker(minutes * frames, sd, 4.0, counter.period_s, rng)])


@pytest.mark.parametrize("counter", UNITS, ids=str)
@pytest.mark.parametrize("level", [300.0, 10_000.0])
def test_a_quarter_of_surging_is_found_within_an_hour_and_dated(counter: Counter, level: float) -> None:
    levels = tuple([level * share / LEVELS[0] for share in LEVELS])
    counter = Counter(counter.scale, counter.averaging, counter.period_s, levels)
    rng = np.random.default_rng(11)
    found = holds(check_of(counter), counter.minutes(BEFORE + AFTER, rng, surging(counter, rng)))
    minute, since = found[0]
    assert BEFORE < minute <= BEFORE + 60
    assert abs(since - BEFORE) <= 15.0
    assert found[-1][0] == BEFORE + AFTER  # and goes on


@pytest.mark.parametrize("counter", UNITS, ids=str)
def test_steady_air_opens_nothing(counter: Counter) -> None:
    assert holds(check_of(counter), counter.minutes(6 * 60, np.random.default_rng(12))) == []


@pytest.mark.parametrize("counter", UNITS, ids=str)
def test_air_that_flickers_over_a_minute_for_hours_opens_nothing(counter: Counter) -> None:
    # 80 % with a time constant of a minute, smoothed by a cell that is flushed in 5 s: fireworks without an end
    rng = np.random.default_rng(13)
    fine = flicker(4 * 3600, 0.8, 60.0, 1.0, rng)
    smoothed = np.apply_along_axis(np.convolve, 0, fine, np.exp(-np.arange(30) / 5.0) / 5.5, mode="same")
    factor = smoothed[:: round(counter.period_s)]
    assert holds(check_of(counter), counter.minutes(240, rng, factor)) == []


@pytest.mark.parametrize("counter", UNITS, ids=str)
def test_a_quarter_of_an_hour_of_surging_opens_nothing(counter: Counter) -> None:
    rng = np.random.default_rng(14)
    quiet = np.ones((60 * counter.frames_a_minute, 1))
    factor = np.concatenate([surging(counter, rng, minutes=15), quiet])
    assert holds(check_of(counter), counter.minutes(BEFORE + 75, rng, factor)) == []


def test_a_flicker_that_only_the_smallest_channel_has_is_a_source_and_no_fan() -> None:
    counter = Counter()
    rng = np.random.default_rng(15)
    ones = np.ones((180 * 60, 5))
    factor = np.concatenate([flicker(180 * 60, 0.25, 4.0, 1.0, rng), ones], axis=1)
    assert holds(check_of(counter), counter.minutes(180, rng, factor)) == []


def test_another_unit_with_another_averaging_is_no_surge() -> None:
    learnt, other = Counter(80.0, 10), Counter(80.0, 3)
    made = other.minutes(180, np.random.default_rng(16))
    assert holds(check_of(learnt), made) == []


def test_it_closes_when_the_fan_runs_smoothly_again() -> None:
    counter = Counter()
    rng = np.random.default_rng(17)
    factor = np.concatenate([surging(counter, rng), np.ones((120 * 60, 1))])
    found = holds(check_of(counter), counter.minutes(BEFORE + AFTER + 120, rng, factor))
    assert BEFORE + AFTER < found[-1][0] < BEFORE + AFTER + 60


def test_nothing_is_said_before_the_noise_is_learnt_or_without_counts() -> None:
    counter = Counter()
    rng = np.random.default_rng(18)
    made = counter.minutes(BEFORE + AFTER, rng, surging(counter, rng))
    assert holds(FanSurging(1.0), made) == []
    assert holds(check_of(counter), [without_counts(interval) for interval in made]) == []


def test_it_is_remembered_across_a_restart_and_its_evidence_can_be_checked() -> None:
    counter = Counter()
    rng = np.random.default_rng(19)
    check = check_of(counter)
    holds(check, counter.minutes(BEFORE + AFTER, rng, surging(counter, rng)))
    suspicion = check.judge(at(START))
    assert suspicion is not None
    assert "flow flickers within seconds by 2" in suspicion.evidence
    memory = check.memory()
    assert memory is not None
    again = check_of(counter)
    again.recall(json.loads(json.dumps(memory)), at(START))
    assert again.judge(at(START)) is not None


@pytest.mark.parametrize(("averaging", "period_s", "frames"), [(1, 1.0, 60), (10, 1.0, 60), (3, 6.0, 10)])
def test_the_shape_of_a_flicker_is_that_of_a_simulation(averaging: int, period_s: float, frames: int) -> None:
    rng = np.random.default_rng(20)
    count = 4000
    x = np.log(flicker(count * frames + averaging, 1.0, 4.0, period_s, rng)[:, 0]) + 0.5
    total = np.cumsum(x)
    pooled = ((total[averaging:] - total[:-averaging]) / averaging).reshape(count, frames)
    shape = shape_of(4.0, period_s, averaging, frames)
    assert shape.step == pytest.approx(np.mean(np.diff(pooled, axis=1) ** 2) / 2.0, rel=0.05)
    assert shape.variance == pytest.approx(pooled.var(axis=1, ddof=1).mean(), rel=0.05)
